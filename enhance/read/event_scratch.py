"""Events in plain column files in a temporary place: random access for containers that have none."""

from __future__ import annotations

import os
import shutil
import tempfile
import weakref
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from enhance.errors import EventsError
from enhance.recording import Events

_COLUMNS: dict[str, np.dtype] = {
    "t_us": np.dtype(np.int64),
    "x": np.dtype(np.uint16),
    "y": np.dtype(np.uint16),
    "polarity": np.dtype(np.int8),
}

#: Bytes an event takes in the temporary folder.
EVENT_BYTES = sum(dtype.itemsize for dtype in _COLUMNS.values())


class ScratchColumns:
    """A row store on disk, in files without a name: whatever ends the process, nothing is left behind.

    Parameters
    ----------
    source : Path
        The event file it is filled from, for messages.
    expected_bytes : int
        What it will take, about; checked against the free space first.

    Raises
    ------
    EventsError
        If the temporary folder's disk has not that much space.
    """

    def __init__(self, source: Path, expected_bytes: int) -> None:
        self.source = source
        self._folder = tempfile.gettempdir()
        free = shutil.disk_usage(self._folder).free
        if expected_bytes > free:
            raise self._full(f"needs about {expected_bytes:,} bytes there and {free:,} are free")
        self._files: dict[str, int] = {name: _nameless_file() for name in _COLUMNS}
        self._release = weakref.finalize(self, _close_all, tuple(self._files.values()))

    def append(self, events: Events) -> None:
        """Add rows at the end.

        Raises
        ------
        EventsError
            If the disk is full.
        """
        try:
            for name, file in self._files.items():
                data = np.ascontiguousarray(getattr(events, name), dtype=_COLUMNS[name]).view(np.uint8).data
                while len(data):
                    data = data[os.write(file, data) :]
        except OSError as error:
            raise self._full(f"could not be written ({error.strerror})") from error

    def times(self, first: int, last: int) -> NDArray[np.int64]:
        """Read the times of rows ``first .. last - 1``."""
        return self._read("t_us", first, last)

    def rows(self, first: int, last: int) -> Events:
        """Read rows ``first .. last - 1``."""
        return Events(*(self._read(name, first, last) for name in _COLUMNS))

    def close(self) -> None:
        """Close the files, and thereby remove them."""
        self._files = {}
        self._release()

    def _read(self, name: str, first: int, last: int) -> NDArray[Any]:
        # Reading instead of mapping keeps the process's memory at the window: mapped pages count as its own.
        dtype = _COLUMNS[name]
        values = np.empty(last - first, dtype)
        wanted = values.view(np.uint8).data
        got = 0
        while got < len(wanted):
            # preadv leaves the shared file position alone, so threads may read side by side.
            step = os.preadv(self._files[name], [wanted[got:]], first * dtype.itemsize + got)
            if step == 0:
                raise EventsError(
                    f"{self.source}: its temporary copy in {self._folder} was cut short in use. Run the job again."
                )
            got += step
        return values

    def _full(self, found: str) -> EventsError:
        return EventsError(
            f"{self.source}: its temporary copy in {self._folder} {found}. Free some space, set TMPDIR to a folder on "
            "a larger disk, or convert the events to HDF5, which is read in place."
        )


def _nameless_file() -> int:
    with tempfile.TemporaryFile(prefix="enhance-events-", buffering=0) as file:
        return os.dup(file.fileno())


def _close_all(files: tuple[int, ...]) -> None:
    for file in files:
        os.close(file)
