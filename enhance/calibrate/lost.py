"""Lost events: stretches in which the sensor, its link or its recorder dropped some or all of them.

Looked for block by block: gaps (nothing came, while before and after much did), row bands (as a gap, for some rows),
plateaus (a rate that is flat at its highest, as no scene's is: the link was full) and bunches (many events at one
stamp, as when a buffer is emptied late). Nothing is mended; what rests on such a stretch has to know of it.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from enhance.recording import Events, EventSource
from enhance.rig import Quantity

#: Bin of the rate, length of the blocks read, and events a block holds at the most.
BIN_US, BLOCK_BINS, MOST_EVENTS = 1_000, 128, 4_000_000
#: Blocks looked at: three and a half hours.
MOST_BLOCKS = 100_000
#: Bins either side that a gap is compared with (or as many as it has, if more), events that it must lack, and how much
#: of that rate there must be right at its ends: what comes to rest by itself takes longer.
AROUND, LEAST_LACKING, ABRUPT = 10, 25.0, 0.3
#: Where rests are common (a lamp that turns, a scene that stops and goes), a gap is this many times as long as most.
MANY_RESTS, TIMES_USUAL = 5, 2.5
#: Bins of a slab that bands are sought in, rows a band has, and share of them that must fall silent within a slab.
SLAB_BINS, LEAST_ROWS, ALL_AT_ONCE = 4, 6, 0.8
#: A plateau: bins in a row, events in each, spread in those of chance (a Poisson process has 1), and how near the
#: recording's highest rate.
PLATEAU_BINS, PLATEAU_EVENTS, CALM, NEAR_TOP = 8, 150, 0.35, 0.97
#: A bunch: events at one stamp, and their share of a block's.
BUNCH_EVENTS, BUNCH_SHARE = 200, 0.02
#: Share of the events that a plateau is taken to have lost, which nobody knows: little trust, but still events.
PLATEAU_LOST = 0.05
METHOD = "rate of events, bin by bin"
#: Stretches named in words.
NAMED = 12


@dataclass(frozen=True)
class Lost:
    """A stretch ``[start, end)`` of the event clock: what happened, the share of events lost, and how sure that is."""

    start_us: int
    end_us: int
    kind: str
    share: float
    sure: float
    detail: str = ""

    def words(self, first_us: int) -> str:
        """Say it, counted from the recording's first event."""
        start, end = (f"{(t - first_us) / 1e6:.3f}" for t in (self.start_us, self.end_us))
        return f"{self.kind}{self.detail} from {start} to {end} s ({'sure' if self.sure >= 0.9 else 'likely'})"


def find_lost(events: EventSource) -> Quantity:
    """Find where events are missing.

    Parameters
    ----------
    events : EventSource
        In the sensor's own world.

    Returns
    -------
    Quantity
        Value: list of [start, end, share of the events lost], event clock; the evidence names them.
    """
    found = lost_stretches(events)
    value = [[lost.start_us, lost.end_us, round(lost.share, 3)] for lost in found]
    if not found:
        return Quantity(value, None, METHOD, "no stretch in which events are missing")
    named = "; ".join(lost.words(events.first_us) for lost in found[:NAMED])
    more = f"; and {len(found) - NAMED} more" if len(found) > NAMED else ""
    return Quantity(value, None, METHOD, f"times from the first event: {named}{more}")


