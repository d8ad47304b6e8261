"""Recordings from recipes: simulated, then spoiled by what real instruments do and the simulator leaves out."""

from __future__ import annotations

from dataclasses import dataclass, replace

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.light import Image, encode
from enhance.recording import EventArray, Events, FrameArray, Recording
from enhance.rig import Quantity, Rig
from enhance.simulate import Camera, EventSensor, Simulated, make_scene, simulate
from enhance.train.recipe import Recipe, Rng, Violations

#: Time either side of the frames that the event sensor covers, microseconds: room for lag and every clock error.
MARGIN_US = 12_000
#: Blocks over which events are counted as crowded: pixels along either side, microseconds.
BLOCK_PX, BLOCK_US, BUSY_US = 16, 4_000, 500
#: Light at which a pixel's lag is half of a dark one's.
HALF_LAG_LIGHT = 0.1
#: How far the scene's own light is from frame noise when a lag is looked up, pixels of blur.
LAG_BLUR_PX = 1.0


@dataclass(frozen=True)
class SpoiledCamera(Camera):
    """A camera with light of its own added, and a gain that clips; see `Violations`."""

    pedestal: float = 0.0
    gain: float = 1.0

    def seen(self, light: Image) -> Image:
        """Light as this camera sees it without noise, any shape, 0 to 1."""
        lit = np.float32(self.gain) * light
        return np.clip(lit * np.float32(1 - self.pedestal) + np.float32(self.pedestal), 0, 1)

    def capture(self, exposed: Image, rng: np.random.Generator) -> NDArray[np.generic]:
        """Turn mean light over an exposure into code values."""
        # The sensor fills up over the exposure: it is the mean that clips.
        return super().capture(self.seen(exposed), rng)


@dataclass(frozen=True)
class Sample:
    """A recording as the tool gets it, and its truth.

    Parameters
    ----------
    recipe : Recipe
    recording : Recording
    rig : Rig
        The true one, disturbed.
    simulated : Simulated
    camera : SpoiledCamera
    """

    recipe: Recipe
    recording: Recording
    rig: Rig
    simulated: Simulated
    camera: SpoiledCamera

    def truth(self, time_us: int) -> Image:
        """Show one instant as the frames' own camera would, sharp and without noise; (H, W), linear light."""
        seen = self.camera.seen(self.simulated.truth(time_us))
        return self.recording.frames.light.to_linear(self.camera.light.to_codes(seen))


def record(recipe: Recipe, rng: Rng) -> Sample:
    """Render a recording, spoil it, and disturb its rig.

    Parameters
    ----------
    recipe : Recipe
    rng : numpy.random.Generator

    Returns
    -------
    Sample
    """
    scene = make_scene(recipe.kind, recipe.size, np.random.default_rng(recipe.seed), recipe.speed_px_s)
    violations = recipe.violations
    camera = SpoiledCamera(
        rate_hz=recipe.rate_hz,
        exposure_us=recipe.exposure_us,
        bits=recipe.bits,
        light_curve=recipe.light_curve,
        full_well=recipe.full_well,
        read_noise=recipe.read_noise,
        start_us=MARGIN_US,
        pedestal=violations.pedestal,
        gain=violations.gain,
    )
    sensor = EventSensor(
        *recipe.contrast,
        mismatch=recipe.mismatch,
        refractory_us=recipe.refractory_us,
        noise_hz=recipe.noise_hz,
        leak_hz=recipe.leak_hz,
        hot_fraction=recipe.hot_fraction,
        latency_us=2 * recipe.jitter_us,
        latency_jitter_us=recipe.jitter_us,
    )
    duration_us = 2 * MARGIN_US + recipe.exposure_us + (recipe.keys - 1) * 1e6 / recipe.rate_hz
    simulated = simulate(scene, camera, sensor, duration_us * 1e-6, recipe.seed, title=f"{recipe.kind}-{recipe.seed}")
    frames, source = simulated.recording.frames, simulated.recording.events
    assert isinstance(frames, FrameArray)
    read = replace(frames, light=replace(frames.light, curve=_read_as(recipe)))
    events, late_us = _spoiled(source.between(0, simulated.duration_us), read, violations, rng)
    recording = replace(
        simulated.recording,
        frames=read,
        events=EventArray(events, recipe.size, (source.cover_start_us, source.cover_end_us)),
    )
    # A calibrated clock takes up what latency there is in the mean.
    delay_us = 2 * recipe.jitter_us + late_us
    return Sample(recipe, recording, _disturbed(recipe, simulated, delay_us, rng), simulated, camera)


