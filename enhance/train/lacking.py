"""Fits networks that lack something and scores them beside one that lacks nothing, all with the same few steps."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import torch

from enhance.train import fit, score
from enhance.train.ablation import ABLATIONS, ablated
from enhance.train.data import Shard


def measure_ablations(
    folder: Path,
    crops: fit.Crops,
    held_out: Sequence[Shard],
    steps: int,
    seed: int,
    progress: fit.Progress | None = None,
    chosen: Sequence[str] = ("", *ABLATIONS),
) -> dict[str, Any]:
    """Fit one network for each ablation; one that stands finished in the folder is used as it is.

    Parameters
    ----------
    folder : Path
        Gets one folder for each.
    crops : Crops
    held_out : sequence of Shard
    steps, seed : int
    progress : callable, optional
    chosen : sequence of str
        Of `ABLATIONS`; empty is the network that lacks nothing.

    Returns
    -------
    dict
        ``steps``, and under ``networks`` the mean PSNR over the kinds of scene, of inserted pictures and of keys.
    """
    found = {}
    for without in chosen:
        place = folder / (without or "nothing")
        place.mkdir(parents=True, exist_ok=True)
        settings = fit.Settings(steps, seed, without=without, round_steps=max(1, steps // 3))
        training = fit.load_state(place) if (place / fit.STATE).is_file() else fit.Training.begin(settings)
        seen = [_without(shard, without) for shard in held_out]
        fit.fit(training, crops, seen, place, progress)
        column = "without_residual" if without == "residual" else "network"
        tables = {
            name: score.score(training.average, seen, keys=keys) for name, keys in (("inserted", False), ("keys", True))
        }
        found[without or "nothing"] = {
            name: round(score.mean_over_groups(table)[column], 2) for name, table in tables.items()
        }
    return {"steps": steps, "networks": found}


def _without(shard: Shard, without: str) -> Shard:
    return replace(shard, inputs=ablated(torch.from_numpy(shard.inputs), without).numpy().astype(np.float16))
