"""Order and index: where in a row store a time stands, and events put in order where a file is slightly out of it."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from enhance.errors import EventsError
from enhance.recording import Events

#: Rows between two entries of the index: 300 million events need 2.3 MB of it.
STEP = 1024

_COLUMNS = ("t_us", "x", "y", "polarity")

# Readout and network deliver events up to a few milliseconds late; more than this is a clock that jumped.
MOST_LATE_US = 10_000


class TimeIndex:
    """Built from one pass over the times; afterwards it tells which rows a window can lie in.

    Parameters
    ----------
    path : Path
        For messages.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self.count = self.late = self.worst_us = 0
        self.first_us = self.last_us = 0
        self._entries: list[NDArray[np.int64]] = []
        self._times: NDArray[np.int64] | None = None

    def take(self, t_us: NDArray[np.int64]) -> None:
        """Add the next rows, shape (N,).

        Raises
        ------
        EventsError
            If time jumps back by more than 10 ms.
        """
        if not len(t_us):
            return
        if self.count == 0:
            self.first_us = self.last_us = int(t_us[0])
        if t_us[0] < self.last_us or np.any(t_us[1:] < t_us[:-1]):
            self._count_late(t_us)
        self._entries.append(t_us[-self.count % STEP :: STEP].copy())
        self.first_us = min(self.first_us, int(t_us.min()))
        self.last_us = max(self.last_us, int(t_us.max()))
        self.count += len(t_us)

    def rows(self, start_us: int, end_us: int) -> tuple[int, int]:
        """First and last row (exclusive) that can hold events of ``[start_us, end_us)``; a few more than needed."""
        before, after = np.searchsorted(self._entry_times(), [start_us, end_us])
        first = max(int(before) - 1, 0) * STEP
        return first, max(first, min(int(after) * STEP, self.count))

    def count_between(self, start_us: int, end_us: int) -> int:
        """About how many rows lie in ``[start_us, end_us)``, interpolated between the index's entries."""
        if end_us <= start_us:
            return 0
        times = np.append(self._entry_times(), self.last_us + 1)
        rows = np.append(np.arange(len(times) - 1) * STEP, self.count)
        # Times relative to the first one: a float holds them exactly whatever the epoch.
        first, last = np.interp(np.array([start_us, end_us]) - self.first_us, times - self.first_us, rows)
        return round(last - first)

    def _entry_times(self) -> NDArray[np.int64]:
        if self._times is None:
            self._times = np.concatenate(self._entries)
            self._entries = []
        return self._times

    def _count_late(self, t_us: NDArray[np.int64]) -> None:
        latest = np.maximum(np.maximum.accumulate(t_us), self.last_us)
        behind = latest - t_us
        worst = int(behind.argmax())
        if behind[worst] > MOST_LATE_US:
            first = int(np.argmax(behind > MOST_LATE_US))
            row = self.count + first
            raise EventsError(
                f"{self.path}: time jumps back from {latest[first]} us to {t_us[first]} us at event {row} (counted "
                f"from 0). Up to {MOST_LATE_US} us of disorder is sorted; a longer jump means a clock that was reset "
                "or wrapped around, or two recordings in one file. Split the file there, or unwrap its times."
            )
        self.late += int(np.count_nonzero(behind))
        self.worst_us = max(self.worst_us, int(behind[worst]))


def in_order(blocks: Iterable[Events], late_us: int = MOST_LATE_US) -> Iterator[Events]:
    """Sort events that are at most `late_us` out of order; ties stay in file order.

    Parameters
    ----------
    blocks : iterable of Events
        Consecutive rows.
    late_us : int
        The longest an event comes after one with a later time.

    Yields
    ------
    Events
        Sorted within and across blocks.
    """
    held = Events.none()
    for block in blocks:
        order = np.argsort(np.concatenate([held.t_us, block.t_us]), kind="stable")
        if not len(order):
            continue
        both = Events(*(np.concatenate([getattr(held, c), getattr(block, c)])[order] for c in _COLUMNS))
        # What comes next is no earlier than the latest time less `late_us`: all before that is final.
        final = int(np.searchsorted(both.t_us, both.t_us[-1] - late_us))
        held = both.keep(slice(final, None))
        yield both.keep(slice(0, final))
    yield held
