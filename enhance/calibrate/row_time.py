"""The row time of a rolling shutter, from the pictures alone: the clock, band by band.

Taken for a global shutter's, a band of rows that is exposed later fits the events at an offset lower by as much. The
offset of each band, by the double integral's own correlation (see `enhance.calibrate.clock`), lies on a straight line
over the rows; its slope is the row time with its sign turned. Later rounds measure what is left of the slope in the row
time found so far, in finer steps.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from enhance.calibrate.clock import LEAST_CORRELATION
from enhance.calibrate.contrast import estimate_contrast
from enhance.calibrate.evidence import Pair, thinned
from enhance.kernels.double_integral import log_blur_ratio
from enhance.recording import Contrast, EventSource
from enhance.rig import Quantity
from enhance.rows import RowEvents, in_row_time, row_delays_us

#: Bands of rows, and the fewest rows of one: a band needs an edge or two that passes.
BANDS, LEAST_ROWS = 8, 8
#: Bands that must tell, on both halves of the frame.
LEAST_BANDS = 4
#: Pairs that are looked at, those with most change.
PAIRS = 8
#: What the coarse clock of the frame as a whole may be off, beyond half the readout, and the first round's step; then
#: reach and step of the later rounds.
COARSE_US, FIRST_STEP_US, LATER_US = 6_000, 2_000, ((3_000, 500), (1_000, 250))
#: A band further than this many robust deviations from the line, and this far at least, fits by chance.
OUTLYING, LEAST_OUTLYING_US = 3.0, 600
#: A band's offset is no surer than this, however little its pairs scatter.
LEAST_DEVIATION_US = 50.0
#: Readout that may be left open: this share of the exposure, or so many microseconds where that is more.
OPEN_SHARE, LEAST_OPEN_US = 0.1, 500
METHOD = "clock of bands of rows"


@dataclass(frozen=True)
class Bands:
    """Offsets of bands of rows: middle row from the frame's middle, offset and its deviation, shape (B,) each."""

    row: NDArray[np.float64]
    offset_us: NDArray[np.float64]
    deviation_us: NDArray[np.float64]


@dataclass(frozen=True)
class _Line:
    """Offset over rows: slope, its standard deviation, offset at the frame's middle, and bands it rests on."""

    slope: float
    deviation: float
    middle_us: float
    bands: int


