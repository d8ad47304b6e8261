"""Fits the fusion network on simulated recordings: rendering, training, and a card beside the weights."""

from __future__ import annotations

import logging
import math
from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

from enhance.errors import JobError

if TYPE_CHECKING:
    from enhance.train.data import Shard
    from enhance.train.fit import Crops

logger = logging.getLogger(__name__)

#: Steps done, steps in all, what is being done.
Progress = Callable[[int, int, str], None]

#: Held-out recordings: three of every kind of scene.
HELD_OUT = 36
#: Share of the recordings and of the steps that see keys not yet refined by the network.
FIRST_RECORDINGS, FIRST_STEPS = 0.6, 1 / 3
#: Steps that are timed, and steps before them, to tell how many fit into the minutes asked for.
TIMED, BEFORE = 12, 3

#: Names of what a training is asked for, as `run` has them.
OPTIONS = ("minutes", "recordings", "seed", "resume", "ablations", "trust")

__all__ = ["OPTIONS", "run"]


def run(
    folder: Path,
    *,
    minutes: float,
    recordings: int,
    seed: int,
    resume: bool,
    ablations: float = 0.0,
    trust: int = 0,
    processes: int = 2,
    progress: Progress | None = None,
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
        How many to render, at least two.
    seed : int
        Of the recordings and the weights.
    resume : bool
        Take up the training that stands in the folder.
    ablations : float
        Minutes to fit each of the networks that lack something, for the card; none of them if 0.
    trust : int
        Recordings to fit trust on, for ``trust.json``; none is written if 0.
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
    from enhance.train.card import WEIGHTS, write_card, write_weights
    from enhance.train.fit import STATE, Settings, Training, fit, load_state
    from enhance.train.lacking import measure_ablations
    from enhance.train.trust import run_trust

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
    first = min(max(1, round(recordings * FIRST_RECORDINGS)), recordings - 1)
    made = partial(_made, seed, processes, progress)
    crops, held_out = made(folder / "recordings", range(first))
    if training is None:
        steps = _steps_within(60 * minutes, crops)
        training = Training.begin(Settings(steps, seed, first=round(steps * FIRST_STEPS)))
        logger.info("%d steps of about %.0f ms", steps, 6e4 * minutes / steps)
    refining = folder / "refining" / WEIGHTS
    if training.step < training.settings.first:
        fit(training, crops, held_out, folder, progress, until=training.settings.first)
        write_weights(training.average, refining)
        training.best = -math.inf
    # Where it is used, the network gets keys that it has refined itself.
    crops, held_out = made(folder / "recordings-refined", range(first, recordings), refining)
    fit(training, crops, held_out, folder, progress)
    lacking = {}
    if ablations:
        few = max(1, round(training.settings.steps * ablations / minutes))
        lacking = measure_ablations(folder / "ablations", crops, held_out, few, seed, progress)
    path = write_card(training, held_out, recordings, minutes, folder, lacking)
    if trust:
        run_trust(folder, path, recordings=trust, held_out=HELD_OUT, seed=seed, processes=processes, progress=progress)
    return path


def _made(
    seed: int, processes: int, progress: Progress | None, shelf: Path, indices: range, weights: Path | None = None
) -> tuple[Crops, list[Shard]]:
    """Make recordings to fit on, and held-out ones; those that are there are used as they are."""
    from enhance.train.data import load_shard, make_shards, shard_path
    from enhance.train.fit import Crops

    asked: dict[str, Any] = {"processes": processes, "weights": weights, "progress": progress}
    make_shards(shelf, seed, range(HELD_OUT), held_out=True, **asked)
    make_shards(shelf, seed, indices, **asked)
    crops = Crops([load_shard(shard_path(shelf, seed, index)) for index in indices])
    return crops, [load_shard(shard_path(shelf, seed, index, held_out=True)) for index in range(HELD_OUT)]


def _steps_within(seconds: float, crops: Crops) -> int:
    """Time a few steps on a network that is thrown away."""
    import time

    import torch

    from enhance.train.fit import Settings, Training, train_step

    trial = Training.begin(Settings(TIMED + BEFORE))
    torch.set_num_threads(trial.settings.threads)
    for _ in range(BEFORE):
        train_step(trial, crops)
    began = time.monotonic()
    for _ in range(TIMED):
        train_step(trial, crops)
    return max(1, round(seconds * TIMED / (time.monotonic() - began)))
