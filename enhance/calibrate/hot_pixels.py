"""Bad pixels: hot ones fire all the time whatever the scene does, dead ones never do."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from enhance.kernels.event_integral import event_counts
from enhance.recording import EventSource
from enhance.rig import Quantity

#: Slices of the recording that are looked at: memory and time stay the same for an hour. A short recording is cut into
#: fewer, since in a slice much shorter than this many microseconds even a hot pixel may be silent.
SLICES, LEAST_SLICES, SLICE_US, SHORT_SLICE_US = 32, 8, 100_000, 20_000
#: Events read at the most, over all slices.
MOST_EVENTS = 20_000_000
#: A hot pixel outdoes its neighbours this many times, at this rate at least (events a second), and fires in nearly all
#: slices: an edge that passes, or a part that turns, spares some slices or moves the neighbours as well.
TIMES_NEIGHBOURS, LEAST_RATE_HZ, LEAST_SHARE = 8.0, 20.0, 0.8
#: Which of the 8 neighbours, from the busiest down, is compared: two hot pixels may stand side by side, while along the
#: thinnest line that moves both neighbours on it are busy.
COMPARED = 2
#: Where the scene is busy a hot pixel does not stand out of the whole, but of the slices in which those neighbours are
#: quiet (this many events at the most): there must be as many such slices, and this share of all.
QUIET_EVENTS, LEAST_QUIET, QUIET_SHARE = 1, 4, 0.25
#: A dead pixel tells nothing while each of its neighbours, but for one that may be dead as well, tells this much.
DEAD_NEIGHBOURS, QUIETEST = 15, 1


def find_hot_pixels(events: EventSource) -> Quantity:
    """Find pixels whose events say nothing of the scene.

    Parameters
    ----------
    events : EventSource
        In the sensor's own world.

    Returns
    -------
    Quantity
        Value: list of [x, y].
    """
    width, height = events.size
    starts, length = _slices(events)
    whole, quiet = _Tally((height, width)), _Tally((height, width))
    looked, read = 0, 0
    for start in starts:
        seen = events.between(start, start + length)
        counts = event_counts(seen.x, seen.y, seen.polarity, (height, width)).sum(axis=0)
        around = _busy_neighbour(counts)
        whole.add(counts, around, np.ones(counts.shape, bool))
        quiet.add(counts, around, around <= QUIET_EVENTS)
        looked, read = looked + 1, read + len(seen)
        if read > MOST_EVENTS:
            break
    enough = quiet.slices >= max(LEAST_QUIET, QUIET_SHARE * looked)
    # over the whole recording the busiest neighbour of all counts, not that of each slice
    hot = whole.outdoes(_busy_neighbour(whole.total), length) | (enough & quiet.outdoes(quiet.around, length))
    rows, columns = np.nonzero(hot)
    found = [[int(x), int(y)] for x, y in zip(columns, rows, strict=True)]
    evidence = f"{looked} slices of {length / 1000:.1f} ms; {len(found)} of {width * height} pixels"
    return Quantity(found, None, "rate against the neighbours, slice by slice", evidence)


def find_dead_pixels(events: EventSource) -> Quantity:
    """Find pixels that never tell anything where all around them do.

    Parameters
    ----------
    events : EventSource
        In the sensor's own world, as under steady light: a swing of the lamp that a pixel's own thresholds just do not
        reach leaves it silent among neighbours that tell each cycle.

    Returns
    -------
    Quantity
        Value: list of [x, y].
    """
    width, height = events.size
    starts, length = _slices(events)
    total, read = np.zeros((height, width), np.int64), 0
    for start in starts:
        seen = events.between(start, start + length)
        total += event_counts(seen.x, seen.y, seen.polarity, (height, width)).sum(axis=0)
        read += len(seen)
        if read > MOST_EVENTS:
            break
    rows, columns = np.nonzero((total == 0) & (_nth_neighbour(total, QUIETEST) >= DEAD_NEIGHBOURS))
    found = [[int(x), int(y)] for x, y in zip(columns, rows, strict=True)]
    judged = int((_nth_neighbour(total, QUIETEST) >= DEAD_NEIGHBOURS).sum())
    evidence = f"{len(found)} of the {judged} pixels whose neighbours are busy enough to tell"
    return Quantity(found, None, "silence among busy neighbours", evidence)


def _slices(events: EventSource) -> tuple[list[int], int]:
    """Give the starts and the length of the slices that are looked at."""
    span = events.last_us + 1 - events.first_us
    slices = int(np.clip(span // SHORT_SLICE_US, LEAST_SLICES, SLICES))
    length = min(SLICE_US, max(1, span // slices))
    return [events.first_us + (span - length) * k // (slices - 1) for k in range(slices)], length


class _Tally:
    """What each pixel did in some of the slices, and its busy neighbours in the same."""

    def __init__(self, shape: tuple[int, int]) -> None:
        self.total, self.around, self.fired, self.slices = (np.zeros(shape, np.int64) for _ in range(4))

    def add(self, counts: NDArray[np.int64], around: NDArray[np.int64], counted: NDArray[np.bool_]) -> None:
        self.total += counts * counted
        self.around += around * counted
        self.fired += (counts > 0) & counted
        self.slices += counted

    def outdoes(self, around: NDArray[np.int64], length_us: int) -> NDArray[np.bool_]:
        """Whether a pixel fires far more than these neighbours, and nearly always."""
        return np.asarray(
            (self.total > TIMES_NEIGHBOURS * np.maximum(around, 1))
            & (self.total > LEAST_RATE_HZ * self.slices * length_us / 1e6)
            & (self.fired >= LEAST_SHARE * self.slices)
        )


def _busy_neighbour(total: NDArray[np.int64]) -> NDArray[np.int64]:
    """Count of the second busiest of each pixel's neighbours, shape (H, W)."""
    return _nth_neighbour(total, -COMPARED)


def _nth_neighbour(total: NDArray[np.int64], nth: int) -> NDArray[np.int64]:
    """Count of the n-th of each pixel's 8 neighbours, from the least busy up, shape (H, W)."""
    height, width = total.shape
    # Mirrored: a line that moves goes on beyond the frame's border.
    around = np.pad(total, 1, mode="reflect")
    shifted = [around[1 + dy : 1 + dy + height, 1 + dx : 1 + dx + width] for dy in (-1, 0, 1) for dx in (-1, 0, 1)]
    del shifted[4]  # the pixel itself
    return np.asarray(np.partition(np.stack(shifted), nth, axis=0)[nth])
