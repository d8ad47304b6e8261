"""Held-out frames: re-exposing made pictures, and the summary over many."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from enhance.errors import MeasureError
from enhance.light import Image

#: Motion between neighbouring pictures of one exposure, in pixels, and the fewest pictures where anything moves.
_STEP_PX, _FEWEST = 0.5, 5


@dataclass(frozen=True)
class Figure:
    """One column of figures in short.

    Parameters
    ----------
    mean : float or None
        Mean of the pictures' figures (for dB: never the dB of a mean error); None where there is none.
    count : int
        Pictures the mean is over.
    infinite : int
        Pictures left out because theirs is infinite (equal pictures).
    unknown : int
        Pictures left out because theirs is not known (no pixel moves, for example).
    """

    mean: float | None
    count: int
    infinite: int
    unknown: int


def summarise(rows: Sequence[Mapping[str, float | None]], names: Iterable[str] | None = None) -> dict[str, Figure]:
    """Sum up the figures of many pictures.

    Parameters
    ----------
    rows : sequence of mapping
        One a picture: name of a figure to its value; None or absent where it is not known.
    names : iterable of str, optional
        Which figures; by default every one that occurs, in order of appearance.

    Returns
    -------
    dict of str to Figure
    """
    wanted = list(names) if names is not None else list(dict.fromkeys(name for row in rows for name in row))
    return {name: _figure([row.get(name) for row in rows]) for name in wanted}


def exposure_times(start_us: int, end_us: int, motion_px: float) -> list[int]:
    """Instants whose pictures stand for one exposure (midpoint rule).

    Parameters
    ----------
    start_us, end_us : int
        The exposure.
    motion_px : float
        Largest motion during it.

    Returns
    -------
    list of int
        As many as keep the motion within half a pixel a step, at least 5; the middle alone for less motion than that or
        no exposure.
    """
    length = end_us - start_us
    count = 1 if motion_px < _STEP_PX else max(_FEWEST, math.ceil(motion_px / _STEP_PX))
    count = max(1, min(count, length))
    return [start_us + (2 * i + 1) * length // (2 * count) for i in range(count)]


def row_shares(
    times_us: Sequence[int], start_us: int, end_us: int, delays_us: NDArray[np.int64]
) -> NDArray[np.float64]:
    """By how much each of some pictures counts in each row of a rolling shutter's exposure.

    Parameters
    ----------
    times_us : sequence of N int
        The pictures' instants: midpoints of even steps from the earliest row's start to the latest one's end.
    start_us, end_us : int
        The exposure of a row without delay.
    delays_us : ndarray of int64, shape (H,)

    Returns
    -------
    ndarray of float64, shape (N, H)
        Sum 1 in each row: the part of the exposure that a picture's step covers. A row that is exposed for less than a
        step lies between the two nearest pictures.
    """
    length = end_us - start_us + int(np.ptp(delays_us))
    step = max(length / len(times_us), 1.0)
    middle, half = 0.5 * (start_us + end_us) + delays_us, 0.5 * max(end_us - start_us, step)
    times = np.asarray(times_us, dtype=np.float64)[:, None]
    covered = np.minimum(times + 0.5 * step, middle + half) - np.maximum(times - 0.5 * step, middle - half)
    shares = np.clip(covered, 1e-9, None)
    return np.asarray(shares / shares.sum(axis=0))


def re_expose(images: Iterable[Image], shares: NDArray[np.float64] | None = None) -> Image:
    """Average pictures of one exposure in linear light, as a sensor does.

    Parameters
    ----------
    images : iterable of ndarray of float32, shape (H, W) or (H, W, 3)
        Linear light; taken one at a time.
    shares : ndarray of float64, shape (N, H), optional
        By how much each counts in each row; all alike if left out.

    Returns
    -------
    ndarray of float32, same shape

    Raises
    ------
    MeasureError
        If there is no picture.
    """
    total, count = None, 0
    for image in images if shares is None else _shared(images, shares):
        total = image.astype(np.float64) if total is None else total + image
        count += 1
    if total is None:
        raise MeasureError("No picture to re-expose; expected at least one instant inside the exposure.")
    return (total / count).astype(np.float32)


def _shared(images: Iterable[Image], shares: NDArray[np.float64]) -> Iterable[NDArray[np.float64]]:
    for image, share in zip(images, shares, strict=True):
        yield image * (len(shares) * share).reshape(-1, *[1] * (image.ndim - 1))


def _figure(values: Sequence[float | None]) -> Figure:
    known = [float(value) for value in values if value is not None and not math.isnan(value)]
    finite = [value for value in known if math.isfinite(value)]
    mean = math.fsum(finite) / len(finite) if finite else None
    return Figure(mean, len(finite), len(known) - len(finite), len(values) - len(known))
