"""Held-out frames: re-exposing made pictures, and the summary over many."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

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


def re_expose(images: Iterable[Image]) -> Image:
    """Average pictures of one exposure in linear light, as a sensor does.

    Parameters
    ----------
    images : iterable of ndarray of float32, shape (H, W) or (H, W, 3)
        Linear light; taken one at a time.

    Returns
    -------
    ndarray of float32, same shape

    Raises
    ------
    MeasureError
        If there is no picture.
    """
    total, count = None, 0
    for image in images:
        total = image.astype(np.float64) if total is None else total + image
        count += 1
    if total is None:
        raise MeasureError("No picture to re-expose; expected at least one instant inside the exposure.")
    return (total / count).astype(np.float32)


def _figure(values: Sequence[float | None]) -> Figure:
    known = [float(value) for value in values if value is not None and not math.isnan(value)]
    finite = [value for value in known if math.isfinite(value)]
    mean = math.fsum(finite) / len(finite) if finite else None
    return Figure(mean, len(finite), len(known) - len(finite), len(values) - len(known))
