"""Frames under a flickering lamp, brought to what they would be under steady light."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from enhance.calibrate.flicker import Lamp
from enhance.calibrate.steady import SteadyEvents
from enhance.kernels.double_integral import log_blur_ratio
from enhance.light import Light, luma
from enhance.recording import Contrast, Events, Frame, FrameSource
from enhance.rig import Quantity, Rig, RiggedEvents

#: Samples of the lamp's light within one exposure or cycle.
SAMPLES = 1_024
#: Frames looked at to see whether they beat with the lamp, light that tells, and the least spread of their brightness
#: (natural log) that can be told from what moves.
LOOKED_AT, USABLE_LIGHT, LEAST_SPREAD = 48, (0.02, 0.97), 0.004

#: What remains of depth (relative) and phase (radians) on simulated recordings whose truth is known.
DEPTH_ERROR, PHASE_ERROR = 0.06, 0.05
FITTED = "cycle fitted to the events"


@dataclass(frozen=True)
class _Light:
    """A lamp's light over an interval, its mean over a cycle being 1: times (S,) and its integral up to them (S,)."""

    t_us: NDArray[np.float64]
    total_us: NDArray[np.float64]

    @property
    def mean(self) -> float:
        """Over the interval."""
        return float(self.total_us[-1] / (self.t_us[-1] - self.t_us[0]))

    def in_lamp_time(self, t_us: NDArray[np.int64]) -> NDArray[np.int64]:
        """Move times to where as much light had fallen in as under steady light; both ends of the interval stay."""
        within = np.interp(t_us.astype(np.float64), self.t_us, self.total_us / self.mean + self.t_us[0])
        inside = (t_us > self.t_us[0]) & (t_us < self.t_us[-1])
        return np.where(inside, np.rint(within).astype(np.int64), t_us)


def _light(lamp: Lamp, threshold: float, start_us: int, end_us: int) -> _Light:
    """Light over ``[start, end)`` of the event clock, counted from its start."""
    cycle = 1e6 / lamp.frequency_hz
    around = np.rint(np.arange(SAMPLES) * (cycle / SAMPLES)).astype(np.int64) + start_us
    usual = float(np.exp(threshold * lamp.level(around)).mean())
    t = np.linspace(0, end_us - start_us, SAMPLES + 1)
    light = np.exp(threshold * lamp.level(start_us + np.rint(t).astype(np.int64))) / usual
    # trapezoids
    steps = 0.5 * (light[1:] + light[:-1]) * np.diff(t)
    return _Light(t, np.concatenate([[0.0], np.cumsum(steps)]))


