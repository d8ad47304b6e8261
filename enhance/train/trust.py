"""Fits what trust rests on, on simulated recordings with rigs measured as the tool does, and judges it on others."""

from __future__ import annotations

import json
import logging
from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from functools import partial
from multiprocessing import get_context
from pathlib import Path
from typing import Any

import numpy as np
import torch
from numpy.typing import NDArray

from enhance.calibrate import calibrate
from enhance.clip.keys import Keys, fused
from enhance.clip.pictures import Pictures
from enhance.errors import CalibrationError
from enhance.interpolate.network import FusionNetwork, load_network
from enhance.interpolate.trust import FLOOR, KINDS, Fitted, Map, cause_maps, frame_cause_maps, own_signal
from enhance.kernels.optical_flow import flow_between, moved_sides
from enhance.measure import rank_correlation
from enhance.rig import RiggedEvents
from enhance.settings import RigSettings
from enhance.train.recipe import draw_recipe
from enhance.train.spoil import Sample, record
from enhance.write import write_text

logger = logging.getLogger(__name__)

Progress = Callable[[int, int, str], None]

#: Frames of each recording: enough for the rig to be measured from them.
FRAMES = 9
#: Spans and keys of each recording that are used, and instants of each span.
SPANS, KEYS_USED, INSTANTS = 4, 4, 2
#: Squared error below which a picture counts as flawless: 80 dB.
LEAST_ERROR = 1e-8
#: Fitting: steps, rate, the deviation in ln of the squared error beyond which a picture pulls no harder, and how dear
#: powers are.
STEPS, RATE, HUBER, PRICE = 1_500, 0.03, 1.0, 0.1
#: What trust should reach on recordings it was not fitted on.
WITHIN_DB = 2.0


@dataclass(frozen=True)
class Row:
    """One picture: its kind (of `KINDS`), recording, mean of each cause's map, and true mean squared error."""

    kind: str
    recording: int
    causes: NDArray[np.float64]
    error: float


def gather(seed: int, index: int, network: FusionNetwork, held_out: bool = False) -> list[Row]:
    """Make pictures of one simulated recording of which the truth is known; the rig is measured, not told.

    Parameters
    ----------
    seed, index, held_out
        As in `draw_recipe`.
    network : FusionNetwork

    Returns
    -------
    list of Row
        None where the rig cannot be measured: then no picture is made from events either.
    """
    recipe, rng = draw_recipe(seed, index, held_out)
    sample = record(replace(recipe, keys=FRAMES), rng)
    try:
        rig = calibrate(sample.recording, range(FRAMES), RigSettings())
    except CalibrationError:
        return []
    if rig.offset_us.value is None:
        return []
    frames = sample.recording.frames
    keys = Keys(frames, range(FRAMES), RiggedEvents(sample.recording.events, rig, recipe.size), rig, network)
    spans = rng.choice(FRAMES - 1, SPANS, replace=False).tolist()
    shares = rng.uniform(0.05, 0.95, (SPANS, INSTANTS))
    rows = []
    for kind, maps, picture, time_us in (
        *_inserted(keys, dict(zip(spans, shares, strict=True))),
        *_deblurred(keys, rng.choice(FRAMES, KEYS_USED, replace=False).tolist()),
    ):
        error = _squared_error(sample, picture, time_us)
        rows.append(Row(kind, index, maps.mean(axis=(1, 2), dtype=np.float64), error))
    return rows


def _squared_error(sample: Sample, picture: Map, time_us: int) -> float:
    light = sample.recording.frames.light
    truth = np.asarray(sample.truth(time_us), dtype=np.float32)
    return float(np.mean((own_signal(picture, light) - own_signal(truth, light)) ** 2, dtype=np.float64))


Made = tuple[str, Map, Map, int]


def _inserted(keys: Keys, instants: Mapping[int, NDArray[np.float64]]) -> Iterator[Made]:
    """Pictures between keys, by every means: kind, causes, light, time."""
    light, rig, pictures = keys.frames.light, keys.rig, Pictures(keys)
    for key, shares in instants.items():
        start, end = keys.times_us[key], keys.times_us[key + 1]
        miss, span = keys.miss((key,)), pictures.span(key)
        there, back = flow_between(*span.luma), flow_between(*span.luma[::-1])
        for share in shares:
            time_us = start + int(share * (end - start))
            candidates = span.at(time_us)
            for network in (keys.network, None):
                made = fused(network, candidates)
                maps = cause_maps(candidates, made.light, made.spread, miss, light, rig)
                yield f"inserted by {made.by}", maps, made.light, time_us
            w = np.float32(candidates.weight)
            sides = np.stack(moved_sides(*span.luma, there, back, w))
            plain = (1 - w) * sides[0] + w * sides[1]
            yield "inserted by frames", frame_cause_maps(sides, there, plain, light, rig), plain, time_us


def _deblurred(keys: Keys, chosen: Sequence[int]) -> Iterator[Made]:
    """Keys, with and without the network."""
    for key in chosen:
        candidates = keys.candidates(key)
        if candidates is None:
            continue
        miss = keys.miss((key - 1, key))
        for network in (keys.network, None):
            made = fused(network, candidates)
            maps = cause_maps(candidates, made.light, made.spread, miss, keys.frames.light, keys.rig)
            yield f"deblurred by {made.by}", maps, made.light, keys.times_us[key]


