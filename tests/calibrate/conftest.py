"""Simulated recordings that several tests share: made once, small, with everything about them known."""

from dataclasses import dataclass, replace
from functools import cache

import cv2
import numpy as np
import pytest

from enhance.calibrate import calibrate
from enhance.recording import EventArray, Events, Recording
from enhance.settings import RigSettings
from enhance.simulate import Camera, EventSensor, simulate


@dataclass(frozen=True)
class Pan:
    """A random surface that never repeats, drawn past at a speed that sways; some columns on the left stand still."""

    seed: int
    speed_px_s: float
    size: tuple = (80, 60)
    still: int = 0
    color: bool = False
    length: int = 900
    name: str = "pan"

    def render(self, t_s):
        surface = _surface(self.seed, self.size[1], self.length)
        # at most `speed_px_s`: a steady part and a sway of 3 Hz
        x = 0.7 * self.speed_px_s * t_s + 0.3 * self.speed_px_s / 18.8 * (1 - np.cos(18.8 * t_s))
        whole = int(x)
        part = np.float32(x - whole)
        width = self.size[0]
        out = (1 - part) * surface[:, whole : whole + width] + part * surface[:, whole + 1 : whole + 1 + width]
        if self.still:
            out[:, : self.still] = surface[:, -self.still :]
        return np.stack([out, 0.8 * out, 0.6 * out], axis=2) if self.color else out


@cache
def _surface(seed, height, length):
    rng = np.random.default_rng(seed)
    fine, coarse = (
        cv2.GaussianBlur(rng.standard_normal((height, length)).astype(np.float32), (0, 0), sigma) * sigma * 3.5
        for sigma in (1.5, 5.0)
    )
    return np.clip(0.25 * np.exp(0.4 * fine + 0.4 * coarse), 0.03, 0.92).astype(np.float32)


CAMERA = Camera(rate_hz=50.0, exposure_us=12_000, start_us=6_000)
SENSOR = EventSensor(0.2, 0.24, noise_hz=0.2)
#: name: scene, camera, sensor, seconds, clock offset
RECORDINGS = {
    "plain": (Pan(1, 600.0, still=26), CAMERA, SENSOR, 0.16, -5_300),
    "strong": (Pan(2, 500.0, still=26), CAMERA, EventSensor(0.30, 0.18, mismatch=0.03, noise_hz=1.0), 0.14, 700),
    "colour": (Pan(3, 600.0, color=True, size=(64, 48)), CAMERA, SENSOR, 0.12, 2_000),
    "long": (Pan(4, 170.0, size=(64, 48), length=1200), Camera(rate_hz=25.0, exposure_us=20_000), SENSOR, 4.0, 0),
    "sharp": (
        Pan(5, 300.0, size=(64, 48)),
        Camera(rate_hz=50.0, exposure_us=300, start_us=6_000),
        SENSOR,
        0.15,
        -6_600,
    ),
}


@cache
def simulated_as(name):
    scene, camera, sensor, seconds, offset = RECORDINGS[name]
    return simulate(scene, camera, sensor, seconds, 11, clock_offset_us=offset)


@cache
def rig_of(name, shift_us):
    recording = shift(simulated_as(name).recording, shift_us)
    return calibrate(recording, range(len(recording.frames)), RigSettings())


def shift(recording, by_us):
    """Move the event clock: a true offset sinks by as much."""
    source = recording.events
    moved = Events(source.events.t_us + by_us, source.events.x, source.events.y, source.events.polarity)
    cover = (source.cover_start_us + by_us, source.cover_end_us + by_us)
    return Recording(recording.title, recording.frames, EventArray(moved, source.size, cover))


@dataclass(frozen=True)
class OnlyKeys:
    """Frames of which only some may be looked at."""

    frames: object
    keys: tuple

    def __getattr__(self, name):
        return getattr(self.frames, name)

    def __len__(self):
        return len(self.frames)

    def frame(self, index):
        if index not in self.keys:
            raise AssertionError(f"frame {index} is held out and was looked at")
        return self.frames.frame(index)


@pytest.fixture(scope="session")
def simulated():
    return simulated_as


@pytest.fixture(scope="session")
def found():
    return lambda name, shift_us=0: rig_of(name, shift_us)


@pytest.fixture(scope="session")
def shifted():
    return shift


@pytest.fixture(scope="session")
def only_keys():
    return OnlyKeys


@pytest.fixture(scope="session")
def with_events():
    """Give the frames of a recording other events."""

    def exchange(recording, events, cover=None, size=None):
        return replace(recording, events=EventArray(events, size or recording.events.size, cover))

    return exchange


@pytest.fixture(scope="session")
def pan():
    return Pan
