"""A rolling shutter: rows exposed one after another, each over its own part of the time the scene is shown."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from enhance.light import Image
from enhance.simulate.camera import Camera

#: Pictures of the shortest exposure at the least.
LEAST_SAMPLES = 8


class RowExposure:
    """The frames of one rolling camera, filled by pictures at even steps.

    Each picture stands for the step around it, and counts in each row by the part of the step that lies within the
    row's exposure: a midpoint rule whose ends are exact.

    Parameters
    ----------
    camera : Camera
    rows : int
        H.
    duration_us : int
    longest_us : float
        Longest step between two pictures.
    """

    def __init__(self, camera: Camera, rows: int, duration_us: int, longest_us: float) -> None:
        starts, ends = camera.exposures(duration_us, rows)
        delays = camera.row_delays_us(rows)
        # (K, H)
        self._starts, self._ends = starts[:, None] + delays, ends[:, None] + delays
        shortest = float((ends - starts).min(initial=camera.exposure_us))
        self._count = int(np.ceil(duration_us / min(longest_us, shortest / LEAST_SAMPLES)))
        self._step = duration_us / self._count
        self._sums: dict[int, NDArray[np.float64]] = {}
        self._next = 0

    def instants(self) -> Iterator[tuple[float, int, int]]:
        """Middles of the even steps of the whole duration, none of them part of one frame alone."""
        yield from ((k * self._step + 0.5 * self._step, -1, 0) for k in range(self._count))

    def add(self, picture: Image, time_us: float) -> list[tuple[int, Image]]:
        """Expose the frames to the next picture.

        Parameters
        ----------
        picture : ndarray of float32, shape (H, W) or (H, W, 3)
            Linear radiance.
        time_us : float
            The next of `instants`.

        Returns
        -------
        list of (int, ndarray of float32)
            Frames that are complete by it: number, and mean light of each row over its exposure, shape as the picture.
        """
        low, high = time_us - 0.5 * self._step, time_us + 0.5 * self._step
        done = []
        for frame in range(self._next, len(self._starts)):
            starts, ends = self._starts[frame], self._ends[frame]
            if starts.min() >= high:
                break
            # share of each row's exposure that this step makes up
            share = np.clip(np.minimum(high, ends) - np.maximum(low, starts), 0.0, None) / (ends - starts)
            exposed = share.reshape(-1, *[1] * (picture.ndim - 1)) * picture
            self._sums[frame] = self._sums.get(frame, 0.0) + exposed
            if ends.max() <= high:
                done.append((frame, self._sums.pop(frame).astype(np.float32)))
                self._next = frame + 1
        return done
