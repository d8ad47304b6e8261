"""Which column is which, and stored values turned into events: the door every event passes, whatever its container."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from enhance.clock import MICROSECONDS, to_microseconds
from enhance.errors import EventsError, JobError
from enhance.recording import Events

#: Names, in lower case, under which a column is found without being told.
NAMES: dict[str, tuple[str, ...]] = {
    "t": ("t", "ts", "time", "times", "timestamp", "timestamps"),
    "x": ("x", "xs", "col", "cols", "column", "columns"),
    "y": ("y", "ys", "row", "rows"),
    "p": ("p", "ps", "pol", "pols", "polarity", "polarities"),
}

# Beyond this a time cannot be an int64 of microseconds with room for an offset and a drift.
_LARGEST_US = 2**62

MAP_THEM = 'say which is which: events.columns = { t = "...", x = "...", y = "...", p = "..." }'


class Raw(NamedTuple):
    """Consecutive rows as they are stored; each array has shape (N,) and any number type."""

    t: NDArray[Any]
    x: NDArray[Any]
    y: NDArray[Any]
    p: NDArray[Any]


def match_names(available: Sequence[str], mapping: Mapping[str, str] | None) -> dict[str, list[str]]:
    """Names that may stand for each of t, x, y, p.

    Parameters
    ----------
    available : sequence of str
    mapping : mapping, optional
        What the job says; only that name counts for a mapped column.

    Returns
    -------
    dict
        For each of t, x, y, p the matching names: none, one, or several where it is ambiguous.
    """
    found = {}
    for key, names in NAMES.items():
        if mapping and key in mapping:
            found[key] = [name for name in available if name == mapping[key]]
        else:
            found[key] = [name for name in available if name.strip().lower() in names]
    return found


def pick_columns(available: Sequence[str], mapping: Mapping[str, str] | None, where: object) -> dict[str, str]:
    """Decide which name is t, x, y and p.

    Parameters
    ----------
    available : sequence of str
    mapping : mapping, optional
        What the job says.
    where : object
        The file, for messages.

    Returns
    -------
    dict
        One name for each of t, x, y, p.

    Raises
    ------
    EventsError
        If one is missing or ambiguous.
    """
    found = match_names(available, mapping)
    missing = [key for key, names in found.items() if not names]
    if missing:
        raise EventsError(
            f"{where}: no column for {', '.join(missing)} among {listing(available)}. "
            f"Expected t, x, y and p (or names such as timestamp, polarity); {MAP_THEM}."
        )
    for key, names in found.items():
        if len(names) > 1:
            raise EventsError(f"{where}: {listing(names)} could each be {key}; {MAP_THEM}.")
    return {key: names[0] for key, names in found.items()}


def listing(names: Iterable[str], most: int = 12) -> str:
    """Join names for a message; a long list is cut with its count."""
    names = list(names)
    rest = f" and {len(names) - most} more" if len(names) > most else ""
    return (", ".join(names[:most]) or "nothing") + rest


def check_mapping(mapping: Mapping[str, str] | None) -> None:
    """Refuse a column map with keys other than t, x, y, p.

    Raises
    ------
    JobError
        If there is another key.
    """
    unknown = sorted(set(mapping or ()) - set(NAMES))
    if unknown:
        raise JobError(f"events.columns names {', '.join(unknown)}; its keys are t, x, y and p.")


def check_numbers(where: object, dtypes: Mapping[str, np.dtype]) -> None:
    """Refuse columns that do not hold plain numbers (text, objects, dates): nothing is ever unpickled.

    Raises
    ------
    EventsError
        If a column holds something else.
    """
    for key, dtype in dtypes.items():
        if dtype.kind not in "iufb" or (key in "txy" and dtype.kind == "b"):
            raise EventsError(
                f"{where}: column {key} is of type {dtype}, expected whole or decimal numbers. "
                "Store t, x, y and p as plain number arrays."
            )


def to_events(raw: Raw, unit: str) -> Events:
    """Convert rows that `Door` has let pass.

    Parameters
    ----------
    raw : Raw
        Finite times, coordinates on the sensor.
    unit : str
        Unit of ``raw.t``.

    Returns
    -------
    Events
        In the order of the rows; polarity +1 for a stored value above 0, else -1.
    """
    polarity = np.where(raw.p > 0, np.int8(1), np.int8(-1))
    return Events(to_microseconds(raw.t, unit), raw.x.astype(np.uint16), raw.y.astype(np.uint16), polarity)


class Door:
    """Lets usable events in and counts the others.

    Parameters
    ----------
    path : Path
        For messages.
    unit : str
        s, ms, us or ns.
    size : tuple of int
        Width, height of the sensor.
    """

    # A few bad coordinates are transmission faults; more than one in a thousand means another sensor's size.
    MOST_OUTSIDE = 0.001

    def __init__(self, path: Path, unit: str, size: tuple[int, int]) -> None:
        self.path, self.unit, self.size = path, unit, size
        self.rows = self.no_time = self.outside = self.positive = 0
        self.largest = [-1, -1]
        self.smallest = [0, 0]
        self._values: set[int] = set()
        self._limit = float(_LARGEST_US / MICROSECONDS[unit])

    @property
    def dropped(self) -> int:
        """Events that were not let in."""
        return self.no_time + self.outside

    def admit(self, raw: Raw) -> Events:
        """Check and convert consecutive rows, shape (N,); unusable ones are dropped and counted."""
        self._look_at_polarity(raw.p)
        timed = self._timed(raw.t)
        placed = self._inside(raw.x, self.size[0], 0) & self._inside(raw.y, self.size[1], 1)
        kept = timed & placed
        usable = int(np.count_nonzero(kept))
        without_time = len(timed) - int(np.count_nonzero(timed))
        self.rows += len(kept)
        self.no_time += without_time
        self.outside += len(kept) - without_time - usable
        events = to_events(raw if usable == len(kept) else Raw(*(column[kept] for column in raw)), self.unit)
        self.positive += int(np.count_nonzero(events.polarity > 0))
        return events

    def finish(self) -> list[str]:
        """Judge the whole file, once it has passed.

        Returns
        -------
        list of str
            Corrections in words, with their counts.

        Raises
        ------
        EventsError
            If there are no usable events, or too many lie outside the sensor.
        """
        if self.rows == 0:
            raise EventsError(
                f"{self.path} holds no events. Check that it is the right file and was written to its end."
            )
        if self.no_time == self.rows:
            raise EventsError(f"{self.path}: none of its {self.rows} events has a time (all are NaN). Record it anew.")
        if self.outside > self.MOST_OUTSIDE * self.rows:
            raise self._other_sensor()
        notes = []
        if self.no_time:
            notes.append(f"{self.no_time} of {self.rows} events without a time (NaN) were dropped")
        if self.outside:
            notes.append(f"{self.outside} of {self.rows} events outside the sensor's {_size(self.size)} were dropped")
        usable = self.rows - self.dropped
        if self.positive in (0, usable):
            notes.append(
                f"all {usable} events are {'positive' if self.positive else 'negative'}: "
                "the sensor, or the file's polarity column, may have lost the other sign"
            )
        return notes

    def _timed(self, t: NDArray[Any]) -> NDArray[np.bool_]:
        if t.dtype.kind != "f":
            whole = max(abs(int(t.min())), abs(int(t.max()))) if len(t) else 0
            if whole > self._limit:
                raise self._absurd(whole)
            return np.ones(len(t), dtype=bool)
        finite = np.isfinite(t)
        reach = float(np.abs(t[finite]).max(initial=0))
        if reach > self._limit:
            raise self._absurd(reach)
        return finite

    def _absurd(self, reach: float) -> EventsError:
        return EventsError(
            f"{self.path}: an event time of {reach:g} {self.unit} is too large to be one. "
            f'Check events.time_unit (now "{self.unit}"; s, ms, us or ns).'
        )

    def _inside(self, values: NDArray[Any], bound: int, axis: int) -> NDArray[np.bool_]:
        if values.dtype.kind == "f":
            finite = np.isfinite(values)
            whole = np.where(finite, values, -1)
            if np.any(whole != np.rint(whole)):
                raise EventsError(
                    f"{self.path}: column {'xy'[axis]} holds fractions of a pixel. Expected the sensor's own whole "
                    "coordinates, not undistorted or scaled ones; export the raw coordinates."
                )
            values = whole
        if len(values):
            self.largest[axis] = max(self.largest[axis], int(values.max()))
            self.smallest[axis] = min(self.smallest[axis], int(values.min()))
        return (values >= 0) & (values < bound)

    def _look_at_polarity(self, p: NDArray[Any]) -> None:
        if p.dtype.kind == "f" and not np.isfinite(p).all():
            raise EventsError(f"{self.path}: column p holds NaN. Expected 0/1, -1/+1 or true/false.")
        if p.dtype.kind == "b" or not len(p):
            return
        for value in (-1, 0, 1):
            if value not in self._values and np.any(p == value):
                self._values.add(value)
        odd = (p != 1) & (p != 0) & ((p != -1) if p.dtype.kind != "u" else True)
        if odd.any():
            found = p[odd][0]
            raise EventsError(
                f"{self.path}: a polarity of {found} at event {self.rows + int(np.argmax(odd))} (counted from 0). "
                "Expected 0/1, -1/+1 or true/false; is column p the right one?"
            )
        if {-1, 0} <= self._values:
            raise EventsError(f"{self.path}: polarities -1, 0 and +1 in one file. Expected 0/1 or -1/+1, not both.")

    def _other_sensor(self) -> EventsError:
        width, height = self.size
        swapped = self.largest[0] < height and self.largest[1] < width and min(self.smallest) >= 0
        hint = " x and y look swapped: see events.columns." if swapped else ""
        low = f" and down to {self.smallest[0]}, {self.smallest[1]}" if min(self.smallest) < 0 else ""
        return EventsError(
            f"{self.path}: events of another sensor size: {self.outside} of {self.rows} lie outside "
            f"{_size(self.size)}; x goes up to {self.largest[0]}, y to {self.largest[1]}{low}.{hint} "
            "Set events.size = [width, height] to the event sensor's own size."
        )


def _size(size: tuple[int, int]) -> str:
    return f"{size[0]} x {size[1]}"
