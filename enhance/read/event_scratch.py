"""Events in plain column files inside a private temporary folder: random access for containers that have none."""

from __future__ import annotations

import os
import shutil
import tempfile
import weakref
from pathlib import Path
from typing import Any, BinaryIO

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
    """A row store on disk; the folder goes with `close`, with the object, or at exit.

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
        parent = Path(tempfile.gettempdir())
        free = shutil.disk_usage(parent).free
        if expected_bytes > free:
            raise self._full(parent, f"needs about {expected_bytes:,} bytes there and {free:,} are free")
        self._folder = Path(tempfile.mkdtemp(prefix="enhance-events-", dir=parent))
        # A forked worker inherits the object but not the folder: only the process that made it may remove it.
        self._remove = weakref.finalize(self, _remove, self._folder, os.getpid())
        self._files: dict[str, BinaryIO] = {name: (self._folder / name).open("w+b") for name in _COLUMNS}

    def append(self, events: Events) -> None:
        """Add rows at the end.

        Raises
        ------
        EventsError
            If the disk is full.
        """
        try:
            for name, file in self._files.items():
                file.write(np.ascontiguousarray(getattr(events, name), dtype=_COLUMNS[name]).data)
        except OSError as error:
            raise self._full(self._folder.parent, f"could not be written ({error.strerror})") from error

    def finish(self) -> None:
        """Call once after the last row was added.

        Raises
        ------
        EventsError
            If the disk is full.
        """
        try:
            for file in self._files.values():
                file.flush()
        except OSError as error:
            raise self._full(self._folder.parent, f"could not be written ({error.strerror})") from error

    def times(self, first: int, last: int) -> NDArray[np.int64]:
        """Read the times of rows ``first .. last - 1``."""
        return self._read("t_us", first, last)

    def rows(self, first: int, last: int) -> Events:
        """Read rows ``first .. last - 1``."""
        return Events(*(self._read(name, first, last) for name in _COLUMNS))

    def close(self) -> None:
        """Close the files and remove the folder."""
        for file in self._files.values():
            file.close()
        self._remove()

    def _read(self, name: str, first: int, last: int) -> NDArray[Any]:
        # Reading instead of mapping keeps the process's memory at the window: mapped pages count as its own.
        dtype = _COLUMNS[name]
        values = np.empty(last - first, dtype)
        wanted = values.view(np.uint8).data
        got = 0
        while got < len(wanted):
            # preadv leaves the shared file position alone, so threads may read side by side.
            step = os.preadv(self._files[name].fileno(), [wanted[got:]], first * dtype.itemsize + got)
            if step == 0:
                raise EventsError(
                    f"{self.source}: its temporary copy in {self._folder} was cut short in use. Run the job again."
                )
            got += step
        return values

    def _full(self, folder: Path, found: str) -> EventsError:
        return EventsError(
            f"{self.source}: its temporary copy in {folder} {found}. Free some space, set TMPDIR to a folder on a "
            "larger disk, or convert the events to HDF5, which is read in place."
        )


def _remove(folder: Path, owner: int) -> None:
    if os.getpid() == owner:
        shutil.rmtree(folder, ignore_errors=True)