def brightness(events: RiggedEvents, rig: Rig, start_us: int, end_us: int) -> float:
    """How bright the lamp is over an exposure of the frame clock, its mean over a cycle being 1."""
    steady = events.source
    if not isinstance(steady, SteadyEvents):
        return 1.0
    start, end = events.clock.to_event(start_us), events.clock.to_event(end_us)
    lamp = steady.lamp_at((start + end) // 2)
    return _light(lamp, float(rig.contrast_positive.value), start, max(end, start + 1)).mean


def find_beat(frames: FrameSource, keys: Sequence[int], events: RiggedEvents, rig: Rig) -> Quantity:
    """Tell whether the frames see the lamp that the events see.

    Parameters
    ----------
    frames : FrameSource
    keys : sequence of int
        Frames that may be looked at.
    events : RiggedEvents
        Over `SteadyEvents`.
    rig : Rig
        With clock and thresholds.

    Returns
    -------
    Quantity
        1 where the frames grow brighter and darker with the lamp, 0 where not; the evidence says by how much.
    """
    method = "frames' brightness against the lamp's"
    some = np.unique(np.linspace(0, len(keys) - 1, min(len(keys), LOOKED_AT)).round().astype(int))
    chosen = [keys[int(k)] for k in some]
    lamp = np.log([brightness(events, rig, int(frames.start_us[k]), int(frames.end_us[k])) for k in chosen])
    spread = float(np.ptp(lamp)) if len(lamp) else 0.0
    if spread < LEAST_SPREAD or len(chosen) < 3:
        return Quantity(1, None, "assumed", f"the lamp's light over the exposures differs by only {spread:.2%}")
    images = [luma(frames.frame(k).image) for k in chosen]
    low, high = USABLE_LIGHT
    change = []
    for one, two in zip(images, images[1:], strict=False):
        usable = (one > low) & (one < high) & (two > low) & (two < high)
        change.append(float(np.median(np.log(two[usable] / one[usable]))) if usable.any() else 0.0)
    expected = np.diff(lamp)
    slope = float((expected @ np.array(change)) / (expected @ expected))
    evidence = f"the lamp's light differs by {spread:.1%} between frames; these follow it {slope:.2f} times"
    return Quantity(int(slope > 0.5), None, method, evidence)


def lamp_told(rig: Rig, frames: FrameSource, keys: Sequence[int], events: RiggedEvents) -> Rig:
    """Say how deep a lamp's flicker is, in which phase, and whether the frames see it, once the thresholds are known.

    Parameters
    ----------
    rig : Rig
    frames : FrameSource
    keys : sequence of int
        Frames that may be looked at.
    events : RiggedEvents

    Returns
    -------
    Rig
        Unchanged where no lamp flickers.
    """
    steady = events.source
    if not isinstance(steady, SteadyEvents):
        return rig
    lamp, threshold = steady.lamp, rig.contrast_positive
    # ln((1 + d) / (1 - d)) = the swing
    depth = float(np.tanh(0.5 * lamp.swing * float(threshold.value)))
    told = f"swing of {lamp.swing:.2f} positive thresholds over a cycle, {lamp.harmonics_text}"
    unsure = (threshold.uncertainty or 0.0) / float(threshold.value)
    rig = replace(
        rig,
        flicker_depth=Quantity(depth, depth * float(np.hypot(unsure, DEPTH_ERROR)), FITTED, told),
        flicker_phase=Quantity(lamp.phase, PHASE_ERROR, FITTED, "radians at the first event, of the sine"),
    )
    if rig.flicker_in_frames.value is None:
        rig = replace(rig, flicker_in_frames=find_beat(frames, keys, events, rig))
    return rig


def evenly_lit(frames: FrameSource, events: RiggedEvents | None, rig: Rig) -> FrameSource:
    """Bring frames to what they would be under steady light, where they see a lamp flicker; else they stay as they are.

    Parameters
    ----------
    frames : FrameSource
    events : RiggedEvents or None
    rig : Rig

    Returns
    -------
    FrameSource
    """
    seen = events is not None and isinstance(events.source, SteadyEvents) and rig.flicker_in_frames.value
    return EvenlyLit(frames, events, rig) if seen and events is not None else frames


class EvenlyLit:
    """A `FrameSource` whose frames look as under steady light.

    Each frame is divided by the lamp's mean light over its exposure. What moved in it was weighed by the lamp's light
    of each instant; by the events' double integral it is weighed evenly instead.

    Parameters
    ----------
    frames : FrameSource
    events : RiggedEvents
        Over `SteadyEvents`.
    rig : Rig
    """

    def __init__(self, frames: FrameSource, events: RiggedEvents, rig: Rig) -> None:
        self._frames, self._events, self._rig = frames, events, rig
        self.start_us, self.end_us, self.gain, self.names = frames.start_us, frames.end_us, frames.gain, frames.names
        self.shape, self.full_size, self.crop_origin = frames.shape, frames.full_size, frames.crop_origin
        self.notes = frames.notes

    @property
    def light(self) -> Light:
        """The frames' own curve."""
        return self._frames.light

    def __len__(self) -> int:
        return len(self._frames)

    def frame(self, index: int) -> Frame:
        """One frame in linear light, as under a steady lamp."""
        frame = self._frames.frame(index)
        height = frame.image.shape[0]
        row_us = float(self._rig.row_time_us.value or 0) or frame.row_time_us
        first = 0
        image = np.empty_like(frame.image)
        # rows of a rolling shutter see the lamp one after another: bands that share a twentieth of its cycle
        rows = height if not row_us else max(1, int(0.05 * 1e6 / self._frequency / abs(row_us)))
        while first < height:
            band = slice(first, min(first + rows, height))
            late = round(row_us * ((band.start + band.stop - 1) / 2)) if row_us else 0
            image[band] = self._even(frame, late, band)
            first += rows
        return replace(frame, image=image)

    def close(self) -> None:
        """Release the file."""
        self._frames.close()

    @property
    def _frequency(self) -> float:
        return float(self._rig.flicker_hz.value)

    def _even(self, frame: Frame, late_us: int, band: slice) -> NDArray[np.float32]:
        """Rows of a frame that are exposed `late_us` after row 0's."""
        start, end = frame.start_us + late_us, frame.end_us + late_us
        image = frame.image[band]
        steady = self._events.source
        if not isinstance(steady, SteadyEvents):
            return image
        event_start, event_end = self._events.clock.to_event(start), self._events.clock.to_event(end)
        lamp = steady.lamp_at((event_start + event_end) // 2)
        contrast = self._rig.contrast
        light = _light(lamp, float(self._rig.contrast_positive.value), event_start, max(event_end, event_start + 1))
        even = image / np.float32(light.mean)
        if end <= start or not self._events.covers(start, end):
            return even
        correction = _weighing(self._events, (start, end), light, contrast, image.shape[:2], band.start)
        return np.asarray(even * (correction if image.ndim == 2 else correction[..., None]), dtype=np.float32)


def _weighing(
    events: RiggedEvents,
    interval_us: tuple[int, int],
    light: _Light,
    contrast: Contrast,
    shape: tuple[int, ...],
    first_row: int,
) -> NDArray[np.float32]:
    """Mean light of the scene over an exposure, over its mean weighed by the lamp, (H, W)."""
    start, end = interval_us
    ramp = contrast.ramp_us
    near = events.between(start - ramp, end + 2 * ramp)
    near = near.keep((near.y >= first_row) & (near.y < first_row + shape[0]))
    near = replace(near, t_us=near.t_us - start, y=near.y - np.uint16(first_row))
    weighed = Events(light.in_lamp_time(near.t_us), near.x, near.y, near.polarity)
    length, hw = end - start, (shape[0], shape[1])
    # both against the light at the start, which no lamp moves
    plain = log_blur_ratio(near, 0, length, 0, contrast, hw) - log_blur_ratio(weighed, 0, length, 0, contrast, hw)
    return np.exp(plain).astype(np.float32)
