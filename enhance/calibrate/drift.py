"""How much faster one clock runs than the other: offsets in several stretches of a recording, a line through them.

Over minutes two free clocks part by far more than an exposure (100 parts per million: 6 ms a minute), so in a long
recording no one offset fits two pairs of keys that lie far apart. There each stretch is looked at on its own: the
liveliest one is searched over the whole range, its neighbours around what the line through those found so far says.
Memory holds the pairs of one stretch.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from enhance.calibrate.clock import LEAST_CORRELATION, MODEL_ERROR, Peak, coarse_offset, refine_offset
from enhance.calibrate.evidence import Pair, gather_pairs
from enhance.errors import CalibrationError
from enhance.recording import Contrast, EventSource, FrameSource
from enhance.rig import Quantity

#: Free clocks are this far apart at the most, parts per million.
HIGHEST_PPM = 200.0
#: A recording this long is searched stretch by stretch: over it, clocks may part by the coarse search's two steps.
LONG_US = 20_000_000
#: In one shorter than this, no possible drift moves the clock by more than 0.1 ms either side of the middle.
SHORT_US = 1_000_000
#: Stretches, keys looked at in each, and pairs kept of those.
STRETCHES, LOOKED_AT, KEPT = 10, 16, 4
#: A line needs this many stretches to show its own scatter.
LEAST_STRETCHES = 4
#: A drift of fewer standard deviations is none. Over a long recording the line is the better guess sooner: what the
#: scene does to single stretches averages out.
SIGNIFICANT, SIGNIFICANT_LONG = 3.0, 2.0
#: How far from the line the offset of a stretch is sought, and so many standard deviations of a stretch are an outlier.
REACH_US, OUTLIER = 2_000, 5.0
METHOD = "line through the offsets of several stretches"

#: Events in the frame clock for an offset, without drift.
EventsAt = Callable[[int], EventSource]


@dataclass(frozen=True)
class Mark:
    """The clock's offset at one time of the event clock, with its standard deviation, all in microseconds."""

    event_us: int
    offset_us: int
    sigma_us: float


@dataclass(frozen=True)
class Line:
    """``offset = at_first + ppm * (t_event - t_first_event) / 10^6``, with standard deviations.

    Parameters
    ----------
    at_first_us, ppm : float
    sigma_ppm : float
    sigma_us : float
        Of the offset at the worse end of the marks.
    marks : int
        How many it rests on.
    middle_us : float
        Offset in the middle of the marks, where it hardly depends on the drift.
    """

    at_first_us: float
    ppm: float
    sigma_ppm: float
    sigma_us: float
    marks: int
    middle_us: float = 0.0

    @property
    def significant(self) -> float:
        """Drift in its standard deviations."""
        return abs(self.ppm) / max(self.sigma_ppm, 1e-9)


def span_us(frames: FrameSource, keys: Sequence[int]) -> int:
    """Time from the first to the last key."""
    return int(frames.start_us[keys[-1]] - frames.start_us[keys[0]]) if len(keys) else 0


def stretches(frames: FrameSource, keys: Sequence[int]) -> list[list[int]]:
    """Divide the keys by time into `STRETCHES` parts, of each of which at most `LOOKED_AT` keys are looked at."""
    times = np.asarray(frames.start_us)[list(keys)]
    part = (times - times[0]) * STRETCHES // max(int(times[-1] - times[0]) + 1, 1)
    return [_thinned([k for k, p in zip(keys, part, strict=True) if p == number]) for number in range(STRETCHES)]


