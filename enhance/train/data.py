"""What the network is fitted on: for instants of simulated recordings, what is known of them and the sharp truth.

One file a recording: crops for training, whole pictures for held-out recordings. A file that is there already is kept,
so that making them can be interrupted, and shared between processes.
"""

from __future__ import annotations

import json
import zipfile
from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from contextlib import ExitStack
from dataclasses import asdict, dataclass
from functools import partial
from multiprocessing import get_context
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from enhance.clip.keys import Keys
from enhance.clip.pictures import Pictures
from enhance.interpolate import Candidates
from enhance.interpolate.network import FusionNetwork, load_network, network_inputs
from enhance.rig import RiggedEvents
from enhance.train.recipe import Rng, draw_recipe
from enhance.train.spoil import Sample, record, signal
from enhance.write.whole import whole_file

#: Side of a training crop, pixels.
CROP = 96
#: Instants between keys and keys of a recording that are used, and those of a held-out one.
INSTANTS, KEYS, HELD_OUT_INSTANTS, HELD_OUT_KEYS = 6, 2, 4, 2
#: Crops of each, and the share of those that lie anywhere, not at events: rest must stay rest.
CROPS, ANYWHERE = 3, 0.25
#: Changes whenever files made before must not be used any more.
VERSION = 2

Half = NDArray[np.float16]


@dataclass(frozen=True)
class Shard:
    """Instants of one recording, those between keys first, then keys.

    Parameters
    ----------
    inputs : ndarray of float16, shape (N, INPUTS, h, w)
        Channels of `network_inputs`.
    truth : ndarray of float16, shape (N, 1, h, w)
        Signal.
    recipe : dict
        What the recording was.
    """

    inputs: Half
    truth: Half
    recipe: dict[str, Any]


def make_shard(seed: int, index: int, held_out: bool = False, network: FusionNetwork | None = None) -> Shard:
    """Record, make keys and candidates, and keep what the network is fitted on.

    Parameters
    ----------
    seed, index, held_out
        As in `draw_recipe`.
    network : FusionNetwork, optional
        Fitted before: refines the keys that pictures are inserted between, as it will where it is used.

    Returns
    -------
    Shard
        Crops of `CROP` pixels; whole pictures if held out.
    """
    recipe, rng = draw_recipe(seed, index, held_out)
    sample = record(recipe, rng)
    frames = sample.recording.frames
    events = RiggedEvents(sample.recording.events, sample.rig, recipe.size)
    pictures = Pictures(Keys(frames, range(len(frames)), events, sample.rig, network))
    inputs, truth = [], []
    for time_us, key, candidates in _known(pictures, held_out, rng):
        known = network_inputs(candidates).astype(np.float16)
        sharp = signal(sample.truth(time_us)).astype(np.float16)[None]
        if held_out:
            inputs.append(known)
            truth.append(sharp)
            continue
        for row, column in _corners(pictures, key, sharp.shape[-2:], rng):
            inputs.append(known[:, row : row + CROP, column : column + CROP])
            truth.append(sharp[:, row : row + CROP, column : column + CROP])
    return Shard(np.stack(inputs), np.stack(truth), _described(sample))


def _known(pictures: Pictures, held_out: bool, rng: Rng) -> Iterator[tuple[int, int, Candidates]]:
    """Make candidates of instants between keys, then of keys: time, the key before (or a key near) and candidates."""
    keys = pictures.keys
    for time_us, key in _instants(keys, HELD_OUT_INSTANTS if held_out else INSTANTS, rng):
        yield time_us, key, pictures.span(key).at(time_us)
    for key in rng.choice(len(keys), HELD_OUT_KEYS if held_out else KEYS, replace=False).tolist():
        candidates = keys.candidates(key)
        # Without a neighbour that events tell about there is nothing to refine a key by.
        if candidates is not None:
            yield keys.times_us[key], min(key, len(keys) - 2), candidates


def _instants(keys: Keys, count: int, rng: Rng) -> list[tuple[int, int]]:
    """Draw instants inside spans, as even over the spans as can be, with the key each span starts at."""
    spans = [k % (len(keys) - 1) for k in range(count)]
    shares = rng.uniform(0.04, 0.96, count)
    times = keys.times_us
    return sorted(
        (times[k] + round(share * (times[k + 1] - times[k])), k) for k, share in zip(spans, shares, strict=True)
    )


def _corners(pictures: Pictures, key: int, shape: Sequence[int], rng: Rng) -> list[tuple[int, int]]:
    """Corners (row, column) of crops, most of them around an event, a few anywhere."""
    most = np.array(shape) - CROP
    events = pictures.keys.span_events(key)
    corners = []
    for _ in range(CROPS):
        if len(events) and rng.random() >= ANYWHERE:
            one = int(rng.integers(len(events)))
            centre = np.array([events.y[one], events.x[one]], dtype=np.int64) + rng.integers(-CROP // 3, CROP // 3, 2)
            corner = np.clip(centre - CROP // 2, 0, most)
        else:
            corner = rng.integers(0, most + 1)
        corners.append((int(corner[0]), int(corner[1])))
    return corners


def _described(sample: Sample) -> dict[str, Any]:
    frames = sample.recording.frames
    return asdict(sample.recipe) | {"read_as": frames.light.curve, "events": sample.recording.events.count}


def shard_path(folder: Path, seed: int, index: int, held_out: bool = False) -> Path:
    """Where a recording's file stands."""
    return folder / f"{'held-out' if held_out else 'train'}-v{VERSION}-{seed}-{index:05d}.npz"


def make_shards(
    folder: Path,
    seed: int,
    indices: Sequence[int],
    held_out: bool = False,
    processes: int = 1,
    weights: Path | None = None,
    progress: Callable[[int, int, str], None] | None = None,
) -> None:
    """Make the files of many recordings; those that are there already are kept.

    Parameters
    ----------
    folder : Path
    seed, held_out
        As in `draw_recipe`.
    indices : sequence of int
    processes : int
        Any number leaves the same files.
    weights : Path, optional
        Of the network that refines the keys.
    progress : callable, optional
        Called with recordings done, all of them, and words.
    """
    missing = [index for index in indices if not _is_whole(shard_path(folder, seed, index, held_out))]
    work = partial(_write_shard, folder, seed, held_out, weights)
    what = "rendering held-out recordings" if held_out else "rendering recordings"
    with ExitStack() as stack:
        ready: Iterable[None] = map(work, missing)
        if processes > 1 and len(missing) > 1:
            # A fresh process: a forked one would inherit locked thread pools.
            pool = stack.enter_context(ProcessPoolExecutor(processes, mp_context=get_context("spawn")))
            ready = pool.map(work, missing, chunksize=1)
        for done, _ in enumerate(ready, 1):
            if progress:
                progress(done, len(missing), what)


def _write_shard(folder: Path, seed: int, held_out: bool, weights: Path | None, index: int) -> None:
    import cv2

    # One thread a process; the pictures are the same for any number.
    cv2.setNumThreads(1)
    shard = make_shard(seed, index, held_out, load_network(weights) if weights else None)
    with whole_file(shard_path(folder, seed, index, held_out)) as partial_file, open(partial_file, "wb") as file:
        np.savez(file, inputs=shard.inputs, truth=shard.truth, recipe=np.array(json.dumps(shard.recipe)))


def _is_whole(path: Path) -> bool:
    return path.is_file() and zipfile.is_zipfile(path)


def load_shard(path: Path) -> Shard:
    """Read one recording's file."""
    with np.load(path) as file:
        return Shard(file["inputs"], file["truth"], json.loads(str(file["recipe"])))
