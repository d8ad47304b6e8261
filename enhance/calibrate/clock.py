"""The offset between the event clock and the frame clock, from the pictures alone.

The blurred frames themselves say when the events belong to them: for the right offset, the events between and inside
two exposures predict how the log light of the two *averages* differs,

    ln B2 - ln B1 = ln mean_2(exp(S)) - ln mean_1(exp(S)),

S being the events' sum from any common instant (the double integral of Pan et al., CVPR 2019, applied to both frames).
A coarse search looks at the sums at the exposures' middles over a wide range; the fine one evaluates the relation
itself. The correlation of the two sides does not depend on the thresholds' scale; their ratio is known by then.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from enhance.calibrate.evidence import LONGEST_US, Pair, thinned
from enhance.errors import CalibrationError
from enhance.kernels.double_integral import log_blur_ratio
from enhance.kernels.turning_steps import mean_light, turning_steps
from enhance.recording import Contrast, EventSource

#: How far the coarse search looks either side, microseconds.
SEARCH_US = 2_000_000
#: Step of the coarse search: an edge crosses a pixel in about this time in any scene that blurs.
COARSE_STEP_US = 2_000
#: Pairs and pixels the coarse search looks at; more do not make it surer, only slower.
COARSE_PAIRS, COARSE_PIXELS = 8, 4_000
#: A correlation below this is no evidence.
LEAST_CORRELATION = 0.25
#: Where the opposite of the frames' change fits this many times better, brighter and darker are exchanged.
OPPOSITE = 1.5
#: A periodic scene fits at several offsets: those within this part of the best one count as equal.
EQUAL_PEAK = 0.03
#: A turn's own step stands at most this many ramps before its event (four intervals within bursts).
LONGEST_LEAD = 2
#: Events of so many ramps before a pair are looked at for the signs that its first events turn from: where objects
#: cross a quiet background, many events would be late without.
HISTORY = 25
#: Pixels with this many events in a pair count half: fewer tell little of how light moved between them. It brought the
#: worst of 15 simulated recordings from 1.6 to 1.35 % of the exposure.
HALF_EVENTS = 6
#: What the model of steps leaves, in ramps, one standard deviation: on those 15 recordings (7 kinds) -0.06 to +0.06 of
#: them, much the same for all pairs of a recording, so that no scatter shows it.
MODEL_ERROR = 0.035
METHOD = "correlation of frame change and double integral"
#: Steps whose events are read at a time in the coarse search: memory follows this, not the search range.
PIECE_BINS = 50


@dataclass(frozen=True)
class Peak:
    """A maximum of the coarse search: offset, correlation, rivals that fit as well, and how well the opposite fits."""

    offset_us: int
    correlation: float
    rivals_us: tuple[int, ...]
    opposite: float = 0.0

    @property
    def remark(self) -> str:
        """What is to be said of rivals; empty without any."""
        if not self.rivals_us:
            return ""
        times = ", ".join(f"{rival / 1000:.0f} ms" for rival in self.rivals_us[:4])
        return f"a repeating scene: {times} fit as well, the smallest was taken; "


def coarse_offset(pairs: Sequence[Pair], events: EventSource, *, search_us: int = SEARCH_US) -> Peak:
    """Find the offset to add to the event clock (on top of the one `events` already carries) to a few milliseconds.

    Parameters
    ----------
    pairs : sequence of Pair
    events : EventSource
        Events on the frames' pixels, in a clock that is at most `search_us` off.
    search_us : int
        Range of the search either side.

    Returns
    -------
    Peak

    Raises
    ------
    CalibrationError
        If the recording cannot tell, with the reason.
    """
    if not pairs:
        raise CalibrationError(f"no two successive keys within {LONGEST_US / 1e6:g} s of each other")
    moving = [pair for pair in pairs if pair.change.any()]
    peak = coarse_peak(moving, events, search_us) if moving else None
    if peak is not None and peak.opposite > max(LEAST_CORRELATION, OPPOSITE * peak.correlation):
        raise CalibrationError(
            f"events say brighter where frames grow darker (correlation {-peak.opposite:.2f}, against "
            f"{peak.correlation:.2f} at best); the signs in the events' polarity column look exchanged, mend them"
        )
    if peak is None or peak.correlation < LEAST_CORRELATION:
        nothing = "no events near the keys" if moving else "no usable pixel of the frames changes"
        found = nothing if peak is None else f"best correlation only {peak.correlation:.2f}"
        raise CalibrationError(
            f"frames and events do not move together ({found}); too little motion, or two different scenes"
        )
    return peak


def coarse_peak(pairs: Sequence[Pair], events: EventSource, search_us: int) -> Peak | None:
    """Correlate frame change with event sums over a wide range of offsets.

    Parameters
    ----------
    pairs, events, search_us
        As in `coarse_offset`; in each pair some usable pixel changes.

    Returns
    -------
    Peak or None
        None where no event lies in reach.
    """
    strongest = sorted(pairs, key=lambda p: float(np.abs(p.change).sum()), reverse=True)[:COARSE_PAIRS]
    steps = np.arange(-(search_us // COARSE_STEP_US), search_us // COARSE_STEP_US + 1)
    cross, energy, observed = np.zeros(len(steps)), np.zeros(len(steps)), 0.0
    for pair in strongest:
        pixels, signal = _strong_pixels(pair)
        predicted = _sums_over_offsets(pair, events, pixels, steps)
        cross += predicted @ signal
        energy += (predicted.astype(np.float64) ** 2).sum(axis=1)
        observed += float(signal @ signal)
    if not energy.any():
        return None
    # Little activity at the far ends of the range must not look like a good fit by its small energy.
    floor = 0.05 * energy.max()
    correlation = cross / np.sqrt(np.maximum(energy, floor) * observed)
    return replace(_choose_peak(steps * COARSE_STEP_US, correlation), opposite=-float(correlation.min()))


def _choose_peak(offsets_us: NDArray[np.int64], correlation: NDArray[np.float64]) -> Peak:
    """Best local maximum; among equals (a periodic scene) the one nearest to no offset, its rivals listed."""
    inner = correlation[1:-1]
    local = 1 + np.flatnonzero((inner >= correlation[:-2]) & (inner > correlation[2:]))
    if not local.size:
        local = np.array([int(correlation.argmax())])
    best = correlation[local].max()
    equal = local[correlation[local] >= best * (1 - EQUAL_PEAK)]
    chosen = equal[np.abs(offsets_us[equal]).argmin()]
    # Neighbouring maxima on one broad hill are one answer, not rivals.
    rivals = tuple(int(o) for o in offsets_us[equal] if abs(o - offsets_us[chosen]) > 5 * COARSE_STEP_US)
    return Peak(int(offsets_us[chosen]), float(correlation[chosen]), rivals)


def _strong_pixels(pair: Pair) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    size = np.abs(pair.change).ravel()
    count = min(COARSE_PIXELS, size.size)
    pixels = np.sort(np.argpartition(size, size.size - count)[-count:])
    return pixels, pair.change.ravel()[pixels]


def _sums_over_offsets(
    pair: Pair, events: EventSource, pixels: NDArray[np.int64], steps: NDArray[np.int64]
) -> NDArray[np.float32]:
    """Event sum between the two exposures' middles for each offset, shape (offsets, pixels)."""
    width = pair.change.shape[1]
    slot = np.full(pair.change.size, -1, np.int32)
    slot[pixels] = np.arange(len(pixels))
    first, second = pair.first.time_us, pair.second.time_us
    gap = max(1, round((second - first) / COARSE_STEP_US))
    # Cumulative sums on a grid of steps: bin b ends at `origin + b * step`
    bins = len(steps) + gap
    origin = first - int(steps[-1]) * COARSE_STEP_US
    cumulative = np.zeros((bins, len(pixels)), np.float32)
    for first_bin in range(1, bins, PIECE_BINS):
        part = cumulative[first_bin : first_bin + PIECE_BINS]
        start_us = origin + (first_bin - 1) * COARSE_STEP_US
        seen = events.between(start_us, start_us + len(part) * COARSE_STEP_US)
        where = slot[seen.y.astype(np.int64) * width + seen.x]
        inside = where >= 0
        flat = (seen.t_us[inside] - start_us) // COARSE_STEP_US * len(pixels) + where[inside]
        part += np.bincount(flat, seen.polarity[inside], part.size).reshape(part.shape)
    np.cumsum(cumulative, axis=0, out=cumulative)
    # An offset o moves events later by o: frame time f is event time f - o.
    start = len(steps) - 1 - np.arange(len(steps))
    return cumulative[start + gap] - cumulative[start]


