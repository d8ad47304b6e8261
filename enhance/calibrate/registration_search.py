"""A first matrix between two sensors, from nothing: rotations, scales and mirror images tried one by one.

For each, the shift follows from one correlation by Fourier transform, normalised over what the two pictures share,
pooled over several intervals (masked normalised cross-correlation: Padfield, "Masked Object Registration in the
Fourier Domain", IEEE Transactions on Image Processing 21(5), 2012).
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.view import project

Array = NDArray[np.float64]
Map = NDArray[np.float32]

#: Long side of the frames' maps in the search, and the square they are moved in, pixels.
SIDE, CANVAS = 64, 128
#: Rotations tried, degrees, and widths of an event pixel, frame pixels, each this much above the one before.
ANGLES = tuple(range(-12, 13, 3))
PITCHES, PITCH_STEP = (0.8, 4.8), 1.06
#: Signs of the event sensor's x and y: as it is, mirrored left and right, mirrored up and down.
MIRRORS = ((1, 1), (-1, 1), (1, -1))
#: Of the smaller picture, what the two must share.
LEAST_SHARED = 0.3
#: Answers that lie this part of the frame's width apart, in the mean, are two.
APART = 0.05


@dataclass(frozen=True)
class Guess:
    """A first matrix, event pixel to frame pixel, and how well it fits."""

    matrix: Array
    correlation: float


def search(
    frames: Sequence[Map], events: Sequence[Map], most: int = 6, pitches: Sequence[float] | None = None
) -> list[Guess]:
    """Try all rotations, scales and mirror images.

    Parameters
    ----------
    frames, events : sequence of ndarray of float32, shape (H, W) and (H', W')
        The change of log light in each interval, as frames and as events tell it.
    most : int
        Answers wanted.
    pitches : sequence of float, optional
        Frame pixels an event pixel may be wide; a wide range if left out.

    Returns
    -------
    list of Guess
        The best first; each lies apart from those before.
    """
    height, width = frames[0].shape
    shrink = SIDE / max(width, height)
    target = _Target(frames, shrink)
    found: list[Guess] = []
    for pitch in _steps() if pitches is None else pitches:
        blurred = [blur(each, max(0.5, 0.8 / (pitch * shrink))) for each in events]
        for turn in _turns():
            found.append(target.best(blurred, turn * pitch))
    found.sort(key=lambda guess: -guess.correlation)
    return _distinct(found, events[0].shape, width, most)


def distance(one: Array, two: Array, shape: tuple[int, ...]) -> float:
    """How far two matrices put the sensor's pixels apart: the mean over a grid, frame pixels."""
    y, x = (np.linspace(0, n - 1, 9) for n in shape[:2])
    points = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
    return float(np.nan_to_num(np.hypot(*(project(one, points) - project(two, points)).T), nan=1e6).mean())


def _distinct(found: Sequence[Guess], shape: tuple[int, ...], width: int, most: int) -> list[Guess]:
    kept: list[Guess] = []
    for guess in found:
        if all(distance(guess.matrix, other.matrix, shape) > APART * width for other in kept):
            kept.append(guess)
        if len(kept) == most:
            break
    return kept


def _steps() -> list[float]:
    low, high = PITCHES
    return [low * PITCH_STEP**k for k in range(int(np.log(high / low) / np.log(PITCH_STEP)) + 2)]


def _turns() -> Iterator[Array]:
    for mirror in MIRRORS:
        for angle in np.deg2rad(ANGLES):
            c, s = np.cos(angle), np.sin(angle)
            yield np.array([[c, -s], [s, c]]) @ np.diag(np.asarray(mirror, np.float64))


class _Target:
    """The frames' maps, shrunk, with all of their transforms that every candidate needs."""

    def __init__(self, frames: Sequence[Map], shrink: float) -> None:
        self.shrink = shrink
        # a shrunken map keeps the smooth part alone: nothing finer may fold back
        blurred = [blur(each, 0.8 / shrink) for each in frames]
        self.shape = tuple(max(2, round(n * shrink)) for n in frames[0].shape)
        width, height = self.shape[::-1]
        small = [np.asarray(cv2.resize(e, (width, height), interpolation=cv2.INTER_AREA), np.float32) for e in blurred]
        self._maps = [_transformed(each) for each in small]
        self._squares = _transformed(np.sum(np.square(small), axis=0, dtype=np.float32))
        self._mask = _transformed(np.ones(self.shape, np.float32))

    def best(self, events: Sequence[Map], turn: Array) -> Guess:
        """Find the best shift of a turned, scaled sensor."""
        height, width = events[0].shape
        matrix = np.eye(3)
        matrix[:2, :2] = turn * self.shrink
        # the sensor's centre on the canvas'
        matrix[:2, 2] = (CANVAS - 1) / 2 - matrix[:2, :2] @ ((width - 1) / 2, (height - 1) / 2)
        moved = [_placed(each, matrix) for each in events]
        mask = _placed(np.ones((height, width), np.float32), matrix)
        spectra = [_times(m, _transformed(e)) for m, e in zip(self._maps, moved, strict=True)]
        cross = _back(np.sum(spectra, axis=0))
        over, squares = _transformed(mask), _transformed(np.sum(np.square(moved), axis=0, dtype=np.float32))
        energy = _back(_times(self._squares, over)), _back(_times(self._mask, squares))
        shared = _back(_times(self._mask, over))
        least = LEAST_SHARED * min(self.shape[0] * self.shape[1], float(mask.sum()))
        # Little motion in a corner of the overlap must not look like a good fit by its small energy.
        floors = [0.05 * float(each.max()) for each in energy]
        bottom = np.sqrt(np.maximum(energy[0], floors[0]) * np.maximum(energy[1], floors[1]))
        value = np.where(shared >= least, cross / np.maximum(bottom, 1e-12), -1.0)
        row, column = np.unravel_index(int(value.argmax()), value.shape)
        # the frame's corner stands at (column, row) of the canvas, counted round
        corner = [int(n) - CANVAS if n > CANVAS / 2 + CANVAS / 4 else int(n) for n in (column, row)]
        matrix[:2, 2] -= corner
        return Guess(np.asarray(self._to_frame() @ matrix, np.float64), float(value.max()))

    def _to_frame(self) -> Array:
        """Pixel of the shrunken map to frame pixel."""
        s = 1 / self.shrink
        return np.array([[s, 0, (s - 1) / 2], [0, s, (s - 1) / 2], [0, 0, 1]])


def blur(image: Map, sigma: float) -> Map:
    """Smooth a map by a Gaussian."""
    return np.asarray(cv2.GaussianBlur(image, (0, 0), sigma), np.float32)


def _placed(image: Map, matrix: Array) -> Map:
    return np.asarray(cv2.warpAffine(image, matrix[:2], (CANVAS, CANVAS)), np.float32)


def _transformed(image: Map) -> Map:
    canvas = np.zeros((CANVAS, CANVAS), np.float32)
    canvas[: image.shape[0], : image.shape[1]] = image
    return np.asarray(cv2.dft(canvas, flags=cv2.DFT_COMPLEX_OUTPUT), np.float32)


def _times(one: Map, two: Map) -> Map:
    """Correlate: where `one`, moved by the shift, lies on `two`."""
    return np.asarray(cv2.mulSpectrums(two, one, 0, conjB=True), np.float32)


def _back(spectrum: Map) -> Map:
    return np.asarray(cv2.dft(spectrum, flags=cv2.DFT_INVERSE | cv2.DFT_SCALE | cv2.DFT_REAL_OUTPUT), np.float32)
