"""An event file as an `EventSource`: container by suffix, one checking pass, then windows through a time index."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from enhance.clock import MICROSECONDS
from enhance.errors import EventsError, JobError
from enhance.read.event_columns import Door, Raw, check_mapping
from enhance.read.event_hdf5 import Hdf5Events
from enhance.read.event_index import TimeIndex, in_order
from enhance.read.event_npz import NpzEvents
from enhance.read.event_parquet import ParquetEvents
from enhance.read.event_scratch import EVENT_BYTES, ScratchColumns
from enhance.read.event_text import TextEvents
from enhance.recording import Events
from enhance.settings import EventsSettings


class RowStore(Protocol):
    """Rows in time order, with random access."""

    def times(self, first: int, last: int) -> NDArray[np.int64]:
        """Read the times of rows ``first .. last - 1``."""
        ...

    def rows(self, first: int, last: int) -> Events:
        """Read rows ``first .. last - 1``."""
        ...

    def close(self) -> None:
        """Release the file."""
        ...


class Container(Protocol):
    """A file that can at least be streamed."""

    def blocks(self) -> Iterator[Raw]:
        """Stream all rows, in file order."""
        ...


class IndexedEvents:
    """An `EventSource` over a row store; see `enhance.recording.EventSource`."""

    def __init__(
        self, store: RowStore, index: TimeIndex, size: tuple[int, int], cover: tuple[int, int], notes: Sequence[str]
    ) -> None:
        self._store, self._index = store, index
        self.size, self.count = size, index.count
        self.notes: Sequence[str] = tuple(notes)
        self.first_us, self.last_us = index.first_us, index.last_us
        self.cover_start_us, self.cover_end_us = cover

    def between(self, start_us: int, end_us: int) -> Events:
        """Events of ``[start_us, end_us)``."""
        first, last = self._index.rows(start_us, end_us)
        t_us = self._store.times(first, last)
        inside = np.searchsorted(t_us, [start_us, end_us])
        if inside[1] <= inside[0]:
            return Events.none()
        return self._store.rows(first + int(inside[0]), first + int(inside[1]))

    def count_between(self, start_us: int, end_us: int) -> int:
        """About how many events lie in ``[start_us, end_us)``, from the index alone."""
        return self._index.count_between(start_us, end_us)

    def close(self) -> None:
        """Release the file, and the temporary copy if there is one."""
        self._store.close()


def open_event_source(settings: EventsSettings, frame_size: tuple[int, int]) -> IndexedEvents:
    """Open an event file; see `enhance.read.open_events`."""
    path, size = settings.source, settings.size or frame_size
    _check_settings(settings, size)
    door, index = Door(path, settings.time_unit, size), TimeIndex(path)
    if path.suffix.lower() in (".h5", ".hdf5"):
        store = _read_in_place(settings, door, index)
    else:
        store = _copy(path, _streamed(settings), door, index)
    try:
        notes = door.finish()
        if index.late:
            notes.append(
                f"{index.late} of {index.count} events came out of order, by at most {index.worst_us} us; "
                "they were sorted"
            )
            index, store = _sorted_copy(store, index)
        return IndexedEvents(store, index, size, _cover(settings, index), notes)
    except BaseException:
        store.close()
        raise


def _check_settings(settings: EventsSettings, size: tuple[int, int]) -> None:
    check_mapping(settings.columns)
    if settings.time_unit not in MICROSECONDS:
        raise JobError(f'events.time_unit is "{settings.time_unit}"; expected s, ms, us or ns.')
    # Coordinates are 16 bit inside.
    if not all(1 <= side <= 65_536 for side in size):
        raise JobError(f"events.size is {size[0]} x {size[1]}; expected width and height from 1 to 65536.")
    if settings.source.suffix.lower() not in (".h5", ".hdf5", ".npz", ".csv", ".txt", ".parquet"):
        raise EventsError(
            f"{settings.source}: events are read from HDF5 (.h5, .hdf5), NPZ (.npz), text (.csv, .txt) and Parquet "
            "(.parquet). A camera's own dump format is not read: with the camera maker's software, export the columns "
            "t, x, y, p to HDF5 or CSV."
        )
    if not settings.source.is_file():
        raise EventsError(f"{settings.source} is not there, or not a file. Check events.source.")


def _streamed(settings: EventsSettings) -> Container:
    suffix = settings.source.suffix.lower()
    if suffix == ".npz":
        return NpzEvents(settings.source, settings.columns)
    if suffix == ".parquet":
        return ParquetEvents(settings.source, settings.columns)
    return TextEvents(settings.source, settings.columns)


def _read_in_place(settings: EventsSettings, door: Door, index: TimeIndex) -> RowStore:
    """Check an HDF5 file; it stays the store unless rows have to be dropped or its chunks are huge."""
    file = Hdf5Events(settings.source, settings.columns, settings.time_unit)
    try:
        if file.in_place:
            for raw in file.blocks():
                index.take(door.admit(raw).t_us)
            if not door.dropped:
                return file
            door.finish()
        # A second pass through a door and an index of its own: the first ones already hold the whole count.
        again = (door, index) if not file.in_place else (Door(door.path, door.unit, door.size), TimeIndex(door.path))
        store = _copy(settings.source, file, *again)
    except BaseException:
        file.close()
        raise
    file.close()
    return store


def _copy(path: Path, container: Container, door: Door, index: TimeIndex) -> ScratchColumns:
    """Stream a container into a temporary row store."""
    count = getattr(container, "count", None)
    # Of a text file the count is not known before the end; a line of four numbers takes about what its event takes.
    expected = path.stat().st_size if count is None else count * EVENT_BYTES
    store = ScratchColumns(path, expected)
    try:
        for raw in container.blocks():
            events = door.admit(raw)
            index.take(events.t_us)
            store.append(events)
    except BaseException:
        store.close()
        raise
    return store


def _sorted_copy(store: RowStore, index: TimeIndex) -> tuple[TimeIndex, ScratchColumns]:
    """Write a row store anew in time order."""
    step = 1_000_000
    blocks = (store.rows(first, min(first + step, index.count)) for first in range(0, index.count, step))
    ordered, copy = TimeIndex(index.path), ScratchColumns(index.path, index.count * EVENT_BYTES)
    try:
        for events in in_order(blocks):
            ordered.take(events.t_us)
            copy.append(events)
    except BaseException:
        copy.close()
        raise
    store.close()
    return ordered, copy


def _cover(settings: EventsSettings, index: TimeIndex) -> tuple[int, int]:
    if settings.cover_us is None:
        return index.first_us, index.last_us + 1
    start, end = settings.cover_us
    if start > index.first_us or end <= index.last_us:
        raise EventsError(
            f"{settings.source}: its events run from {index.first_us} us to {index.last_us} us, outside events.cover "
            f"({start} us to {end} us). Give the cover in the event file's own clock, or leave it out."
        )
    return start, end