def _thinned(keys: list[int]) -> list[int]:
    """Keep neighbours together, in couples spread over the stretch."""
    if len(keys) <= LOOKED_AT:
        return keys
    first = np.unique(np.linspace(0, len(keys) - 2, LOOKED_AT // 2).astype(int))
    return sorted({keys[k + step] for k in first for step in (0, 1)})


def liveliest(frames: FrameSource, parts: Sequence[Sequence[int]]) -> list[int]:
    """Order the stretches by how much changes in them; those without a pair of keys are left out."""
    strength = {}
    for number, keys in enumerate(parts):
        pairs = gather_pairs(frames, keys)
        if pairs:
            strength[number] = max(float(np.abs(pair.change).mean()) for pair in pairs)
    return sorted(strength, key=lambda number: -strength[number])


def find_stretch(
    frames: FrameSource, keys: Sequence[int], events: EventSource
) -> tuple[list[Sequence[int]], int, list[Pair], Peak]:
    """Find a stretch of a long recording that tells its offset, the liveliest first.

    Parameters
    ----------
    frames : FrameSource
    keys : sequence of int
    events : EventSource
        In a clock that is at most 2 s off.

    Returns
    -------
    stretches : list of sequence of int
    number : int
        Of the one that tells.
    pairs : list of Pair
        Its pairs.
    peak : Peak
        As `coarse_offset`.

    Raises
    ------
    CalibrationError
        If none does, with the reason of the liveliest.
    """
    parts: list[Sequence[int]] = list(stretches(frames, keys))
    reason: CalibrationError | None = None
    for number in liveliest(frames, parts):
        pairs = gather_pairs(frames, parts[number])
        try:
            return parts, number, pairs, coarse_offset(pairs, events)
        except CalibrationError as error:
            reason = reason or error
    raise reason or CalibrationError("no two successive keys near each other")


def track(
    frames: FrameSource,
    parts: Sequence[Sequence[int]],
    first: tuple[int, int],
    events_at: EventsAt,
    contrast: Contrast,
) -> list[Mark]:
    """Find the offset of every stretch that tells it, from one that is known outwards.

    Parameters
    ----------
    frames : FrameSource
    parts : sequence of sequence of int
        Keys of each stretch.
    first : tuple of int
        Number of the stretch that is known, and its offset.
    events_at : callable
    contrast : Contrast

    Returns
    -------
    list of Mark
        In time order.
    """
    number, offset_us = first
    middle = [_middle_us(frames, keys) if len(keys) else 0 for keys in parts]
    known = [Mark(middle[number] - offset_us, offset_us, float(REACH_US))]
    marks: list[Mark] = []
    for each in sorted(range(len(parts)), key=lambda k: abs(middle[k] - middle[number])):
        if len(parts[each]) < 2:
            continue
        expected, reach = _expected(marks or known, middle[each])
        mark = _mark(gather_pairs(frames, parts[each]), events_at, expected, reach, contrast)
        marks += [mark] if mark else []
    return sorted(marks, key=lambda mark: mark.event_us)


def _middle_us(frames: FrameSource, keys: Sequence[int]) -> int:
    return (int(frames.start_us[keys[0]]) + int(frames.end_us[keys[-1]])) // 2


def _expected(marks: Sequence[Mark], frame_us: int) -> tuple[int, int]:
    """Offset to search around at a time of the frame clock, and how far."""
    near = min(marks, key=lambda mark: abs(mark.event_us + mark.offset_us - frame_us))
    gap = abs(near.event_us + near.offset_us - frame_us)
    # Twice the gap's own span must be known before a line through it is worth more than its nearest point.
    if len(marks) >= 3:
        times = np.array([mark.event_us for mark in marks])
        span = int(times.max() - times.min())
        if span >= gap:
            slope = _robust(times - times[0], np.array([mark.offset_us for mark in marks]))[1]
            return near.offset_us + round(slope * (frame_us - near.offset_us - near.event_us)), REACH_US
    return near.offset_us, REACH_US + int(1.25e-6 * HIGHEST_PPM * gap)


def _mark(pairs: list[Pair], events_at: EventsAt, expected: int, reach: int, contrast: Contrast) -> Mark | None:
    strongest = sorted(pairs, key=lambda pair: float(np.abs(pair.change).sum()), reverse=True)[:KEPT]
    events = events_at(expected)
    covers = getattr(events, "covers", lambda start, end: True)
    strongest = [pair for pair in strongest if covers(pair.first.start_us, pair.second.end_us)]
    if len(strongest) < 2:
        return None
    shift, scatter, correlation = refine_offset(strongest, events, 0, reach, contrast)
    # At the border nothing was found; a smooth scene that barely moves leaves as flat a curve as noise does.
    if scatter is None or correlation < LEAST_CORRELATION or abs(shift) >= reach:
        return None
    middle = sum(pair.first.time_us + pair.second.time_us for pair in strongest) // (2 * len(strongest))
    # A stretch's own scene leaves an error of its own, whatever its pairs' scatter.
    sigma = max(scatter, MODEL_ERROR * contrast.ramp_us, 10.0)
    return Mark(middle - expected - shift, expected + shift, sigma)


def fit_line(marks: Sequence[Mark], first_event_us: int) -> Line | None:
    """Fit a weighted line through the offsets, outliers left out.

    Parameters
    ----------
    marks : sequence of Mark
    first_event_us : int
        Event time the drift counts from.

    Returns
    -------
    Line or None
        None where too few stretches are left.
    """
    if len(marks) < LEAST_STRETCHES:
        return None
    x = np.array([mark.event_us - first_event_us for mark in marks]) / 1e6
    y = np.array([mark.offset_us for mark in marks], dtype=np.float64)
    sigma = np.array([mark.sigma_us for mark in marks])
    base, slope = _robust(x, y)
    residual = np.abs(y - base - slope * x)
    kept = residual <= OUTLIER * np.maximum(sigma, 1.4826 * np.median(residual))
    if kept.sum() < LEAST_STRETCHES:
        return None
    x, y, weight = x[kept], y[kept], 1 / sigma[kept] ** 2
    # Least squares with weights 1 / sigma^2, counted from the weighted middle, where offset and drift are independent.
    middle = float((weight * x).sum() / weight.sum())
    inertia = float((weight * (x - middle) ** 2).sum())
    if inertia <= 0:
        return None
    ppm = float((weight * (x - middle) * y).sum() / inertia)
    level = float((weight * y).sum() / weight.sum())
    chi = float((weight * (y - level - ppm * (x - middle)) ** 2).sum()) / (len(x) - 2)
    # Scatter beyond the stated deviations widens them; less scatter is luck and does not narrow them.
    inflate = np.sqrt(max(chi, 1.0))
    sigma_ppm = float(inflate / np.sqrt(inertia))
    reach = float(np.abs(x - middle).max())
    sigma_us = float(np.hypot(inflate / np.sqrt(weight.sum()), sigma_ppm * reach))
    return Line(level - ppm * middle, ppm, sigma_ppm, sigma_us, int(kept.sum()), level)


def _robust(x: NDArray[np.float64], y: NDArray[np.float64]) -> tuple[float, float]:
    """Intercept and slope as medians over all couples of points (Theil 1950, Sen 1968)."""
    i, j = np.triu_indices(len(x), 1)
    apart = x[j] != x[i]
    slope = float(np.median((y[j] - y[i])[apart] / (x[j] - x[i])[apart])) if apart.any() else 0.0
    return float(np.median(y - slope * x)), slope


def drift_quantity(line: Line | None, span: int) -> Quantity:
    """Say what the line means: the drift, or 0 with the reason.

    Parameters
    ----------
    line : Line or None
    span : int
        Length of the recording, microseconds.

    Returns
    -------
    Quantity
        Parts per million.
    """
    if line is None:
        reason = f"fewer than {LEAST_STRETCHES} stretches of the recording tell an offset of their own; taken as 0"
        return Quantity(0.0, None, "assumed", reason)
    needed = SIGNIFICANT_LONG if span >= LONG_US else SIGNIFICANT
    found = f"{line.ppm:+.2f} +/- {line.sigma_ppm:.2f} ppm over {line.marks} stretches of {span / 1e6:.1f} s"
    if line.significant < needed:
        return Quantity(0.0, line.sigma_ppm, METHOD, f"{found}: not significant, taken as 0")
    if abs(line.ppm) > 1.25 * HIGHEST_PPM:
        return Quantity(
            0.0, None, "assumed", f"{found}: more than clocks part by ({HIGHEST_PPM:g} ppm), not believed; taken as 0"
        )
    return Quantity(line.ppm, line.sigma_ppm, METHOD, found)


def too_short(span: int) -> Quantity | None:
    """Drift of a recording so short that it does not matter; None for a longer one."""
    if span >= SHORT_US:
        return None
    most = HIGHEST_PPM * span / 2e6
    reason = (
        f"{span / 1e6:.2f} s are too short to tell; {HIGHEST_PPM:g} ppm move the clock by {most:.0f} us at most there"
    )
    return Quantity(0.0, None, "assumed", reason)
