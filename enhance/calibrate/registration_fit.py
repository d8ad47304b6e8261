"""The 3x3 matrix between two sensors, refined on the change of light that both saw.

Over the same interval, frames and events tell the same change of log light: the one as the difference of two frames,
the other as the difference of two double integrals. For the right matrix W the two are proportional,

    E(e) = g D(W(e)),

e being event pixels, D the frames' change, E the events'. Gauss-Newton on W and g together, pooled over several
intervals, from blurred maps to sharp ones.

References
----------
Lucas, Kanade, "An Iterative Image Registration Technique with an Application to Stereo Vision", IJCAI 1981.
Evangelidis, Psarakis, "Parametric Image Alignment Using Enhanced Correlation Coefficient Maximization", IEEE TPAMI
30(10), 2008: the gain within the fit.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.calibrate.registration_search import blur
from enhance.view import Lens, project

Array = NDArray[np.float64]
Map = NDArray[np.float32]

#: Columns of the matrix that are fitted: affine, and with the two of perspective.
AFFINE, PERSPECTIVE = 6, 8
#: Steps at the most, and the mean move, in pixels of the level, below which one is the last.
STEPS, ENOUGH_PX = 20, 0.004
#: Event pixels looked at: more tell no more, only later.
MOST_POINTS = 40_000
#: A step moves no further than this many widths of the maps' blur: beyond it the maps' slopes tell nothing.
REACH = 1.5
#: Damping of perspective against affine terms: without evidence it stays where it is.
RIDGE = 1e-4


@dataclass(frozen=True)
class Level:
    """Change maps at one sharpness: what a fit looks at.

    Parameters
    ----------
    frames : sequence of ndarray of float32, shape (h, w)
        D of each interval, on undistorted frame pixels; 0 where nothing is known.
    events : sequence of ndarray of float32, shape (h', w')
        E of each interval, on every n-th event pixel.
    slopes : sequence of pairs of ndarray of float32, shape (h, w)
        Of `frames`, along x and y.
    points : ndarray of float64, shape (h' w', 2)
        Undistorted place of each event pixel of `events`.
    blur_px : float
        Blur of the events' maps, event pixels.
    """

    frames: Sequence[Map]
    slopes: Sequence[tuple[Map, Map]]
    events: Sequence[Map]
    points: Array
    blur_px: float


@dataclass(frozen=True)
class Fit:
    """A matrix, how well it fits, and what each interval alone would change about it.

    Parameters
    ----------
    matrix : ndarray of float64, shape (3, 3)
        Event pixel to frame pixel, undistorted.
    correlation : float
        Of E and D over the overlap.
    uncertainty_px : float or None
        Standard deviation of the map, event pixels in the mean over the overlap; None from a single interval.
    """

    matrix: Array
    correlation: float
    uncertainty_px: float | None = None


@dataclass(frozen=True)
class _Sums:
    """Normal equations of one interval for (gain, gain x change of the matrix), and its share of the correlation."""

    square: Array
    right: Array
    moments: Array


def make_level(
    frames: Sequence[Map],
    events: Sequence[Map],
    pitch: float,
    blur_px: float,
    lens: Lens | None = None,
) -> Level:
    """Blur change maps alike.

    Parameters
    ----------
    frames, events : sequence of ndarray of float32
        As in `Level`, sharp.
    pitch : float
        Frame pixels an event pixel is wide, about.
    blur_px : float
        Standard deviation, event pixels.
    lens : Lens, optional
        Of the event sensor.

    Returns
    -------
    Level
    """
    # An event pixel averages over its own area, a frame pixel over its smaller one: variances of boxes.
    wide = np.sqrt((pitch * blur_px) ** 2 + max(0.0, pitch**2 - 1) / 12)
    height, width = events[0].shape
    every = max(1, int(blur_px), int(np.ceil(np.sqrt(height * width / MOST_POINTS))))
    y, x = np.mgrid[:height:every, :width:every].reshape(2, -1).astype(np.float64)
    points = np.column_stack([x, y])
    smooth = [blur(each, wide) for each in frames]
    along_x, along_y = ([_slope(each, *order) for each in smooth] for order in ((1, 0), (0, 1)))
    return Level(
        smooth,
        list(zip(along_x, along_y, strict=True)),
        [blur(each, blur_px)[::every, ::every] for each in events],
        lens.undistort(points) if lens else points,
        blur_px,
    )


def _slope(image: Map, along_x: int, along_y: int) -> Map:
    return np.asarray(cv2.Sobel(image, cv2.CV_32F, along_x, along_y, ksize=3, scale=1 / 8), np.float32)


def refine(level: Level, matrix: Array, terms: int = AFFINE) -> Fit:
    """Maximise the correlation of both sensors' change maps around a first matrix.

    Parameters
    ----------
    level : Level
    matrix : ndarray of float64, shape (3, 3)
        Right to about the maps' blur.
    terms : int
        `AFFINE` or `PERSPECTIVE`.

    Returns
    -------
    Fit
    """
    sums = _all_sums(level, matrix)
    best, damping = _correlation(sums), 1e-3
    for _ in range(STEPS):
        step = _solve(sums, terms, damping)
        moved = _stepped(level, matrix, step)
        found = _all_sums(level, moved)
        correlation = _correlation(found)
        if correlation > best:
            size = _mean_move(level, matrix, moved)
            matrix, sums, best, damping = moved, found, correlation, damping / 5
            if size < ENOUGH_PX:
                break
        elif damping > 1e3:
            break
        else:
            damping *= 10
    return Fit(matrix, best, _jackknife(level, matrix, sums, terms))


def correlation_at(level: Level, matrix: Array) -> float:
    """Correlate both sensors' change maps for a matrix."""
    return _correlation(_all_sums(level, matrix))


