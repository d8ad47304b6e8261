"""How sharply a picture shows one slanted edge: its spatial frequency response and its rise.

References
----------
ISO 12233, edge-based spatial frequency response (slanted edge, 4 bins a pixel).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from enhance.errors import MeasureError
from enhance.measure.sharpness import grey

_BINS = 4


@dataclass(frozen=True)
class EdgeProfile:
    """Brightness across an edge, 4 values a pixel.

    Parameters
    ----------
    position_px : ndarray of float64, shape (N,)
        Distance from the edge, at right angles to it.
    value : ndarray of float64, shape (N,)
    slant_deg : float
        Angle between the edge and the nearer axis of the picture.
    """

    position_px: NDArray[np.float64]
    value: NDArray[np.float64]
    slant_deg: float


def edge_sfr(crop: NDArray[np.generic]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Spatial frequency response across the one edge of a crop.

    Parameters
    ----------
    crop : ndarray, shape (H, W) or (H, W, 3)
        Linear light, or code values of a linear curve; one straight edge near 5 degrees from upright or level, with
        flat ground on either side.

    Returns
    -------
    frequency : ndarray of float64, shape (N,)
        Cycles per pixel, 0 to 1.
    response : ndarray of float64, shape (N,)
        1 at 0.

    Raises
    ------
    MeasureError
        If there is no edge, or it does not slant.
    """
    profile = edge_profile(crop)
    # derivative: central difference over the 4x bins
    line = (profile.value[2:] - profile.value[:-2]) / 2.0
    # Hamming window around the edge, so that noise far from it does not add up
    distance = profile.position_px[1:-1]
    line = line * (0.54 + 0.46 * np.cos(np.pi * distance / np.abs(distance).max()))
    # zeros behind it only sample the same response more finely, so that its zeros and its half lie near a value
    length = 4 * line.size
    spectrum = np.abs(np.fft.rfft(line, length))
    frequency = np.asarray(np.fft.rfftfreq(length, d=1.0 / _BINS), dtype=np.float64)
    kept = frequency <= 1.0
    # a central difference over 2 / _BINS pixel passes sinc(2 f / _BINS) of a frequency
    passed = np.sinc(2.0 * frequency[kept] / _BINS)
    return frequency[kept], spectrum[kept] / spectrum[0] / passed


def mtf50(frequency: NDArray[np.float64], response: NDArray[np.float64]) -> float | None:
    """Frequency at which the response first falls to one half.

    Parameters
    ----------
    frequency, response : ndarray of float64, shape (N,)
        From `edge_sfr`.

    Returns
    -------
    float or None
        Cycles per pixel, interpolated; None if it does not fall that far.
    """
    below = np.flatnonzero(response < 0.5)
    if below.size == 0 or below[0] == 0:
        return None
    i = int(below[0])
    share = (response[i - 1] - 0.5) / (response[i - 1] - response[i])
    return float(frequency[i - 1] + share * (frequency[i] - frequency[i - 1]))


def rise_10_90(crop: NDArray[np.generic]) -> float:
    """Pixels the one edge of a crop takes from 10 to 90 percent of its step.

    Parameters
    ----------
    crop : ndarray, shape (H, W) or (H, W, 3)
        As for `edge_sfr`.

    Returns
    -------
    float
        At right angles to the edge.

    Raises
    ------
    MeasureError
        If there is no edge, or it does not slant.
    """
    profile = edge_profile(crop)
    ends = max(2, profile.value.size // 10)
    low, high = profile.value[:ends].mean(), profile.value[-ends:].mean()
    level = (profile.value - low) / (high - low)
    return _crossing(profile.position_px, level, 0.9) - _crossing(profile.position_px, level, 0.1)


def edge_profile(crop: NDArray[np.generic]) -> EdgeProfile:
    """Bring all rows of a crop onto one finely sampled profile across its edge.

    Parameters
    ----------
    crop : ndarray, shape (H, W) or (H, W, 3)

    Returns
    -------
    EdgeProfile

    Raises
    ------
    MeasureError
        If there is no edge, or it does not slant.
    """
    image = grey(crop)
    if np.abs(np.diff(image.mean(axis=1))).sum() > np.abs(np.diff(image.mean(axis=0))).sum():
        image = image.T
    rows, columns = image.shape
    if min(rows, columns) < 8:
        raise MeasureError(f"The crop is {crop.shape[0]} x {crop.shape[1]} pixels; expected at least 8 x 8.")
    slope, origin = _edge_line(image)
    # The edge has to pass a whole pixel over the rows, or the bins between the pixels stay empty.
    if abs(slope) * (rows - 1) < 1.0 or abs(slope) > 1.0:
        raise MeasureError(
            f"The edge slants by {np.degrees(np.arctan(abs(slope))):.1f} degrees over {rows} rows; "
            "expected about 5, and at least one pixel in all. Choose another crop."
        )
    offset = np.arange(columns)[None, :] - (origin + slope * np.arange(rows))[:, None]
    distance = offset * np.cos(np.arctan(slope))
    # every row reaches this far on both sides
    reach = int(np.floor(_BINS * min(-distance[:, 0].max(), distance[:, -1].min())))
    if reach < 2 * _BINS:
        raise MeasureError("The edge comes within 2 pixels of the crop's side; choose a wider crop.")
    index = np.rint(distance * _BINS).astype(np.int64) + reach
    inside = (index >= 0) & (index <= 2 * reach)
    count = np.bincount(index[inside], minlength=2 * reach + 1)
    total = np.bincount(index[inside], weights=image[inside], minlength=2 * reach + 1)
    if (count == 0).any():
        raise MeasureError(
            f"The edge leaves {int((count == 0).sum())} of {count.size} places between the pixels unseen; "
            "choose a taller crop, or an edge near 5 degrees."
        )
    return EdgeProfile(np.arange(-reach, reach + 1) / _BINS, total / count, float(np.degrees(np.arctan(abs(slope)))))


def _edge_line(image: NDArray[np.float64]) -> tuple[float, float]:
    """Straight line through the edge: column = origin + slope * row; from each row's centre of slope, refined once."""
    rows, columns = image.shape
    steps = np.diff(image, axis=1)
    place = np.arange(columns - 1) + 0.5
    row = np.arange(rows)
    middle = np.full(rows, (columns - 1) / 2.0)
    slope, origin = 0.0, 0.0
    for _ in range(3):
        # Hamming window around the line found so far: noise far from the edge must not pull the centre
        away = np.clip((place[None, :] - middle[:, None]) / (columns / 2.0), -1.0, 1.0)
        weighted = steps * (0.54 + 0.46 * np.cos(np.pi * away))
        total = weighted.sum(axis=1)
        found = np.abs(total) > 0.1 * np.abs(total).max()
        if np.abs(total).max() == 0.0 or found.sum() < rows // 2:
            raise MeasureError("There is no edge from side to side in the crop; choose one that shows a single edge.")
        centre = (weighted[found] * place).sum(axis=1) / total[found]
        slope, origin = (float(value) for value in np.polyfit(row[found], centre, 1))
        middle = origin + slope * row
    return slope, origin


def _crossing(position: NDArray[np.float64], level: NDArray[np.float64], wanted: float) -> float:
    """Where a rising profile last stands below a level, interpolated."""
    i = int(np.flatnonzero(level[:-1] < wanted)[-1])
    share = (wanted - level[i]) / (level[i + 1] - level[i])
    return float(position[i] + share * (position[i + 1] - position[i]))
