"""The event sensor: each pixel reports when the logarithm of its light has changed by a threshold.

The model of a pixel:

- It holds a reference level. Whenever log light reaches reference + c+ (or - c-) there is an event, and the reference
  moves by exactly that threshold. At the start each reference lies at random within the dead band: a real pixel's
  threshold is part-filled when the recording begins.
- After an event the pixel is dead for the refractory time, held in reset: when it re-arms, its reference is the level
  of that instant. What happened meanwhile is lost, as in a real pixel. Without a refractory time nothing is lost.
- Leakage lets the reference sink, so that a pixel under steady light reports "brighter" at `leak_hz`.
- Noise events come at random (Poisson), either sign alike, at `noise_hz` or, for hot pixels, `hot_rate_hz`; they leave
  the reference alone, but a dead pixel gives none and they make it dead.

References
----------
Lichtsteiner, Posch, Delbruck, "A 128x128 120 dB 15 us latency asynchronous temporal contrast vision sensor", IEEE
Journal of Solid-State Circuits 43(2), 2008: the pixel. The closed forms its tests use are worked out there.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from enhance.light import Image, luma
from enhance.recording import Events
from enhance.simulate.crossing import CAPACITY, cross

#: Radiance below which the logarithm is cut off: no scene reaches it, and a lamp at full depth may.
FLOOR = 1e-3

Levels = NDArray[np.float64]


@dataclass(frozen=True)
class EventSensor:
    """An event sensor and the lamp it sees by.

    Parameters
    ----------
    contrast_positive, contrast_negative : float
        Thresholds, natural log units, each > 0.
    mismatch : float
        Standard deviation of the thresholds between pixels, relative, each polarity on its own.
    refractory_us : float
        Dead time after an event.
    noise_hz : float
        Noise events a second and pixel.
    leak_hz : float
        Events a second and pixel that leakage causes, all positive.
    hot_fraction : float
        Share of hot pixels, which give `hot_rate_hz` noise events a second.
    lamp_hz, lamp_depth : float
        The scene's light is multiplied by ``1 + depth sin(2 pi f t)``; depth 0: steady light.
    latency_us, latency_jitter_us : float
        Added to each event's time: a constant, and a normal deviate that never makes the whole negative.
    dark_latency_us, dark_light : float
        Added too: ``dark_latency * dark_light / (dark_light + light)``, a photoreceptor that is slower in the dark.

    Raises
    ------
    ValueError
        If a setting cannot be.
    """

    contrast_positive: float = 0.2
    contrast_negative: float = 0.2
    mismatch: float = 0.0
    refractory_us: float = 0.0
    noise_hz: float = 0.0
    leak_hz: float = 0.0
    hot_fraction: float = 0.0
    hot_rate_hz: float = 300.0
    lamp_hz: float = 100.0
    lamp_depth: float = 0.0
    latency_us: float = 0.0
    latency_jitter_us: float = 0.0
    dark_latency_us: float = 0.0
    dark_light: float = 0.1

    def __post_init__(self) -> None:
        if min(self.contrast_positive, self.contrast_negative) < 0.02:
            raise ValueError(
                f"contrast thresholds are {self.contrast_positive} and {self.contrast_negative}; expected 0.02 or more"
            )
        if not 0 <= self.lamp_depth < 1 or not 0 <= self.hot_fraction <= 1:
            raise ValueError(
                f"lamp_depth is {self.lamp_depth} and hot_fraction {self.hot_fraction}; expected shares of 0 to 1"
            )
        rates = (self.mismatch, self.refractory_us, self.noise_hz, self.leak_hz, self.hot_rate_hz, self.lamp_hz)
        if min(*rates, self.latency_us, self.latency_jitter_us, self.dark_latency_us) < 0:
            raise ValueError("mismatch, rates and times of an event sensor must not be negative")

    def lamp(self, t_s: float) -> float:
        """Factor on the scene's light at `t_s`."""
        return float(1.0 + self.lamp_depth * np.sin(2 * np.pi * self.lamp_hz * t_s))