def _all_sums(level: Level, matrix: Array) -> list[_Sums]:
    """Add up the normal equations of every interval at a matrix."""
    there = project(matrix, level.points)
    height, width = level.frames[0].shape
    with np.errstate(invalid="ignore"):
        inside = ((there >= 0) & (there <= (width - 1, height - 1))).all(axis=1)
    # whole pictures: OpenCV takes no list of points as long as this
    maps = np.nan_to_num(there, nan=-9.0).clip(-9, 1e5).astype(np.float32).reshape(*level.events[0].shape, 2)
    there, points = there[inside], level.points[inside]
    normal = _normal_form(level.points)
    solid = project(normal, points)
    depth = points @ matrix[2, :2] + matrix[2, 2]
    result = []
    for change, slopes, seen in zip(level.frames, level.slopes, level.events, strict=True):
        value, along_x, along_y = (
            np.asarray(cv2.remap(each, maps[..., 0], maps[..., 1], cv2.INTER_LINEAR), np.float32).ravel()[inside]
            for each in (change, *slopes)
        )
        result.append(_sums(value, (along_x, along_y), seen.ravel()[inside], there, solid, depth))
    return result


def _sums(value: Map, slopes: tuple[Map, Map], seen: Map, there: Array, solid: Array, depth: Array) -> _Sums:
    one = np.ones(len(solid))
    base = np.column_stack([solid, one]) / depth[:, None]
    # d(x, y) / d(matrix row by row), the last element fixed
    fall = -(slopes[0] * there[:, 0] + slopes[1] * there[:, 1])
    rows = np.column_stack([value, slopes[0][:, None] * base, slopes[1][:, None] * base, fall[:, None] * base[:, :2]])
    moments = np.array([(value * seen).sum(), (value * value).sum(), (seen * seen).sum()], np.float64)
    return _Sums(rows.T @ rows, rows.T @ seen.astype(np.float64), moments)


def _normal_form(points: Array) -> Array:
    """Matrix that brings the sensor's pixels to about -1 .. 1: terms of like size."""
    low, high = points.min(axis=0), points.max(axis=0)
    half = max(float((high - low).max()) / 2, 1.0)
    return np.array([[1 / half, 0, -(low + high)[0] / 2 / half], [0, 1 / half, -(low + high)[1] / 2 / half], [0, 0, 1]])


def _solve(sums: Sequence[_Sums], terms: int, damping: float) -> Array:
    """Change of the matrix in normal form, shape (8,)."""
    count = terms + 1
    square = sum((each.square[:count, :count] for each in sums), np.zeros((count, count)))
    right = sum((each.right[:count] for each in sums), np.zeros(count))
    scale = np.diag(square).copy()
    scale[7:] += RIDGE * scale[1:7].mean() if terms > AFFINE else 0.0
    solved = np.linalg.lstsq(square + np.diag(damping * scale), right, rcond=None)[0]
    # damping must not eat the gain: it divides the rest
    gain = solved[0] if abs(solved[0]) > 1e-9 else 1e-9
    step = np.zeros(8)
    step[:terms] = solved[1:] / gain
    return step


def _stepped(level: Level, matrix: Array, step: Array) -> Array:
    """Add a step in normal form, shortened to what the maps' slopes can tell."""
    normal = _normal_form(level.points)
    before = matrix @ np.linalg.inv(normal)
    size = before[2, 2]
    before = before / size
    change = np.append(step / size, 0.0).reshape(3, 3)
    for _ in range(12):
        moved = (before + change) @ normal
        moved = moved / moved[2, 2]
        if _mean_move(level, matrix, moved) <= REACH * level.blur_px:
            break
        change /= 2
    return np.asarray(moved)


def _mean_move(level: Level, one: Array, two: Array) -> float:
    """How far two matrices lie apart, event pixels in the mean over the overlap."""
    points = level.points[:: max(1, len(level.points) // 500)]
    there = project(one, points)
    height, width = level.frames[0].shape
    with np.errstate(invalid="ignore"):
        inside = ((there >= 0) & (there <= (width - 1, height - 1))).all(axis=1)
    if not inside.any():
        return float("inf")
    back = project(np.asarray(np.linalg.inv(two), np.float64), there[inside]) - points[inside]
    return float(np.nan_to_num(np.hypot(*back.T), nan=1e6).mean())


def _correlation(sums: Sequence[_Sums]) -> float:
    cross, one, two = sum((each.moments for each in sums), np.zeros(3))
    return float(cross / np.sqrt(max(one * two, 1e-30)))


def _jackknife(level: Level, matrix: Array, sums: Sequence[_Sums], terms: int) -> float | None:
    """Scatter when each interval in turn is left out: one Gauss-Newton step from the common solution."""
    count = len(sums)
    if count < 2:
        return None
    away = []
    for k in range(count):
        step = _solve([each for i, each in enumerate(sums) if i != k], terms, 1e-6)
        away.append(_mean_move(level, matrix, _stepped(level, matrix, step)))
    return float(np.sqrt((count - 1) / count * np.sum(np.square(away))))
