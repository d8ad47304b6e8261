"""One scene through both instruments at once: a recording, and the truth behind it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from enhance.clock import ClockMap
from enhance.light import Image
from enhance.recording import EventArray, Events, FrameArray, Recording
from enhance.simulate.camera import Camera
from enhance.simulate.rolling import RowExposure
from enhance.simulate.scene import Scene
from enhance.simulate.second_view import SecondView
from enhance.simulate.sensor import EventSensor, SensorRun

#: Motion between two pictures the instruments are shown, pixels; log light in between is taken as straight.
STEP_PX = 0.35

#: Pictures a cycle of a flickering lamp.
STEPS_A_CYCLE = 48


@dataclass(frozen=True)
class Simulated:
    """A simulated recording with everything that a real one hides.

    Parameters
    ----------
    recording : Recording
        Frames in the frame clock, events in the event clock.
    scene : Scene
    camera : Camera
    sensor : EventSensor
    clock : ClockMap
        The true map from event time to frame time.
    contrast_positive, contrast_negative : ndarray of float64, shape (H, W)
        Each pixel's own thresholds.
    hot : ndarray of int64, shape (N, 2)
        Column and row of the hot pixels.
    seed : int
    duration_us : int
        The scene ran over ``[0, duration)`` of the frame clock.
    """

    recording: Recording
    scene: Scene
    camera: Camera
    sensor: EventSensor
    clock: ClockMap
    contrast_positive: NDArray[np.float64]
    contrast_negative: NDArray[np.float64]
    hot: NDArray[np.int64]
    seed: int
    duration_us: int

    @property
    def triggers_us(self) -> NDArray[np.int64]:
        """When each exposure was started, in the event clock, shape (K,): what a trigger table would hold."""
        return np.array([self.clock.to_event(int(start)) for start in self.recording.frames.start_us], dtype=np.int64)

    def truth(self, t_us: float) -> Image:
        """Sharp, noise-free linear image at a time of the frame clock, under steady light; (H, W) or (H, W, 3).

        As a frame could show it: highlights end at full scale, 1.
        """
        return np.minimum(self.scene.render(t_us * 1e-6), np.float32(1.0))


def simulate(
    scene: Scene,
    camera: Camera,
    sensor: EventSensor,
    duration_s: float,
    seed: int,
    clock_offset_us: int = 0,
    drift_ppm: float = 0.0,
    title: str = "",
    second_view: SecondView | None = None,
) -> Simulated:
    """Record a scene with a frame camera and an event sensor that share one view, or have each its own.

    Memory holds one picture, one frame and the events; each picture is drawn once and shown to both instruments.

    Parameters
    ----------
    scene : Scene
    camera : Camera
    sensor : EventSensor
    duration_s : float
        The scene runs over ``[0, duration)``, which the event sensor covers; frames are those whose exposure fits.
    seed : int
        Of all noise, thresholds and part-filled references.
    clock_offset_us, drift_ppm : int, float
        ``t_frame = t_event + offset + 1e-6 * drift * (t_event - t_first_event)``.
    title : str
        The scene's name if left out.
    second_view : SecondView, optional
        Where the event sensor looks; the frames' own view, pixel by pixel, if left out.

    Returns
    -------
    Simulated

    Raises
    ------
    ValueError
        If no whole exposure fits into the duration.
    """
    camera_rng, sensor_rng = np.random.default_rng(seed).spawn(2)
    duration_us = round(duration_s * 1e6)
    starts, ends = camera.exposures(duration_us, scene.size[1])
    if not len(starts):
        raise ValueError(
            f"a duration of {duration_us} us holds no exposure of {camera.exposure_us} us "
            f"that starts at {camera.start_us} us; expected a longer one"
        )
    sensor_size = second_view.size if second_view else scene.size
    run = SensorRun(sensor, sensor_size, sensor_rng)
    codes: list[NDArray[np.generic]] = []
    kept: list[Events] = []
    exposed, count = np.zeros(1), 0
    rolling = RowExposure(camera, scene.size[1], duration_us, _longest_step(scene, sensor))
    instants = rolling.instants() if camera.row_time_us else _instants(scene, camera, sensor, duration_us)
    for time_us, frame, samples in instants:
        steady = scene.render(time_us * 1e-6)
        lit = steady * np.float32(sensor.lamp(time_us * 1e-6)) if sensor.lamp_depth else steady
        kept.append(run.advance(second_view.show(lit) if second_view else lit, time_us))
        seen = lit if camera.sees_lamp else steady
        if camera.row_time_us:
            codes += [camera.at(k).capture(whole, camera_rng) for k, whole in rolling.add(seen, time_us)]
        if frame < 0:
            continue
        # midpoint rule in linear light, summed in float64
        exposed, count = (exposed + seen, count + 1) if count else (seen.astype(np.float64), 1)
        if count == samples:
            codes.append(camera.at(frame).capture((exposed / count).astype(np.float32), camera_rng))
            count = 0
    # what latency carries past the end is not recorded any more
    told = _joined(kept).between(0, duration_us)
    events, clock, cover = into_event_clock(told, duration_us, clock_offset_us, drift_ppm)
    frames = FrameArray(np.stack(codes), starts, ends, camera.light, gains=camera.frame_gains(len(starts)))
    return Simulated(
        Recording(title or scene.name, frames, EventArray(events, sensor_size, cover)),
        scene,
        camera,
        sensor,
        clock,
        run.contrast_positive,
        run.contrast_negative,
        run.hot,
        seed,
        duration_us,
    )


def _instants(scene: Scene, camera: Camera, sensor: EventSensor, duration_us: int) -> Iterator[tuple[float, int, int]]:
    """Instants at which the scene is drawn, with the frame each is part of (-1: none) and that frame's count.

    Exposures are divided into equal parts, each shown by its middle; the gaps are filled with steps no longer.
    """
    longest = _longest_step(scene, sensor)
    yield 0.0, -1, 0
    last = 0.0
    for frame, (start, end) in enumerate(zip(*camera.exposures(duration_us), strict=True)):
        samples = max(5, int(np.ceil((end - start) / longest)))
        step = int(end - start) / samples
        yield from ((t, -1, 0) for t in _filled(last, start + 0.5 * step, longest))
        for k in range(samples):
            last = start + (k + 0.5) * step
            yield last, frame, samples
    yield from ((t, -1, 0) for t in _filled(last, float(duration_us), longest))
    if last < duration_us:
        yield float(duration_us), -1, 0


def _longest_step(scene: Scene, sensor: EventSensor) -> float:
    """Longest time between two pictures, microseconds."""
    longest = 1e6 * STEP_PX / max(scene.speed_px_s, 1.0)
    return min(longest, 1e6 / sensor.lamp_hz / STEPS_A_CYCLE) if sensor.lamp_depth else longest


def _filled(start: float, end: float, longest: float) -> NDArray[np.float64]:
    """Instants strictly between two that leave no step over `longest`."""
    return np.linspace(start, end, int(np.ceil((end - start) / longest)) + 1)[1:-1]


def _joined(kept: list[Events]) -> Events:
    """All steps' events as one table, sorted by time (a latency that varies may have crossed the steps)."""
    t = np.concatenate([events.t_us for events in kept])
    columns = [np.concatenate([getattr(events, name) for events in kept]) for name in ("x", "y", "polarity")]
    if len(t) > 1 and (np.diff(t) < 0).any():
        order = np.argsort(t, kind="stable")
        t, columns = t[order], [column[order] for column in columns]
    return Events(t, *columns)


def into_event_clock(
    events: Events, duration_us: int, offset_us: int, drift_ppm: float
) -> tuple[Events, ClockMap, tuple[int, int]]:
    """Turn frame times into event times, so that the clock's own formula leads back; and the cover with them."""
    first = int(events.t_us[0]) if len(events) else 0
    clock = ClockMap(offset_us, drift_ppm, first - offset_us)
    edges = np.array([0, duration_us], dtype=np.int64)
    # t_event = t_first + (t_frame - t_frame_first) / (1 + 1e-6 drift), and t_first = t_frame_first - offset
    stretch = 1.0 / (1.0 + 1e-6 * drift_ppm)
    moved, cover = (np.rint((t - first) * stretch).astype(np.int64) + first - offset_us for t in (events.t_us, edges))
    # rounding may set the last event onto the end, which is outside: half-open
    end = max(int(cover[1]), int(moved[-1]) + 1) if len(moved) else int(cover[1])
    return Events(moved, events.x, events.y, events.polarity), clock, (int(cover[0]), end)
