"""Fits the fusion network on simulated recordings: rendering, training, and a card beside the weights."""

from __future__ import annotations

import logging
from collections.abc import Callable
from pathlib import Path

from enhance.errors import JobError

logger = logging.getLogger(__name__)

#: Held-out recordings: three of every kind of scene.
HELD_OUT = 36
#: Steps that are timed, and steps before them, to tell how many fit into the minutes asked for.
TIMED, BEFORE = 12, 3

__all__ = ["run"]


def run(
    folder: Path,
    *,
    minutes: float,
    recordings: int,
    seed: int,
    resume: bool,
    ablations: float = 0.0,
    processes: int = 2,
    progress: Callable[[int, int, str], None] | None = None,
) -> Path:
    """Fit the fusion network.

    Rendering comes first and is not part of the minutes. How many steps fit into them is timed once and then kept: a
    training that is taken up again is the same training.

    Parameters
    ----------
    folder : Path
        Gets ``recordings/``, the state, the best weights so far, ``curve.csv``, and as the result
        ``fusion.safetensors``, ``fusion.json`` and ``fusion.md``.
    minutes : float
        How long to train, about; a training taken up again goes to the end planned at first.
    recordings : int
        How many to render.
    seed : int
        Of the recordings and the weights.
    resume : bool
        Take up the training that stands in the folder.
    ablations : float
        Minutes to fit each of the networks that lack something, for the card; none of them if 0.
    processes : int
        That render. Any number leaves the same recordings.
    progress : callable, optional
        Called with steps done, steps in all and words.

    Returns
    -------
    Path
        The weights.

    Raises
    ------
    JobError
        If a training stands in the folder and `resume` is not asked for, or the other way round, or if it was begun
        with another seed.
    ModelError
        If the state in the folder cannot be read.
    """
    from enhance.train.card import write_card
    from enhance.train.data import load_shard, make_shards, shard_path
    from enhance.train.fit import STATE, Crops, Settings, Training, fit, load_state
    from enhance.train.lacking import measure_ablations

    stands = (folder / STATE).is_file()
    if stands and not resume:
        raise JobError(f"{folder}: a training stands here already; take it up with --resume, or name another folder")
    if resume and not stands:
        raise JobError(f"{folder}: there is no training to take up ({STATE} is missing); begin one without --resume")
    training = load_state(folder) if resume else None
    if training and training.settings.seed != seed:
        raise JobError(
            f"{folder}: this training was begun with seed {training.settings.seed}, not {seed}; "
            f"give --seed {training.settings.seed}, or begin anew in another folder"
        )
    shelf = folder / "recordings"
    make_shards(shelf, seed, range(HELD_OUT), held_out=True, processes=processes)
    make_shards(shelf, seed, range(recordings), processes=processes)
    held_out = [load_shard(shard_path(shelf, seed, index, held_out=True)) for index in range(HELD_OUT)]
    crops = Crops([load_shard(shard_path(shelf, seed, index)) for index in range(recordings)])
    if training is None:
        training = Training.begin(Settings(_steps_within(60 * minutes, crops), seed))
        logger.info("%d steps of about %.0f ms", training.settings.steps, 6e4 * minutes / training.settings.steps)
    fit(training, crops, held_out, folder, progress)
    lacking = {}
    if ablations:
        steps = max(1, round(training.settings.steps * ablations / minutes))
        lacking = measure_ablations(folder / "ablations", crops, held_out, steps, seed, progress)
    return write_card(training, held_out, recordings, minutes, folder, lacking)


def _steps_within(seconds: float, crops: object) -> int:
    """Time a few steps on a network that is thrown away."""
    import time

    import torch

    from enhance.train.fit import Crops, Settings, Training, train_step

    assert isinstance(crops, Crops)
    trial = Training.begin(Settings(TIMED + BEFORE))
    torch.set_num_threads(trial.settings.threads)
    for _ in range(BEFORE):
        train_step(trial, crops)
    began = time.monotonic()
    for _ in range(TIMED):
        train_step(trial, crops)
    return max(1, round(seconds * TIMED / (time.monotonic() - began)))