def estimate_row_time(
    pairs: Sequence[Pair], events: EventSource, contrast: Contrast, longest_us: int, rows: int
) -> Quantity:
    """Estimate the row time.

    Parameters
    ----------
    pairs : sequence of Pair
        As of a global shutter.
    events : EventSource
        On the frames' pixels; the clock may be off by some milliseconds.
    contrast : Contrast
        To begin with: the two thresholds' ratio matters, and is found on the way.
    longest_us : int
        Time from a frame to the next: a readout is no longer.
    rows : int
        Rows of the whole frame, which the readout is of.

    Returns
    -------
    Quantity
        Microseconds; value None, with the reason, where the recording cannot tell.
    """
    height = pairs[0].change.shape[0] if pairs else 0
    if height < LEAST_BANDS * LEAST_ROWS:
        return _unknown(f"{height} rows in two keys to compare; {LEAST_BANDS * LEAST_ROWS} are needed")
    strongest = sorted(pairs, key=lambda p: float(np.abs(p.change).sum()), reverse=True)[:PAIRS]
    found, line = 0.0, _Line(0.0, 0.0, 0.0, 0)
    for reach, step in ((longest_us // 2 + COARSE_US, FIRST_STEP_US), *LATER_US):
        offsets = round(line.middle_us) + np.arange(-(reach // step), reach // step + 1) * step
        bands = find_bands(strongest, events, contrast, offsets, found)
        told = _line(bands)
        if told is None:
            return _unknown(f"{len(bands.row)} of {BANDS} bands of rows move with the events, too few in one line")
        line = told
        found -= line.slope
        contrast = _better(contrast, strongest, RowEvents(events, row_delays_us(found, height) - round(line.middle_us)))
    readout, open_us = abs(found) * (rows - 1), line.deviation * (height - 1)
    exposure = float(np.median([pair.first.exposure_us for pair in pairs]))
    if open_us > max(OPEN_SHARE * exposure, LEAST_OPEN_US):
        return _unknown(f"the bands of rows leave the readout open by {open_us / 1000:.1f} ms (one standard deviation)")
    if readout > 1.02 * longest_us:
        return _unknown(f"a readout of {readout / 1000:.1f} ms was found, longer than from a frame to the next")
    return Quantity(found, line.deviation, METHOD, f"{line.bands} bands of rows, a readout of {readout / 1000:.2f} ms")


def _better(contrast: Contrast, pairs: Sequence[Pair], events: EventSource) -> Contrast:
    """Thresholds by the clock and row time found so far; those before where they cannot be told."""
    positive, negative = (quantity.value for quantity in estimate_contrast(pairs, events, contrast.ramp_us))
    return contrast if positive is None or negative is None else Contrast(positive, negative, contrast.ramp_us)


def _unknown(reason: str) -> Quantity:
    return Quantity(None, None, METHOD, reason)


def find_bands(
    pairs: Sequence[Pair], events: EventSource, contrast: Contrast, offsets: NDArray[np.int64], row_time_us: float
) -> Bands:
    """Find the offset at which each band of rows fits the events best.

    Parameters
    ----------
    pairs, events, contrast
        As in `estimate_row_time`.
    offsets : ndarray of int64, shape (O,)
        Even steps, which are looked at.
    row_time_us : float
        Row time found so far: the offsets are those on top of it.

    Returns
    -------
    Bands
        Those that have a maximum within the offsets.
    """
    height = pairs[0].change.shape[0]
    count = min(BANDS, height // LEAST_ROWS)
    # (P, O, B, 3)
    table = np.stack([_moments(pair, events, contrast, offsets, row_time_us, count) for pair in pairs])
    told = []
    for band in range(count):
        curve = _correlation(table[:, :, band])
        best = int(curve.argmax())
        if curve[best] < LEAST_CORRELATION or best in (0, len(offsets) - 1):
            continue
        left_out = [_vertex(offsets, _correlation(np.delete(table[:, :, band], k, axis=0))) for k in range(len(pairs))]
        deviation = np.sqrt((len(pairs) - 1) * np.var(left_out)) if len(pairs) > 1 else offsets[1] - offsets[0]
        told.append(((band + 0.5) * height / count - height // 2, _vertex(offsets, curve), float(deviation)))
    row, offset_us, deviation_us = np.array(told, dtype=np.float64).reshape(-1, 3).T
    return Bands(row, offset_us, deviation_us)


def _moments(
    pair: Pair, events: EventSource, contrast: Contrast, offsets: NDArray[np.int64], row_time_us: float, bands: int
) -> NDArray[np.float64]:
    """(cross, energy of the prediction, energy of the change) of each offset and band, shape (O, B, 3)."""
    height, ramp = pair.change.shape[0], contrast.ramp_us
    delays = row_delays_us(row_time_us, height)
    start = pair.first.start_us - int(offsets[-1]) + int(delays.min()) - ramp
    end = pair.second.end_us - int(offsets[0]) + int(delays.max()) + 2 * ramp
    pair, seen = thinned(pair, events.between(start, end))
    step = -(-height // pair.change.shape[0])
    seen = in_row_time(seen, delays[::step])
    band = np.arange(0, height, step) * bands // height
    one, two, shape = pair.first, pair.second, pair.change.shape
    change = np.where(pair.usable, pair.change, 0.0)
    result = np.zeros((len(offsets), bands, 3))
    for k, offset in enumerate(offsets.tolist()):
        middle = one.time_us - offset
        first = log_blur_ratio(seen, one.start_us - offset, one.end_us - offset, middle, contrast, shape)
        second = log_blur_ratio(seen, two.start_us - offset, two.end_us - offset, middle, contrast, shape)
        predicted = np.where(pair.usable, second - first, 0.0)
        for column, product in enumerate((predicted * change, predicted**2, change**2)):
            result[k, :, column] = np.bincount(band, product.sum(axis=1), bands)
    return result


def _correlation(table: NDArray[np.float64]) -> NDArray[np.float64]:
    """Correlation of each offset over the pairs; table of shape (P, O, 3)."""
    cross, energy, observed = table.sum(axis=0).T
    # Little activity far off must not look like a good fit by its small energy.
    return np.asarray(cross / np.sqrt(np.maximum(np.maximum(energy, 0.05 * energy.max()) * observed, 1e-30)))


def _vertex(offsets: NDArray[np.int64], value: NDArray[np.float64]) -> float:
    """Vertex of the parabola through the maximum and its neighbours."""
    k = int(np.clip(value.argmax(), 1, len(value) - 2))
    below, at, above = value[k - 1 : k + 2]
    curvature = below - 2 * at + above
    shift = 0.5 * (below - above) / curvature if curvature < 0 else 0.0
    return float(offsets[k] + np.clip(shift, -1, 1) * (offsets[1] - offsets[0]))


def _line(bands: Bands) -> _Line | None:
    """Fit the offsets over the rows, without bands that fit by chance; None with too few."""
    kept = np.ones(len(bands.row), bool)
    for _ in range(3):
        if kept.sum() < LEAST_BANDS or not (bands.row[kept] < 0).any() or not (bands.row[kept] > 0).any():
            return None
        row, offset = bands.row[kept], bands.offset_us[kept]
        # the median of all pairs' slopes (Theil 1950, Sen 1968): a band that fits by chance does not turn it
        one, two = np.triu_indices(len(row), 1)
        slope = float(np.median((offset[two] - offset[one]) / (row[two] - row[one])))
        away = np.abs(bands.offset_us - slope * bands.row - np.median(offset - slope * row))
        bound = max(OUTLYING * 1.4826 * float(np.median(away[kept])), LEAST_OUTLYING_US)
        kept = kept & (away <= bound)
    if kept.sum() < LEAST_BANDS:
        return None
    row, offset = bands.row[kept], bands.offset_us[kept]
    weight = 1 / (bands.deviation_us[kept] ** 2 + LEAST_DEVIATION_US**2)
    centre, level = np.average(row, weights=weight), np.average(offset, weights=weight)
    spread = float((weight * (row - centre) ** 2).sum())
    slope = float((weight * (row - centre) * offset).sum() / spread)
    left = offset - level - slope * (row - centre)
    # scatter about the line, where it is more than the bands' own deviations account for
    excess = max(1.0, float((weight * left**2).sum()) / max(len(row) - 2, 1))
    return _Line(slope, float(np.sqrt(excess / spread)), float(level - slope * centre), int(kept.sum()))
