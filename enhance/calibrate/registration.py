"""Where the event sensor looks: the 3x3 matrix from its pixels to the frames', from what moves in both.

A first matrix is sought over rotations, scales and mirror images (`registration_search`); the best few are refined on
ever sharper maps (`registration_fit`), and the best of them is taken if no other fits nearly as well.
"""

from __future__ import annotations

from collections.abc import Sequence
from copy import copy
from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.calibrate.evidence import Pair
from enhance.calibrate.registration_fit import PERSPECTIVE, Fit, Level, make_level, refine
from enhance.calibrate.registration_search import distance, search
from enhance.errors import CalibrationError
from enhance.kernels.double_integral import log_blur_ratio
from enhance.recording import Contrast, EventSource
from enhance.view import Lens, View

Array = NDArray[np.float64]
Map = NDArray[np.float32]

#: Intervals the coarse search looks at, and those a fit does.
SEARCHED, FITTED = 5, 12
#: Blur of the maps, event pixels, from the coarse search's to the last.
BLURS_PX = (3.0, 1.5, 0.8)
#: Log light that must change somewhere in the frames: less is arithmetic.
LEAST_CHANGE = 0.01
#: A correlation below this is no evidence; another answer within this part of the best makes it none.
LEAST_CORRELATION, RIVAL = 0.3, 0.85
#: What perspective must leave of the unexplained part, 1 - correlation^2, to be believed.
WORTH_PERSPECTIVE = 0.98
#: Frames wider than this, and than twice the sensor, are shrunk: finer maps tell no more.
WIDEST_PX = 480
#: What a clock leaves open, microseconds: by how much that would move the map goes into its uncertainty.
CLOCK_DOUBT_US = 200
METHOD = "correlation of frame change and double integral over rotations, scales and mirror images"


@dataclass(frozen=True)
class Found:
    """A registration.

    Parameters
    ----------
    matrix : ndarray of float64, shape (3, 3)
        Event pixel to frame pixel of the crop, undistorted.
    correlation : float
    uncertainty_px : float or None
        Event pixels.
    intervals : int
    """

    matrix: Array
    correlation: float
    uncertainty_px: float | None
    intervals: int


