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
from enhance.view import Lens, View, shared_view

#: Under a flickering lamp pixels tell more often than thresholds are crossed: without it, halves of one are told.
STEADY_PARTS = 2
#: A stretch that lost this share of its events counts as not recorded: what is left tells of some of it only.
MOST_LOST = 0.1


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
    row_time_us : Quantity
        From one row of the frames to the next, microseconds: 0 for a global shutter, negative where read upward.
    stripes : Quantity
        Root mean square of the columns' offsets that were taken out of the frames. Of this recording alone, like the
        next.
    brightness : Quantity
        Value: list of [frame, factor] where the frames' brightness steps without any event, which was taken out.
    sensor_size : tuple of int
        Width, height of the event sensor.
    registration : Quantity
        Value: the 3x3 matrix, row by row, event pixel to pixel of the whole frame (undistorted, where there are
        lenses), uncertainty in event pixels; None: not known, and taken as one shared view.
    frame_lens, event_lens : Quantity
        Value: fx, fy, cx, cy and the distortion coefficients; None: no distortion.
    dead_pixels : Quantity
        Value: list of [x, y] in sensor pixels that never tell anything.
    flicker_hz, flicker_depth, flicker_phase : Quantity
        A lamp whose light is ``1 + depth * sin(2 pi f (t - t_first_event) + phase)``, event clock; None: none found.
    flicker_in_frames : Quantity
        1 where the frames grow brighter and darker with it, 0 where they do not.
    lost : Quantity
        Value: list of [start, end, share of the events lost], event clock. Of this recording alone, in no rig file.
    clock_check : Quantity
        What a given clock lacks, microseconds, with a remark where that is to be told. Of this recording alone.
    """

    offset_us: Quantity
    drift_ppm: Quantity
    contrast_positive: Quantity
    contrast_negative: Quantity
    ramp_us: Quantity = Quantity(0, None, "assumed", "not looked for")
    hot_pixels: Quantity = Quantity((), None, "assumed", "not looked for")
    frame_noise: Quantity = Quantity((0.002, 5e-5), None, "assumed", "not looked for")
    sensor_size: tuple[int, int] = (0, 0)
    row_time_us: Quantity = Quantity(0.0, None, "assumed", "a global shutter")
    registration: Quantity = Quantity(None, None, "assumed", "one shared view")
    frame_lens: Quantity = Quantity(None, None, "assumed", "no lens file")
    event_lens: Quantity = Quantity(None, None, "assumed", "no lens file")
    dead_pixels: Quantity = Quantity((), None, "assumed", "not looked for")
    flicker_hz: Quantity = Quantity(None, None, "assumed", "not looked for")
    flicker_depth: Quantity = Quantity(None, None, "assumed", "not looked for")
    flicker_phase: Quantity = Quantity(None, None, "assumed", "not looked for")
    stripes: Quantity = Quantity(None, None, "assumed", "not looked for")
    brightness: Quantity = Quantity(None, None, "assumed", "not looked for")
    flicker_in_frames: Quantity = Quantity(None, None, "assumed", "not looked for")
    lost: Quantity = Quantity((), None, "assumed", "not looked for")
    clock_check: Quantity = Quantity(None, None, "assumed", "not looked for")

    @property
    def view(self) -> View | None:
        """Where the event sensor looks; None where that is not known and one shared view is taken."""
        if self.registration.value is None:
            return None
        matrix = np.asarray(self.registration.value, np.float64)
        return View(matrix, _lens(self.frame_lens), _lens(self.event_lens))

    @property
    def contrast(self) -> Contrast:
        """What one event means, as `RiggedEvents` gives them; the thresholds must be known."""
        view = self.view
        pitch = 1.0 if view is None or view.shift is not None else max(1.0, view.pitch(self.sensor_size))
        return Contrast(
            float(self.contrast_positive.value) / self.parts,
            float(self.contrast_negative.value) / self.parts,
            int(self.ramp_us.value or 0),
            pitch,
        )

    @property
    def parts(self) -> int:
        """How many events stand for a threshold: more than 1 where a lamp's flicker is taken out of them."""
        return 1 if self.flicker_hz.value is None else STEADY_PARTS

    def noise(self, light: NDArray[np.float32]) -> NDArray[np.float32]:
        """Give the standard deviation of the frames' noise at some light, any shape, linear with 1 = full scale."""
        floor, shot = self.frame_noise.value
        # variance = floor^2 + shot * light
        return np.sqrt(np.float32(floor**2) + np.float32(shot) * np.maximum(light, 0))


def _lens(quantity: Quantity) -> Lens | None:
    if quantity.value is None:
        return None
    fx, fy, cx, cy, *distortion = (float(v) for v in quantity.value)
    return Lens((fx, fy), (cx, cy), tuple(distortion))