class SensorRun:
    """One sensor at work: fed with pictures of rising time, it gives the events between them.

    Parameters
    ----------
    sensor : EventSensor
    size : tuple of int
        Width, height.
    rng : numpy.random.Generator
        Draws the pixels' thresholds, part-filled references, hot pixels and noise.

    Attributes
    ----------
    contrast_positive, contrast_negative : ndarray of float64, shape (H, W)
        Each pixel's own thresholds.
    hot : ndarray of int64, shape (N, 2)
        Column and row of the hot pixels.
    """

    def __init__(self, sensor: EventSensor, size: tuple[int, int], rng: np.random.Generator) -> None:
        width, height = size
        self.sensor, self.size, self._rng = sensor, size, rng
        # A spread of over 30 % would draw thresholds near zero: no pixel goes below a quarter of the nominal value.
        spread = np.maximum(1.0 + sensor.mismatch * rng.standard_normal((2, height, width)), 0.25)
        self.contrast_positive = sensor.contrast_positive * spread[0]
        self.contrast_negative = sensor.contrast_negative * spread[1]
        self._filled = rng.random(height * width)
        rate = np.full(height * width, sensor.noise_hz * 1e-6)
        hot = np.flatnonzero(rng.random(height * width) < sensor.hot_fraction)
        rate[hot] = sensor.hot_rate_hz * 1e-6
        self.hot = np.stack([hot % width, hot // width], axis=1)
        self._rate = rate
        self._state = rng.integers(1, 2**63, height * width, dtype=np.uint64)
        self._next_noise = np.full(height * width, np.inf)
        self._dead_until = np.full(height * width, -np.inf)
        self._level: Levels | None = None
        self._reference = np.empty(0)
        self._time_us = 0.0
        self._out_t = np.empty(CAPACITY, np.int64)
        self._out_pixel = np.empty(CAPACITY, np.int64)
        self._out_polarity = np.empty(CAPACITY, np.int8)

    def advance(self, picture: Image, time_us: float) -> Events:
        """Take the next picture and give the events since the one before.

        Parameters
        ----------
        picture : ndarray of float32, shape (H, W) or (H, W, 3)
            Linear radiance, the lamp's factor included; log light is taken as linear in time between two pictures.
        time_us : float
            Later than the picture before.

        Returns
        -------
        Events
            Sorted by time, in whole microseconds, floored; none for the first picture.
        """
        level = np.log(np.maximum(luma(picture), FLOOR)).astype(np.float64).ravel()
        if self._level is None:
            self._begin(level, time_us)
            return Events.none()
        kept = []
        first = 0
        times = np.array([self._time_us, time_us], dtype=np.float64)
        while first < level.size:
            count, first = self._cross(self._level, level, times, first)
            kept.append((self._out_t[:count].copy(), self._out_pixel[:count].copy(), self._out_polarity[:count].copy()))
        self._level, self._time_us = level, time_us
        return self._sorted(kept)

    def _begin(self, level: Levels, time_us: float) -> None:
        """Set the part-filled references: log light lies anywhere between the two thresholds around each."""
        positive, negative = self.contrast_positive.ravel(), self.contrast_negative.ravel()
        self._reference = level + negative - self._filled * (positive + negative)
        self._level, self._time_us = level, time_us
        noisy = self._rate > 0
        self._next_noise[noisy] = time_us + self._rng.exponential(1.0 / self._rate[noisy])

    def _cross(self, before: Levels, level: Levels, times: Levels, first: int) -> tuple[int, int]:
        sensor = self.sensor
        return cross(
            before,
            level,
            times,
            self._reference,
            self._dead_until,
            self.contrast_positive.ravel(),
            self.contrast_negative.ravel(),
            np.array([sensor.refractory_us, sensor.leak_hz * 1e-6]),
            self._rate,
            self._next_noise,
            self._state,
            first,
            self._out_t,
            self._out_pixel,
            self._out_polarity,
        )

    def _sorted(self, kept: list[tuple]) -> Events:
        t, pixel, polarity = (np.concatenate(column) for column in zip(*kept, strict=True))
        sensor = self.sensor
        if sensor.latency_us or sensor.latency_jitter_us or sensor.dark_latency_us:
            late = sensor.latency_us + sensor.latency_jitter_us * self._rng.standard_normal(len(t))
            if sensor.dark_latency_us and self._level is not None:
                late += sensor.dark_latency_us * sensor.dark_light / (sensor.dark_light + np.exp(self._level[pixel]))
            t = t + np.maximum(np.floor(late), 0).astype(np.int64)
        order = np.argsort(t, kind="stable")
        pixel = pixel[order]
        width = self.size[0]
        return Events(t[order], (pixel % width).astype(np.uint16), (pixel // width).astype(np.uint16), polarity[order])