def lost_stretches(events: EventSource) -> list[Lost]:
    """Find the stretches in which events are missing, in time order.

    Parameters
    ----------
    events : EventSource

    Returns
    -------
    list of Lost
    """
    rates: list[NDArray[np.int64]] = []
    found: list[Lost] = []
    before = np.zeros((0, events.size[1]), np.int64)
    for start, bins, seen in _blocks(events):
        rows = _rows(seen, start, bins, events.size[1])
        rates.append(rows.sum(axis=1))
        # with the block before: a band may lie across their border
        found += _bands(np.concatenate([before, rows]), start - len(before) * BIN_US)
        before = rows
        found += _bunches(seen)
    rate = np.concatenate(rates) if rates else np.zeros(0, np.int64)
    # the last bin is cut by the recording's end
    rate = rate[: (events.last_us + 1 - events.first_us) // BIN_US]
    found += [*_gaps(rate, events.first_us), *_plateaus(rate, events.first_us)]
    return sorted(_merged(found), key=lambda lost: (lost.start_us, lost.end_us))


def _blocks(events: EventSource) -> Iterator[tuple[int, int, Events]]:
    """Read the recording in blocks of whole bins; shorter ones where very much happens."""
    start = events.first_us
    # a clock that jumps ahead by days would keep it busy for as long
    for _ in range(MOST_BLOCKS):
        if start > events.last_us:
            return
        bins = BLOCK_BINS
        many = events.count_between(start, start + bins * BIN_US)
        if many > MOST_EVENTS:
            bins = max(2 * SLAB_BINS, bins * MOST_EVENTS // many // SLAB_BINS * SLAB_BINS)
        yield start, bins, events.between(start, start + bins * BIN_US)
        start += bins * BIN_US


def _rows(seen: Events, start_us: int, bins: int, height: int) -> NDArray[np.int64]:
    """Events of each bin and row of a block, shape (bins, H)."""
    cell = (seen.t_us - start_us) // BIN_US * height + seen.y
    return np.bincount(cell, minlength=bins * height).reshape(-1, height)


def _runs(chosen: NDArray[np.bool_]) -> NDArray[np.int64]:
    """First and one past the last of each run of true, shape (N, 2)."""
    edge = np.flatnonzero(np.diff(np.concatenate([[False], chosen, [False]])))
    return edge.reshape(-1, 2)


def _gaps(rate: NDArray[np.int64], first_us: int) -> list[Lost]:
    runs = _runs(rate == 0)
    found = []
    length = runs[:, 1] - runs[:, 0]
    quiet = float(np.percentile(rate[rate > 0], 5)) if (rate > 0).any() else 0.0
    for (start, end), long in zip(runs, length, strict=True):
        around = max(AROUND, int(long))
        before, after = rate[max(0, start - around) : start], rate[end : end + around]
        if len(before) < 2 or len(after) < 2:
            continue
        usual = min(float(before.mean()), float(after.mean()))
        ends = min(float(before[-2:].mean()), float(after[:2].mean()))
        rests = np.sort(length)[:-1] if len(length) > MANY_RESTS else np.zeros(1)
        lacking = usual * long
        if lacking < LEAST_LACKING or ends < ABRUPT * usual or long < TIMES_USUAL * np.percentile(rests, 90):
            continue
        sure = 1.0 if quiet * long >= LEAST_LACKING else 0.7
        # whole bins are empty: it may reach into those beside them
        begin, until = int(first_us + (start - 1) * BIN_US), int(first_us + (end + 1) * BIN_US)
        found.append(Lost(begin, until, "gap", 1.0, sure))
    return found


def _plateaus(rate: NDArray[np.int64], first_us: int) -> list[Lost]:
    if len(rate) < PLATEAU_BINS:
        return []
    top = float(rate.max())
    found = []
    for start, end in _runs(rate >= max(NEAR_TOP * top, PLATEAU_EVENTS)):
        # the first and the last bin may be filled in part
        inner = rate[start + 1 : end - 1].astype(np.float64)
        if end - start < PLATEAU_BINS or inner.var() > CALM**2 * inner.mean():
            continue
        detail = f" at {inner.mean() * 1e6 / BIN_US / 1e6:.2f} million events a second"
        begin, until = int(first_us + start * BIN_US), int(first_us + end * BIN_US)
        found.append(Lost(begin, until, "plateau", PLATEAU_LOST, 0.9, detail))
    return found


def _bands(rows: NDArray[np.int64], start_us: int) -> list[Lost]:
    """Bands of rows that all fall silent at once and come back at once, while the rows beside them go on."""
    slabs, height = len(rows) // SLAB_BINS, rows.shape[1]
    least = max(LEAST_ROWS, height // 16)
    if slabs < 3 or height <= least:
        return []
    count = rows[: slabs * SLAB_BINS].reshape(slabs, SLAB_BINS, height).sum(axis=1)
    silent = count == 0
    found = []
    # what moves away leaves its rows one after another; only slabs in which many rows fall silent need a look
    falls = (silent[1:] & ~silent[:-1]).sum(axis=1) >= ALL_AT_ONCE * least
    for slab in np.flatnonzero(falls) + 1:
        for top, bottom in _runs(silent[slab]):
            end = int(slab) + 1
            while end < slabs and silent[end, top:bottom].all():
                end += 1
            if bottom - top < least or end == slabs or not _dropped(count, (int(slab), end), (top, bottom)):
                continue
            # it begins and ends somewhere within the slabs beside
            begin, until = (start_us + k * SLAB_BINS * BIN_US for k in (int(slab) - 1, end + 1))
            share = float((bottom - top) / height)
            detail = "" if share == 1.0 else f" of rows {top} to {bottom - 1}"
            found.append(Lost(begin, until, "row band" if detail else "gap", share, 0.9, detail))
    return found


def _dropped(count: NDArray[np.int64], slabs: tuple[int, int], rows: tuple[int, int]) -> bool:
    """Whether a silent band is one that lost its events: lively before, after, and in the rows beside it meanwhile."""
    (first, end), (top, bottom) = slabs, rows
    before, after = count[first - 1, top:bottom], count[end, top:bottom]
    lacking = min(int(before.sum()), int(after.sum())) * (end - first)
    alive = min(float((before > 0).mean()), float((after > 0).mean()))
    if lacking < LEAST_LACKING or alive < ALL_AT_ONCE:
        return False
    for side in (slice(max(0, top - 4), top), slice(bottom, bottom + 4)):
        usual = 0.5 * float(count[first - 1, side].sum() + count[end, side].sum())
        meanwhile = float(count[first:end, side].sum()) / (end - first)
        if side.start < side.stop and side.start < count.shape[1] and meanwhile < max(2.0, ABRUPT * usual):
            return False
    return True


def _bunches(seen: Events) -> list[Lost]:
    """Stamps at which far more events stand than one instant brings."""
    if len(seen) < BUNCH_EVENTS:
        return []
    begin = np.flatnonzero(np.diff(seen.t_us, prepend=seen.t_us[0] - 1))
    many = np.diff(np.append(begin, len(seen)))
    stamps = seen.t_us[begin]
    usual = float(np.median(many))
    bunched = (many >= BUNCH_EVENTS) & (many >= BUNCH_SHARE * len(seen)) & (many >= 20 * usual)
    found = []
    for k in np.flatnonzero(bunched):
        since = int(stamps[k - 1]) if k else int(stamps[k]) - BIN_US
        detail = f" of {many[k]} events at one stamp"
        found.append(Lost(min(since, int(stamps[k]) - BIN_US), int(stamps[k]) + 1, "bunch", 0.5, 0.9, detail))
    return found


def _merged(found: Sequence[Lost]) -> list[Lost]:
    """Join stretches of one kind that touch, and row bands whose rows shift a little."""
    merged: list[Lost] = []
    for lost in sorted(found, key=lambda one: (one.kind, one.start_us)):
        last = merged[-1] if merged else None
        if last is not None and last.kind == lost.kind and lost.start_us <= last.end_us:
            share, end = max(last.share, lost.share), max(last.end_us, lost.end_us)
            merged[-1] = Lost(last.start_us, end, lost.kind, share, max(last.sure, lost.sure), last.detail)
        else:
            merged.append(lost)
    return merged