class RiggedEvents:
    """Events as the frames see them: in the frame clock, on the frame's pixels, bad pixels dropped.

    Where the sensors' pixels do not match one to one, each frame pixel has the events of the event pixel that its
    centre falls into: an event acts on all frame pixels that it covers, with the threshold it has.

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
        Width, height of the whole frame. Without a registration, a sensor of its shape sees the same view and is
        cropped with the frame; one of the cropped size matches it as it is.

    Attributes
    ----------
    seen : ndarray of bool, shape (H, W), or None
        Pixels the sensor looks at; None: all of them.
    pitch : float
        Frame pixels that an event pixel is wide.
    source : EventSource
        In the sensor's own world.
    clock : ClockMap
        From there to the frame clock.
    """

    def __init__(
        self,
        source: EventSource,
        rig: Rig,
        frame_size: tuple[int, int],
        crop_origin: tuple[int, int] = (0, 0),
        full_size: tuple[int, int] | None = None,
    ) -> None:
        self.source = source
        self.clock = ClockMap(int(rig.offset_us.value), float(rig.drift_ppm.value), source.first_us)
        whole = full_size or frame_size
        self.size, self.view = frame_size, rig.view or shared_view(source.size, whole, crop_origin, frame_size)
        shift = self.view.shift
        self.pitch = 1.0 if shift is not None else self.view.pitch(source.size)
        self._spread = None if shift is not None else _Spread(self.view, source.size, frame_size, crop_origin)
        self._origin = tuple(c - s for c, s in zip(crop_origin, shift or crop_origin, strict=True))
        self.seen = self._overlap() if self._spread is None else self._spread.seen
        width, height = source.size
        self._bad: NDArray[np.bool_] = np.zeros((height, width), dtype=bool)
        bad: Sequence[Sequence[int]] = [*(rig.hot_pixels.value or ()), *(rig.dead_pixels.value or ())]
        if len(bad):
            columns, rows = np.asarray(bad, dtype=np.int64).T
            self._bad[rows, columns] = True
        self._beside = _lent(self._bad)
        self.count = source.count
        self.notes = source.notes
        self.first_us, self.last_us, self.cover_start_us, self.cover_end_us = (
            int(t)
            for t in self.clock.to_frame(
                np.array([source.first_us, source.last_us, source.cover_start_us, source.cover_end_us], dtype=np.int64)
            )
        )
        lost = np.array(rig.lost.value or (), np.float64).reshape(-1, 3)
        self._lost_us = self.clock.to_frame(lost[:, :2].astype(np.int64))
        self._lost_share = lost[:, 2]

    def between(self, start_us: int, end_us: int) -> Events:
        """Events of ``[start_us, end_us)`` of the frame clock."""
        events = self.source.between(self.clock.to_event(start_us), self.clock.to_event(end_us))
        events = _with_lent(events.keep(~self._bad[events.y, events.x]), self._beside)
        events = Events(self.clock.to_frame(events.t_us), events.x, events.y, events.polarity)
        if self._spread is not None:
            return self._spread(events)
        width, height = self.size
        # uint16 wraps below the crop's corner to large numbers, which the upper bound then rejects
        x, y = (column - np.uint16(at % 65_536) for column, at in zip((events.x, events.y), self._origin, strict=True))
        inside = (x < width) & (y < height)
        moved = Events(events.t_us, x, y, events.polarity)
        return moved if inside.all() else moved.keep(inside)

    def _overlap(self) -> NDArray[np.bool_] | None:
        """Where a sensor whose pixels match the frame's one to one looks."""
        seen = np.zeros(self.size[::-1], bool)
        (x0, y0), (width, height) = self._origin, self.source.size
        seen[max(0, -y0) : max(0, height - y0), max(0, -x0) : max(0, width - x0)] = True
        return None if seen.all() else seen

    def count_between(self, start_us: int, end_us: int) -> int:
        """About how many events lie in ``[start_us, end_us)`` of the frame clock."""
        return self.source.count_between(self.clock.to_event(start_us), self.clock.to_event(end_us))

    def covers(self, start_us: int, end_us: int) -> bool:
        """Whether the sensor was recording all through ``[start_us, end_us)``, and no events of it are lost."""
        lost = ((self._lost_us[:, 0] < end_us) & (start_us < self._lost_us[:, 1]))[self._lost_share >= MOST_LOST].any()
        return self.cover_start_us <= start_us and end_us <= self.cover_end_us and not lost

    def lost_share(self, start_us: int, end_us: int) -> float:
        """Largest share of the events that is lost anywhere in ``[start_us, end_us)``; 0 where none are."""
        met = (self._lost_us[:, 0] < end_us) & (start_us < self._lost_us[:, 1])
        return float(self._lost_share[met].max(initial=0.0))

    def close(self) -> None:
        """Release the file."""
        self.source.close()


class _Spread:
    """Lets each event stand at every frame pixel whose centre falls into its own pixel."""

    def __init__(
        self, view: View, sensor_size: tuple[int, int], frame_size: tuple[int, int], origin: tuple[int, int]
    ) -> None:
        from_pixel = view.lookup(sensor_size, frame_size, origin)
        seen = from_pixel >= 0
        self.seen = None if seen.all() else seen
        self._width = sensor_size[0]
        # frame pixels grouped by their event pixel: those of event pixel e stand at begin[e] .. begin[e] + count[e]
        flat = np.flatnonzero(seen)
        order = np.argsort(from_pixel.ravel()[flat], kind="stable")
        y, x = np.divmod(flat[order], frame_size[0])
        self._x, self._y = x.astype(np.uint16), y.astype(np.uint16)
        self._count = np.bincount(from_pixel.ravel()[flat], minlength=sensor_size[0] * sensor_size[1])
        self._begin = np.cumsum(self._count) - self._count

    def __call__(self, events: Events) -> Events:
        """Spread events, which stay sorted by time."""
        pixel = events.y.astype(np.int64) * self._width + events.x
        times = self._count[pixel]
        ends = np.cumsum(times)
        # 0, 1, 2 .. within each event's copies
        nth = np.arange(int(ends[-1]) if len(ends) else 0) - np.repeat(ends - times, times)
        at = np.repeat(self._begin[pixel], times) + nth
        return Events(np.repeat(events.t_us, times), self._x[at], self._y[at], np.repeat(events.polarity, times))


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