def refine_offset(
    pairs: Sequence[Pair], events: EventSource, centre: int, reach: int, contrast: Contrast
) -> tuple[int, float | None, float]:
    """Maximise the double integral's own correlation around a first offset.

    Where frames are blurred, events are drawn as `enhance.kernels.turning_steps` draws them: a plain staircase is late
    by part of a threshold, which looks like a clock offset. Where they are sharp (no ramp), the two cannot be told
    apart, and the offset takes up both.

    Parameters
    ----------
    pairs, events
        As in `coarse_offset`.
    centre, reach : int
        Where to look, microseconds either side.
    contrast : Contrast
        What one event means, as far as it is known: the two thresholds' ratio matters, their scale hardly.

    Returns
    -------
    offset_us : int
    uncertainty : float or None
        Scatter over the pairs (jackknife), and the model's own error; None from a single pair.
    correlation : float
    """
    moments = _moments if contrast.ramp_us else _sharp_moments
    for step in (1_000, 250, 60):
        if step > reach:
            continue
        offsets = centre + np.arange(-reach // step, reach // step + 1) * step
        table = np.stack([moments(pair, events, offsets, contrast) for pair in pairs])
        centre, reach = int(offsets[_correlation(table).argmax()]), step
    scatter = _jackknife(offsets, table)
    uncertainty = None if scatter is None else float(np.hypot(scatter, MODEL_ERROR * contrast.ramp_us))
    return round(_vertex(offsets, _correlation(table))), uncertainty, float(_correlation(table).max())


def _moments(pair: Pair, events: EventSource, offsets: NDArray[np.int64], contrast: Contrast) -> NDArray[np.float64]:
    """(cross, energy of the prediction, energy of the change) for each offset, shape (offsets, 3)."""
    longest = LONGEST_LEAD * contrast.ramp_us
    origin = pair.first.start_us
    start, end = origin - int(offsets[-1]) - HISTORY * contrast.ramp_us, pair.second.end_us - int(offsets[0]) + longest
    pair, seen = thinned(pair, events.between(start, end))
    count = pair.change.size
    pixel = seen.y.astype(np.int64) * pair.change.shape[1] + seen.x
    # Counted from the first exposure's start: floats would not hold epoch-sized times.
    steps = turning_steps(seen.t_us - origin, pixel, seen.polarity, contrast.thresholds, count, float(longest))
    windows = np.array([[frame.start_us - origin, frame.end_us - origin] for frame in (pair.first, pair.second)], float)

    def predicted(offset: int) -> NDArray[np.float64]:
        first, second = mean_light(*steps, windows - offset, count)
        return np.log(second) - np.log(first)

    inside = (seen.t_us >= start + HISTORY * contrast.ramp_us) & (seen.t_us < end - longest)
    events_there = np.bincount(pixel[inside], minlength=count).astype(np.float64)
    weight = events_there**2 / (events_there**2 + HALF_EVENTS**2)
    return _table(pair, offsets, predicted, weight)


def _sharp_moments(
    pair: Pair, events: EventSource, offsets: NDArray[np.int64], contrast: Contrast
) -> NDArray[np.float64]:
    """Give the same for frames without blur, by the plain staircase."""
    one, two = pair.first, pair.second
    pair, seen = thinned(pair, events.between(one.start_us - int(offsets[-1]), two.end_us - int(offsets[0])))
    shape = pair.change.shape

    def predicted(offset: int) -> NDArray[np.float64]:
        middle = one.time_us - offset
        first = log_blur_ratio(seen, one.start_us - offset, one.end_us - offset, middle, contrast, shape)
        second = log_blur_ratio(seen, two.start_us - offset, two.end_us - offset, middle, contrast, shape)
        return (second - first).ravel()

    return _table(pair, offsets, predicted)


def _table(
    pair: Pair,
    offsets: NDArray[np.int64],
    predicted: Callable[[int], NDArray[np.float64]],
    weight: NDArray[np.float64] | None = None,
) -> NDArray[np.float64]:
    usable = np.flatnonzero(pair.usable)
    change = pair.change.ravel()[usable]
    weighted = change if weight is None else weight[usable] * change
    observed = float((weighted * change).sum())
    result = np.zeros((len(offsets), 3))
    for row, offset in enumerate(int(o) for o in offsets):
        expected = predicted(offset)[usable]
        energy = expected if weight is None else weight[usable] * expected
        # Plain sums: a threaded dot product of so few numbers waits for its threads, and adds up in their order.
        result[row] = (expected * weighted).sum(), (energy * expected).sum(), observed
    return result


def _correlation(table: NDArray[np.float64]) -> NDArray[np.float64]:
    cross, energy, observed = table.sum(axis=0).T
    return cross / np.sqrt(np.maximum(energy * observed, 1e-30))


def _vertex(offsets: NDArray[np.int64], value: NDArray[np.float64]) -> float:
    """Vertex of the parabola through the maximum and its neighbours."""
    k = int(np.clip(value.argmax(), 1, len(value) - 2))
    below, at, above = value[k - 1 : k + 2]
    curvature = below - 2 * at + above
    shift = 0.5 * (below - above) / curvature if curvature < 0 else 0.0
    return float(offsets[k] + np.clip(shift, -1, 1) * (offsets[1] - offsets[0]))


def _jackknife(offsets: NDArray[np.int64], table: NDArray[np.float64]) -> float | None:
    """Scatter of the estimate when each pair in turn is left out; None from a single pair."""
    count = len(table)
    if count < 2:
        return None
    left_out = [_vertex(offsets, _correlation(np.delete(table, k, axis=0))) for k in range(count)]
    return float(np.sqrt((count - 1) * np.var(left_out)))