def fit(rows: Sequence[Row]) -> Fitted:
    """Fit one kind of picture: robust least squares of the logarithm of the squared error.

    Parameters
    ----------
    rows : sequence of Row
        Of one kind.

    Returns
    -------
    Fitted
    """
    # One thread always: how many there are must not decide the bytes.
    torch.set_num_threads(1)
    causes = np.maximum(np.stack([row.causes for row in rows]), 1e-15)
    logs = np.log(np.maximum(causes, FLOOR))
    centre, width = logs.mean(axis=0), logs.std(axis=0) + 1e-6
    known, scaled = torch.from_numpy(causes / causes.mean(axis=0)), torch.from_numpy((logs - centre) / width)
    wanted = torch.log(torch.tensor([row.error + LEAST_ERROR for row in rows], dtype=torch.float64))
    # Coefficients are exponentials, so that none is negative; they start as equal shares of the mean error.
    count = causes.shape[1]
    free = torch.full((count,), float(wanted.mean()) - np.log(count), dtype=torch.float64, requires_grad=True)
    powers = torch.zeros(count, dtype=torch.float64, requires_grad=True)
    optimizer = torch.optim.Adam([free, powers], lr=RATE)
    for _ in range(STEPS):
        optimizer.zero_grad()
        expected = torch.log(known @ torch.exp(free)) + scaled @ powers
        loss = torch.nn.functional.huber_loss(expected, wanted, delta=HUBER) + PRICE * (powers**2).sum()
        loss.backward()
        optimizer.step()
    return Fitted(np.exp(free.detach().numpy()) / causes.mean(axis=0), powers.detach().numpy() / width, np.exp(centre))


def figures(rows: Sequence[Row], fitted: Fitted) -> dict[str, float | None]:
    """Say how far expected figures hold on pictures of one kind.

    Parameters
    ----------
    rows : sequence of Row
    fitted : Fitted

    Returns
    -------
    dict
        Share within 2 dB, bias, rank correlation over all, and its mean within recordings.
    """
    expected = [-10 * np.log10(fitted.error_map(row.causes[:, None, None].astype(np.float32)).item()) for row in rows]
    true = [-10 * np.log10(row.error + LEAST_ERROR) for row in rows]
    off = np.subtract(expected, true)
    within = []
    for recording in sorted({row.recording for row in rows}):
        chosen = [k for k, row in enumerate(rows) if row.recording == recording]
        ranked = rank_correlation([expected[k] for k in chosen], [true[k] for k in chosen])
        within += [] if ranked is None else [ranked]
    return {
        "pictures": len(rows),
        "within_2_db": float(np.mean(np.abs(off) <= WITHIN_DB)),
        "bias_db": float(off.mean()),
        "rank_correlation": rank_correlation(expected, true),
        "rank_correlation_within_recordings": float(np.mean(within)) if within else None,
    }


def run_trust(
    folder: Path,
    weights: Path,
    *,
    recordings: int,
    held_out: int,
    seed: int,
    processes: int = 2,
    progress: Progress | None = None,
) -> Path:
    """Fit trust for a network and write ``trust.json`` into a folder.

    Parameters
    ----------
    folder, weights : Path
    recordings, held_out : int
        How many are fitted on, and how many others judge the fit.
    seed : int
    processes : int
        Any number gives the same file.
    progress : callable, optional
        Called with recordings done, all of them, and words.

    Returns
    -------
    Path
    """
    rows = partial(_rows, weights, seed, processes, progress)
    return write_trust_model(folder, rows(recordings, False), rows(held_out, True), seed)


def write_trust_model(folder: Path, fitted_on: Sequence[Row], judged: Sequence[Row], seed: int) -> Path:
    """Fit on some pictures, judge by others, and write ``trust.json`` into a folder."""
    table: dict[str, Any] = {"kinds": {}, "held_out": {}}
    for kind, causes in KINDS.items():
        fitted = fit([row for row in fitted_on if row.kind == kind])
        values = np.stack([fitted.coefficients, fitted.powers, fitted.centre], axis=1).tolist()
        table["kinds"][kind] = dict(zip(causes, values, strict=True))
        found = figures([row for row in judged if row.kind == kind], fitted)
        table["held_out"][kind] = {name: None if v is None else round(v, 3) for name, v in found.items()}
        logger.info("trust in pictures %s: %s", kind, table["held_out"][kind])
    counts = [len({row.recording for row in rows}) for rows in (fitted_on, judged)]
    table["fitted_on"] = f"{counts[0]} simulated recordings, seed {seed}; judged on {counts[1]} others"
    path = folder / "trust.json"
    write_text(path, json.dumps(table, indent=1) + "\n")
    return path


def _rows(weights: Path, seed: int, processes: int, progress: Progress | None, count: int, held_out: bool) -> list[Row]:
    work = partial(_gather, weights, seed, held_out)
    rows: list[Row] = []
    with ProcessPoolExecutor(processes, mp_context=get_context("spawn")) as pool:
        for done, found in enumerate(pool.map(work, range(count)), 1):
            rows += found
            if progress:
                progress(done, count, "making pictures to judge trust by")
    return rows


def _gather(weights: Path, seed: int, held_out: bool, index: int) -> list[Row]:
    import cv2

    # One thread a process; the pictures are the same for any number.
    cv2.setNumThreads(1)
    return gather(seed, index, load_network(weights), held_out)
