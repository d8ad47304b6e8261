"""Lamp flicker, found in the events alone: its frequency, and what one cycle of it looks like.

A lamp brightens and darkens everything it lights at once. The sum of the events' signs over the whole picture swings
with it, in step everywhere; what moves brings as many positive as negative events, in no common step.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from enhance.kernels.flicker import long_differences
from enhance.recording import Events, EventSource
from enhance.rig import Quantity

#: Frequencies looked for: single half-waves of 50 Hz mains to a dimmer's pulses.
LOWEST_HZ, HIGHEST_HZ = 45.0, 2_100.0
#: Bins of the sum of signs: four to a cycle of the highest frequency.
BIN_US = 100
#: Windows looked at, their length, and events read of each at the most.
WINDOWS, WINDOW_US, MOST_EVENTS = 4, 400_000, 4_000_000
#: Fewer cycles than this are no repetition.
LEAST_CYCLES = 8
#: Parts of the picture, each way, that must swing in step; how much of their swing survives when they are added up
#: (random phases of 16 parts: 0.25); the peak's power over the median around it; and its amplitude over that of noise.
PARTS, IN_STEP, OVER_MEDIAN, OVER_NOISE = 4, 0.6, 30.0, 5.0
#: Swing of all other parts together, in that of the strongest one.
ELSEWHERE = 0.5
#: A lower frequency is the lamp's own if this many times lower and at least this part of the peak's power.
DIVISORS, LEAST_POWER = (4, 3, 2), 0.02
#: Harmonics of one cycle of the lamp's log light.
HARMONICS = 3
#: Events that a cycle is fitted to, and the residual, in thresholds, beyond which a pixel counts less.
MOST_FITTED, TOLERANCE, ROUNDS = 400_000, 0.15, 6
METHOD = "spectrum of the events' signs"


@dataclass(frozen=True)
class Lamp:
    """A lamp's log light over time.

    Parameters
    ----------
    frequency_hz : float
    origin_us : int
        Where the cycle is counted from, in the event clock.
    cosine, sine : ndarray of float64, shape (HARMONICS,)
        Of the fundamental and its multiples, in units of the positive contrast threshold.
    ratio : float
        Negative over positive threshold.
    """

    frequency_hz: float
    origin_us: int
    cosine: NDArray[np.float64]
    sine: NDArray[np.float64]
    ratio: float

    def level(self, t_us: NDArray[np.int64]) -> NDArray[np.float64]:
        """Log light at instants, any shape, in units of the positive threshold; its mean over a cycle is 0."""
        waves = _waves(t_us - self.origin_us, self.frequency_hz)
        return np.asarray(np.tensordot(np.concatenate([self.cosine, self.sine]), waves, axes=1), dtype=np.float64)

    def turned(self, radians: float) -> Lamp:
        """Turn the cycle ahead by an angle of the fundamental."""
        harmonic = radians * np.arange(1, HARMONICS + 1)
        moved = (self.cosine - 1j * self.sine) * np.exp(1j * harmonic)
        return replace(self, cosine=moved.real, sine=-moved.imag)

    @property
    def phase(self) -> float:
        """Of the fundamental as a sine, at the origin, radians."""
        return float(np.arctan2(self.cosine[0], self.sine[0]))

    @property
    def harmonics_text(self) -> str:
        """How strong the multiples of the fundamental are."""
        strength = np.hypot(self.cosine, self.sine)
        shares = ", ".join(f"{share:.0%}" for share in strength[1:] / max(strength[0], 1e-9))
        return f"multiples of its frequency {shares} of it"

    @property
    def swing(self) -> float:
        """From the darkest to the brightest instant, in units of the positive threshold."""
        cycle = np.rint(np.arange(400) * (1e6 / self.frequency_hz / 400)).astype(np.int64)
        return float(np.ptp(self.level(self.origin_us + cycle)))


def _waves(t_us: NDArray[np.int64], frequency_hz: float) -> NDArray[np.float64]:
    """Cosines and sines of all harmonics, shape (2 HARMONICS, ...)."""
    turn = 2 * np.pi * ((frequency_hz * 1e-6 * t_us) % 1.0)
    angles = np.multiply.outer(np.arange(1, HARMONICS + 1), turn)
    return np.concatenate([np.cos(angles), np.sin(angles)])


def find_flicker(events: EventSource) -> Quantity:
    """Find the frequency of a flickering lamp.

    Parameters
    ----------
    events : EventSource
        In the sensor's own world.

    Returns
    -------
    Quantity
        Hertz; None, with the reason, where no flicker shows in the events.
    """
    found, reasons = [], []
    windows = look_windows(events)
    for window in windows:
        frequency, reason = _of_window(events.between(*window), window, events.size)
        if frequency is None:
            reasons.append(reason)
        else:
            found.append((frequency, reason))
    if 2 * len(found) <= len(windows):
        return Quantity(None, None, METHOD, reasons[0] if reasons else "no events")
    frequencies = np.array([frequency for frequency, _ in found])
    value = float(np.median(frequencies))
    spread = float(np.abs(frequencies - value).max()) if len(found) > 1 else None
    evidence = f"{len(found)} of {len(windows)} windows of {(windows[0][1] - windows[0][0]) / 1e6:.2f} s; {found[0][1]}"
    return Quantity(value, spread, METHOD, evidence)


def look_windows(events: EventSource) -> list[tuple[int, int]]:
    """Windows of the recording that a lamp is looked for in, spread over it."""
    span = events.last_us + 1 - events.first_us
    length = min(WINDOW_US, span)
    count = min(WINDOWS, max(1, span // length))
    starts = [events.first_us + (span - length) * k // max(count - 1, 1) for k in range(count)]
    windows = []
    for start in starts:
        many = events.count_between(start, start + length)
        kept = length if many <= MOST_EVENTS else max(1, length * MOST_EVENTS // many)
        windows.append((start, start + kept))
    return windows


def _of_window(events: Events, window: tuple[int, int], size: tuple[int, int]) -> tuple[float | None, str]:
    """Frequency within one window, or why there is none."""
    length = window[1] - window[0]
    bins = length // BIN_US
    lowest = max(LOWEST_HZ, LEAST_CYCLES * 1e6 / max(length, 1))
    if lowest > 120.0:
        return None, f"only {length / 1e6:.3f} s of events; {LEAST_CYCLES} cycles of 100 Hz take 0.08 s"
    t = events.t_us - window[0]
    inside = t < bins * BIN_US
    part = _part(events, size)[inside]
    signs = np.zeros((PARTS * PARTS, bins))
    np.add.at(signs, (part, t[inside] // BIN_US), events.polarity[inside].astype(np.float64))
    spectrum = np.fft.rfft(signs * np.hanning(bins), axis=1)
    hertz = np.fft.rfftfreq(bins, BIN_US * 1e-6)
    whole = np.abs(spectrum.sum(axis=0)) ** 2
    band = (hertz >= lowest) & (hertz <= HIGHEST_HZ)
    # noise alone (each sign at random): expected power is the sum of the squared window times the number of events
    noise = max(float((np.hanning(bins) ** 2).mean()) * len(t), 1.0)
    significant = whole > np.maximum(OVER_NOISE**2 * noise, OVER_MEDIAN * _median_around(whole))
    step = np.abs(spectrum.sum(axis=0)) >= IN_STEP * np.abs(spectrum).sum(axis=0)
    # something that blinks in one part of the picture is not what lights it
    largest = np.abs(spectrum).max(axis=0)
    step &= np.abs(spectrum.sum(axis=0)) >= (1 + ELSEWHERE) * largest
    chosen = band & significant & step
    if not chosen.any():
        return None, "no frequency at which the whole picture brightens and darkens in step"
    peak = int(np.argmax(np.where(chosen, whole, 0.0)))
    # the strongest line may be a multiple of the lamp's own frequency
    for divisor in DIVISORS:
        near = np.arange(max(peak // divisor - 1, 1), peak // divisor + 2)
        lower = int(near[whole[near].argmax()])
        if chosen[lower] and whole[lower] >= LEAST_POWER * whole[peak]:
            peak = lower
            break
    frequency = _refined(t, events.polarity, hertz[peak], 1e6 / length)
    share = float(np.abs(spectrum[:, peak].sum()) / np.abs(spectrum[:, peak]).sum())
    return frequency, f"{len(t)} events, {share:.0%} of the parts' swing in step"


def _part(events: Events, size: tuple[int, int]) -> NDArray[np.int64]:
    width, height = size
    column = events.x.astype(np.int64) * PARTS // max(width, 1)
    return np.asarray(events.y.astype(np.int64) * PARTS // max(height, 1) * PARTS + column)


def _median_around(power: NDArray[np.float64], reach: int = 12) -> NDArray[np.float64]:
    """Median of the lines around each, the nearest three either side left out (a window widens a line to those)."""
    padded = np.pad(power, reach, mode="reflect") if len(power) > reach else np.pad(power, reach, mode="edge")
    around = np.lib.stride_tricks.sliding_window_view(padded, 2 * reach + 1)
    return np.asarray(np.median(np.delete(around, slice(reach - 3, reach + 4), axis=1), axis=1))


def _refined(t_us: NDArray[np.int64], polarity: NDArray[np.int8], near_hz: float, resolution_hz: float) -> float:
    """Frequency at which the events' signs add up most, sought around a line of the spectrum."""
    sign, length = polarity.astype(np.float64), max(int(t_us[-1]) + 1, 1)
    taper = np.sin(np.pi * (t_us + 0.5) / length) ** 2 * sign
    bins = length // BIN_US + 1
    binned = np.bincount(t_us // BIN_US, weights=taper, minlength=bins)
    at = (np.arange(bins) + 0.5) * BIN_US * 1e-6
    best, step = near_hz, resolution_hz
    for _ in range(4):
        tried = best + step * np.linspace(-1, 1, 17)
        power = np.abs(np.exp(-2j * np.pi * np.outer(tried, at)) @ binned) ** 2
        best, step = float(tried[power.argmax()]), step / 6
    return best


def fit_lamp(blocks: list[Events], frequency_hz: float, size: tuple[int, int]) -> tuple[Lamp, NDArray[np.float64]]:
    """Fit one cycle of a lamp's log light to the events of some windows, each with a phase of its own.

    Parameters
    ----------
    blocks : list of Events
        Windows; at least one holds events.
    frequency_hz : float
    size : tuple of int
        Width, height.

    Returns
    -------
    lamp : Lamp
        With the phase of the first block.
    phases : ndarray of float64, shape (len(blocks),)
        By how much each block's cycle is ahead of the first one's, radians.
    """
    counts = np.sum([[(b.polarity > 0).sum(), (b.polarity < 0).sum()] for b in blocks], axis=0)
    # over many cycles light comes back to where it was: N+ c+ = N- c-
    ratio = float(np.clip(counts[0] / max(counts[1], 1), 0.4, 2.5))
    fits = [_fit(block, frequency_hz, size, ratio) for block in blocks]
    phases = np.array([np.angle(fit[0] - 1j * fit[HARMONICS]) for fit in fits])
    phases = phases - phases[0]
    first = int(blocks[0].t_us[0]) if len(blocks[0]) else 0
    lamps = []
    for block, fit, phase in zip(blocks, fits, phases, strict=True):
        if len(block):
            lamps.append(Lamp(frequency_hz, first, fit[:HARMONICS], fit[HARMONICS:], ratio).turned(-phase))
    cosine = np.median([lamp.cosine for lamp in lamps], axis=0)
    sine = np.median([lamp.sine for lamp in lamps], axis=0)
    return Lamp(frequency_hz, first, cosine, sine, ratio), phases


def _fit(events: Events, frequency_hz: float, size: tuple[int, int], ratio: float) -> NDArray[np.float64]:
    """Cosines and sines of the lamp's log light, in positive thresholds, counted from the block's first event."""
    if not len(events):
        return np.zeros(2 * HARMONICS)
    width, height = size
    step = 1 + len(events) // MOST_FITTED
    seen = events.keep(events.y % step == 0) if step > 1 else events
    if not len(seen):
        return np.zeros(2 * HARMONICS)
    t = seen.t_us - int(events.t_us[0])
    pixel = seen.y.astype(np.int64) * width + seen.x
    # Stretches of half a cycle and more: single steps are all one threshold long, whatever the lamp did meanwhile.
    pixel, ends, count = long_differences(t, pixel, seen.polarity, width * height, round(0.4e6 / frequency_hz))
    if len(pixel) < 4 * HARMONICS:
        return np.zeros(2 * HARMONICS)
    change = count[:, 0] - ratio * count[:, 1]
    waves = (_waves(ends[:, 1], frequency_hz) - _waves(ends[:, 0], frequency_hz)).T
    weight = np.ones(len(change))
    fit: NDArray[np.floating] = np.zeros(2 * HARMONICS)
    for _ in range(ROUNDS):
        weighted = waves * weight[:, None]
        fit = np.linalg.lstsq(weighted.T @ waves, weighted.T @ change, rcond=None)[0]
        squared = (change - waves @ fit) ** 2
        # pixels at which something moves tell little of the lamp, whichever of their stretches happens to fit
        many = np.bincount(pixel, minlength=width * height)
        own = (np.bincount(pixel, weights=squared, minlength=width * height) / np.maximum(many, 1))[pixel]
        weight = 1.0 / (TOLERANCE**2 + own) ** 2
    return np.asarray(fit)
