"""How the two sensors of a rig relate, and the one place where events move from the sensor's world into the frame's.

Every quantity carries its value, uncertainty, method and evidence. An unknown value is None with a reason.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from enhance.clock import ClockMap
from enhance.recording import Contrast, Events, EventSource


@dataclass(frozen=True)
class Quantity:
    """One measured or given property of a rig.

    Parameters
    ----------
    value : float, int, list or None
        None where it cannot be told.
    uncertainty : float or None
        One standard deviation in the value's unit; None where it was given or cannot be told.
    method : str
        ``given``, ``rig file``, ``assumed`` or the name of the estimate.
    evidence : str
        What the value rests on, or why there is none, in words.
    """

    value: Any
    uncertainty: float | None = None
    method: str = "given"
    evidence: str = ""


@dataclass(frozen=True)
class Rig:
    """The relation of an event sensor and a frame camera.

    Parameters
    ----------
    offset_us, drift_ppm : Quantity
        ``t_frame = t_event + offset + 1e-6 * drift_ppm * (t_event - t_first_event)``.
    contrast_positive, contrast_negative : Quantity
        Contrast thresholds, natural log units, both > 0.
    ramp_us : Quantity
        How long before its event a change of light began, at the most; 0: a staircase.
    hot_pixels : Quantity
        Value: list of [x, y] in sensor pixels, whose events are dropped.
    frame_noise : Quantity
        Value: [floor, shot]; variance of the frames' linear light = floor^2 + shot * light, 1 = full scale.
    sensor_size : tuple of int
        Width, height of the event sensor.
    """

    offset_us: Quantity
    drift_ppm: Quantity
    contrast_positive: Quantity
    contrast_negative: Quantity
    ramp_us: Quantity = Quantity(0, None, "assumed", "not looked for")
    hot_pixels: Quantity = Quantity((), None, "assumed", "not looked for")
    frame_noise: Quantity = Quantity((0.002, 5e-5), None, "assumed", "not looked for")
    sensor_size: tuple[int, int] = (0, 0)

    @property
    def contrast(self) -> Contrast:
        """What one event means; the thresholds must be known."""
        return Contrast(
            float(self.contrast_positive.value), float(self.contrast_negative.value), int(self.ramp_us.value or 0)
        )

    def noise(self, light: NDArray[np.float32]) -> NDArray[np.float32]:
        """Give the standard deviation of the frames' noise at some light, any shape, linear with 1 = full scale."""
        floor, shot = self.frame_noise.value
        # variance = floor^2 + shot * light
        return np.sqrt(np.float32(floor**2) + np.float32(shot) * np.maximum(light, 0))


class RiggedEvents:
    """Events as the frames see them: in the frame clock, on the frame's pixels, bad pixels dropped.

    In a bad pixel's place stand the events of the pixel beside it: without any it would miss all that moves there.

    Parameters
    ----------
    source : EventSource
        Events in the sensor's own world.
    rig : Rig
    frame_size : tuple of int
        Width, height of the (cropped) frame.
    crop_origin : tuple of int
        Corner of the crop in the whole frame.
    full_size : tuple of int
        Width, height of the whole frame. A sensor of this size is cropped with the frame; one of the cropped size
        matches it as it is.
    """

    def __init__(
        self,
        source: EventSource,
        rig: Rig,
        frame_size: tuple[int, int],
        crop_origin: tuple[int, int] = (0, 0),
        full_size: tuple[int, int] | None = None,
    ) -> None:
        self._source = source
        self._clock = ClockMap(int(rig.offset_us.value), float(rig.drift_ppm.value), source.first_us)
        whole = full_size or frame_size
        self._origin = crop_origin if tuple(source.size) == tuple(whole) else (0, 0)
        self.size = frame_size
        width, height = source.size
        self._bad: NDArray[np.bool_] = np.zeros((height, width), dtype=bool)
        hot: Sequence[Sequence[int]] = rig.hot_pixels.value or []
        if len(hot):
            columns, rows = np.asarray(hot, dtype=np.int64).T
            self._bad[rows, columns] = True
        self._beside = _lent(self._bad)
        self.count = source.count
        self.notes = source.notes
        self.first_us, self.last_us, self.cover_start_us, self.cover_end_us = (
            int(t)
            for t in self._clock.to_frame(
                np.array([source.first_us, source.last_us, source.cover_start_us, source.cover_end_us], dtype=np.int64)
            )
        )

    def between(self, start_us: int, end_us: int) -> Events:
        """Events of ``[start_us, end_us)`` of the frame clock."""
        events = self._source.between(self._clock.to_event(start_us), self._clock.to_event(end_us))
        x0, y0 = self._origin
        width, height = self.size
        # uint16 wraps below the crop's corner to large numbers, which the upper bound then rejects
        events = _with_lent(events.keep(~self._bad[events.y, events.x]), self._beside)
        x, y = events.x - np.uint16(x0), events.y - np.uint16(y0)
        inside = (x < width) & (y < height)
        moved = Events(self._clock.to_frame(events.t_us), x, y, events.polarity)
        return moved if inside.all() else moved.keep(inside)

    def count_between(self, start_us: int, end_us: int) -> int:
        """About how many events lie in ``[start_us, end_us)`` of the frame clock."""
        return self._source.count_between(self._clock.to_event(start_us), self._clock.to_event(end_us))

    def covers(self, start_us: int, end_us: int) -> bool:
        """Whether the sensor was recording all through ``[start_us, end_us)``."""
        return self.cover_start_us <= start_us and end_us <= self.cover_end_us

    def close(self) -> None:
        """Release the file."""
        self._source.close()


def _lent(bad: NDArray[np.bool_]) -> NDArray[np.int64] | None:
    """For each pixel, the bad one beside it that its events stand in for, counted row by row; -1 for none."""
    if not bad.any():
        return None
    height, width = bad.shape
    lent = np.full(bad.shape, -1, np.int64)
    for row, column in np.argwhere(bad):
        for y, x in ((row, column + 1), (row, column - 1), (row + 1, column), (row - 1, column)):
            if 0 <= y < height and 0 <= x < width and not bad[y, x] and lent[y, x] < 0:
                lent[y, x] = row * width + column
                break
    return lent


def _with_lent(events: Events, lent: NDArray[np.int64] | None) -> Events:
    """Let events stand a second time, right behind themselves, at the pixel they are lent to."""
    if lent is None:
        return events
    to = lent[events.y, events.x]
    times = 1 + (to >= 0)
    order = np.repeat(np.arange(len(events)), times)
    second = np.cumsum(times)[to >= 0] - 1
    x, y = events.x[order], events.y[order]
    y[second], x[second] = np.divmod(to[to >= 0], lent.shape[1])
    return Events(events.t_us[order], x, y, events.polarity[order])