def _read_as(recipe: Recipe) -> str:
    """Name the curve the tool is told."""
    exponent = recipe.violations.exponent
    if exponent == 1.0:
        return recipe.light_curve
    gamma = exponent if recipe.light_curve == "linear" else 2.2 * exponent
    return f"gamma {gamma:.3f}"


def _spoiled(events: Events, frames: FrameArray, violations: Violations, rng: Rng) -> tuple[Events, float]:
    """Lose some events and let dark pixels' be late; gives the mean delay as well."""
    if violations.lost:
        events = events.keep(_kept(events, violations, rng))
    if violations.bursts and len(events):
        events = events.keep(_outside_bursts(events.t_us, violations, rng))
    if not violations.lag_us or not len(events):
        return events, 0.0
    # Light as of the frame nearest in time, blurred against its noise.
    lit = np.stack([cv2.GaussianBlur(frames.frame(k).image, (0, 0), LAG_BLUR_PX) for k in range(len(frames))])
    middle = (frames.start_us + frames.end_us) // 2
    nearest = np.searchsorted((middle[1:] + middle[:-1]) // 2, events.t_us)
    light = np.maximum(lit[nearest, events.y, events.x], 0)
    late = violations.lag_us * HALF_LAG_LIGHT / (HALF_LAG_LIGHT + light)
    t_us = events.t_us + late.astype(np.int64)
    order = np.argsort(t_us, kind="stable")
    late_events = Events(t_us[order], events.x[order], events.y[order], events.polarity[order])
    return late_events, float(late.mean())


def _kept(events: Events, violations: Violations, rng: Rng) -> NDArray[np.bool_]:
    """Choose the events that survive, shape (N,)."""
    if violations.lost_where == "all" or not len(events):
        return rng.random(len(events)) >= violations.lost
    if violations.lost_where == "busy":
        block = events.t_us // BUSY_US
    else:
        columns = int(events.x.max()) // BLOCK_PX + 1
        rows = int(events.y.max()) // BLOCK_PX + 1
        place = (events.y // BLOCK_PX).astype(np.int64) * columns + events.x // BLOCK_PX
        block = events.t_us // BLOCK_US * (rows * columns) + place
    _, inverse, count = np.unique(block, return_inverse=True, return_counts=True)
    crowd = count[inverse].astype(np.float64)
    # What exceeds a capacity is lost; the capacity is one at which about the asked share goes.
    capacity = np.quantile(crowd, 0.5) * (1 - violations.lost)
    return rng.random(len(events)) < capacity / crowd


def _outside_bursts(t_us: NDArray[np.int64], violations: Violations, rng: Rng) -> NDArray[np.bool_]:
    """Choose the events outside the bursts in which all are lost, shape (N,); a burst at least."""
    millisecond = (t_us - t_us[0]) // 1000
    span_ms = int(millisecond[-1]) + 1
    count = max(1, round(violations.bursts * span_ms / violations.burst_ms))
    starts = rng.integers(0, max(span_ms - violations.burst_ms, 1), count)
    lost = np.zeros(span_ms + violations.burst_ms, dtype=np.bool_)
    lost[starts[:, None] + np.arange(violations.burst_ms)] = True
    return ~lost[millisecond]


def _disturbed(recipe: Recipe, simulated: Simulated, delay_us: float, rng: Rng) -> Rig:
    """Tell the rig as a calibration would: near the truth."""
    error, hot = recipe.rig, simulated.hot
    known = hot[rng.random(len(hot)) < error.hot_known]
    full_well = recipe.full_well
    # quantisation is uniform over a step: 1 / sqrt(12)
    steps = 1 / (np.sqrt(12) * simulated.camera.light.white)
    floor = float(np.hypot(recipe.read_noise / full_well, steps)) * error.noise
    positive, negative = (max(c * f, 0.03) for c, f in zip(recipe.contrast, error.contrast, strict=True))
    return Rig(
        offset_us=Quantity(round(error.clock_us - delay_us)),
        drift_ppm=Quantity(0.0),
        contrast_positive=Quantity(positive),
        contrast_negative=Quantity(negative),
        ramp_us=Quantity(error.ramp_us),
        hot_pixels=Quantity(known.tolist()),
        frame_noise=Quantity((max(floor, 0.001), error.noise**2 / full_well)),
        sensor_size=recipe.size,
    )


def signal(linear: Image) -> Image:
    """Encode linear light as sRGB signal, both clipped to 0 to 1: the domain of the network's pictures."""
    return encode("srgb", np.clip(linear, 0, 1))