class ChangeMaps:
    """What frames and events tell of the change of light in some intervals.

    Parameters
    ----------
    pairs : sequence of Pair
    events : EventSource
        In the frame clock, on the sensor's own pixels.
    contrast : Contrast
        As far as it is known.
    frame_lens, event_lens : Lens, optional
        In pixels of the crop; in those of the sensor.
    """

    def __init__(
        self,
        pairs: Sequence[Pair],
        events: EventSource,
        contrast: Contrast,
        frame_lens: Lens | None = None,
        event_lens: Lens | None = None,
    ) -> None:
        strongest = sorted(pairs, key=lambda p: float(np.abs(p.change).sum()), reverse=True)[:FITTED]
        self.pairs, self.event_lens = strongest, event_lens
        undistorting = _undistorting(frame_lens, strongest[0].change.shape) if frame_lens and strongest else None
        self.frames = [_undistorted(pair.change.astype(np.float32), undistorting) for pair in strongest]
        widest = max(WIDEST_PX, 2 * events.size[0])
        self.shrink = max(1, max(each.shape[1] for each in self.frames) // widest) if strongest else 1
        self.frames = [_shrunk(each, self.shrink) for each in self.frames]
        self.contrast, self.source = contrast, events
        self.events = self._at(0)

    def later(self, offset_us: int) -> ChangeMaps:
        """Give the same with events that come this much later."""
        other = copy(self)
        other.events = self._at(offset_us)
        return other

    def _at(self, offset_us: int) -> list[Map]:
        shape = (self.source.size[1], self.source.size[0])
        return [predicted_change(pair, self.source, self.contrast, shape, offset_us) for pair in self.pairs]

    def level(self, matrix: Array, blur_px: float, most: int = FITTED) -> Level:
        """Blur them for a fit around a matrix."""
        pitch = View(matrix).pitch((self.source.size[0], self.source.size[1]))
        return make_level(self.frames[:most], self.events[:most], pitch, blur_px, self.event_lens)


def predicted_change(
    pair: Pair, events: EventSource, contrast: Contrast, shape: tuple[int, int], offset_us: int = 0
) -> Map:
    """Tell ln B2 - ln B1 of a pair by the events, on their own pixels.

    Parameters
    ----------
    pair : Pair
    events : EventSource
    contrast : Contrast
    shape : tuple of int
        H, W of the sensor.
    offset_us : int
        Added to the events' clock.

    Returns
    -------
    ndarray of float32, shape (H, W)
    """
    one, two, ramp = pair.first, pair.second, contrast.ramp_us
    times = [t - offset_us for t in (one.start_us, one.end_us, two.start_us, two.end_us, one.time_us)]
    seen = events.between(min(times) - ramp, max(times) + 2 * ramp)
    first = log_blur_ratio(seen, times[0], times[1], times[4], contrast, shape)
    return (log_blur_ratio(seen, times[2], times[3], times[4], contrast, shape) - first).astype(np.float32)


def register(maps: ChangeMaps) -> Found:
    """Find the matrix from nothing.

    Parameters
    ----------
    maps : ChangeMaps

    Returns
    -------
    Found

    Raises
    ------
    CalibrationError
        If the recording cannot tell, with the reason.
    """
    if not any(float(np.abs(each).max()) > LEAST_CHANGE for each in maps.frames):
        raise CalibrationError("no usable pixel of the frames changes")
    if not any(each.any() for each in maps.events):
        raise CalibrationError("no events near the keys")
    guesses = search(maps.frames[:SEARCHED], maps.events[:SEARCHED])
    fits = sorted((_settled(maps, guess.matrix, BLURS_PX[:1]) for guess in guesses), key=lambda fit: -fit.correlation)
    # The sharp maps judge: what repeats is alike only while it is blurred.
    sharp = [_settled(maps, fit.matrix) for fit in fits[:3]]
    sharp.sort(key=lambda fit: -fit.correlation)
    shape, width, best = maps.events[0].shape, maps.frames[0].shape[1], sharp[0]
    others = [fit.correlation for fit in sharp[1:] if distance(fit.matrix, best.matrix, shape) > 0.02 * width]
    found = _settled(maps, best.matrix, BLURS_PX[-1:], FITTED)
    if found.correlation < LEAST_CORRELATION:
        raise CalibrationError(
            f"frames and events do not move together at any shift, rotation and scale (best correlation only "
            f"{found.correlation:.2f})"
        )
    if max(others, default=0.0) > RIVAL * best.correlation:
        raise CalibrationError(
            f"the scene repeats: two places fit alike (correlations {best.correlation:.2f} and {max(others):.2f})"
        )
    return _found(maps, found)


def register_near(maps: ChangeMaps, matrix: Array, offset_us: int = 0) -> Found:
    """Refine a matrix that is nearly right, for a clock that is this much later.

    Parameters
    ----------
    maps : ChangeMaps
    matrix : ndarray of float64, shape (3, 3)
    offset_us : int

    Returns
    -------
    Found
    """
    if offset_us:
        maps = maps.later(offset_us)
    inner = _shrinking(maps.shrink) @ matrix
    return _found(maps, _settled(maps, inner, BLURS_PX[1:], FITTED))


def _found(maps: ChangeMaps, fit: Fit) -> Found:
    doubt = fit.uncertainty_px
    if doubt is not None:
        late = _settled(maps.later(2 * CLOCK_DOUBT_US), fit.matrix, BLURS_PX[-1:])
        pitch = View(fit.matrix).pitch((maps.events[0].shape[1], maps.events[0].shape[0]))
        doubt = float(np.hypot(doubt, distance(late.matrix, fit.matrix, maps.events[0].shape) / pitch / 2))
    matrix = np.linalg.inv(_shrinking(maps.shrink)) @ fit.matrix
    return Found(matrix / matrix[2, 2], fit.correlation, doubt, len(maps.frames))


def _settled(maps: ChangeMaps, matrix: Array, blurs_px: Sequence[float] = BLURS_PX[1:], most: int = SEARCHED) -> Fit:
    """Refine a matrix from blurred maps to sharp ones."""
    fit = Fit(matrix, -1.0)
    for blur in blurs_px:
        level = maps.level(fit.matrix, blur, most)
        fit = refine(level, fit.matrix)
    if blurs_px[-1] <= BLURS_PX[-1]:
        bent = refine(level, fit.matrix, PERSPECTIVE)
        fit = bent if 1 - bent.correlation**2 < WORTH_PERSPECTIVE * (1 - fit.correlation**2) else fit
    return fit


def _shrinking(by: int) -> Array:
    """Pixel to pixel of a picture shrunk by whole pixels."""
    return np.array([[1 / by, 0, (1 - by) / 2 / by], [0, 1 / by, (1 - by) / 2 / by], [0, 0, 1]])


def _shrunk(change: Map, by: int) -> Map:
    if by == 1:
        return change
    height, width = (n // by for n in change.shape)
    whole = change[: height * by, : width * by]
    return np.asarray(cv2.resize(whole, (width, height), interpolation=cv2.INTER_AREA), np.float32)


def _undistorting(lens: Lens, shape: tuple[int, ...]) -> Map:
    """Where each pixel of the undistorted picture is shown, for cv2.remap."""
    y, x = np.mgrid[: shape[0], : shape[1]].reshape(2, -1).astype(np.float64)
    there = np.nan_to_num(lens.distort(np.column_stack([x, y])), nan=-9.0)
    return np.clip(there, -9, 1e5).astype(np.float32).reshape(shape[0], shape[1], 2)


def _undistorted(change: Map, undistorting: Map | None) -> Map:
    if undistorting is None:
        return change
    return np.asarray(cv2.remap(change, undistorting[..., 0], undistorting[..., 1], cv2.INTER_LINEAR), np.float32)
