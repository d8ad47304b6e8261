"""Events from NPZ, streamed out of the archive member by member, side by side."""

from __future__ import annotations

import zipfile
import zlib
from collections.abc import Iterator, Mapping
from contextlib import ExitStack
from pathlib import Path
from typing import IO, Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from enhance.errors import EventsError
from enhance.read.event_columns import MAP_THEM, NAMES, Raw, check_numbers, listing, pick_columns

_BLOCK = 500_000

# What a damaged or cut archive raises, depending on where the damage is.
_DAMAGE = (zipfile.BadZipFile, zlib.error, EOFError, ValueError, OSError, NotImplementedError, RuntimeError)


class _Member(NamedTuple):
    """The header of one array."""

    name: str
    shape: tuple[int, ...]
    dtype: np.dtype
    by_columns: bool


class NpzEvents:
    """Four arrays, one structured array, or one (N, 4) array t x y p.

    Parameters
    ----------
    path : Path
    columns : mapping, optional
        For any of t, x, y, p an array's or a field's name.

    Raises
    ------
    EventsError
        If the archive is damaged, holds objects, or its columns cannot be told.
    """

    def __init__(self, path: Path, columns: Mapping[str, str] | None) -> None:
        self.path = path
        try:
            with zipfile.ZipFile(path) as archive:
                members = [_header(archive, name) for name in archive.namelist() if name.endswith(".npy")]
        except _DAMAGE as error:
            raise _damaged(path, error) from error
        whole = [m for m in members if m.dtype.names or (len(m.shape) == 2 and m.shape[1] == 4)]
        self._table = whole[0] if len(members) == 1 and whole else None
        if self._table is not None:
            self._fields = self._pick_fields(self._table, columns)
            self._members = [self._table]
        else:
            by_name = {m.name: m for m in members}
            chosen = pick_columns(list(by_name), columns, path)
            self._members = [by_name[chosen[key]] for key in NAMES]
            self._check_columns()
        self.count = self._members[0].shape[0]

    def blocks(self) -> Iterator[Raw]:
        """Stream all rows, in file order.

        Raises
        ------
        EventsError
            If the archive turns out to be damaged.
        """
        try:
            with ExitStack() as stack:
                archive = stack.enter_context(zipfile.ZipFile(self.path))
                streams = [stack.enter_context(archive.open(f"{m.name}.npy")) for m in self._members]
                for stream in streams:
                    _read_header(stream)
                for first in range(0, self.count, _BLOCK):
                    rows = min(_BLOCK, self.count - first)
                    yield self._raw([_take(s, m, rows) for s, m in zip(streams, self._members, strict=True)])
        except EventsError:
            raise
        except _DAMAGE as error:
            raise _damaged(self.path, error) from error

    def _raw(self, parts: list[NDArray[Any]]) -> Raw:
        if self._table is None:
            return Raw(*parts)
        if self._fields:
            return Raw(*(parts[0][self._fields[key]] for key in NAMES))
        return Raw(*(parts[0][:, i] for i in range(4)))

    def _pick_fields(self, table: _Member, columns: Mapping[str, str] | None) -> dict[str, str] | None:
        where = f"{self.path}, array {table.name}"
        if table.dtype.names is None:
            check_numbers(where, dict.fromkeys("txyp", table.dtype))
            if table.by_columns:
                raise EventsError(
                    f"{where} is stored column after column and cannot be streamed. Save t, x, y and p as four arrays."
                )
            if columns:
                raise EventsError(f"{where} has no column names; its columns are t, x, y, p. Leave out events.columns.")
            return None
        fields = pick_columns(table.dtype.names, columns, where)
        check_numbers(where, {key: table.dtype[name] for key, name in fields.items()})
        if len(table.shape) != 1:
            raise EventsError(f"{where} has shape {table.shape}; expected one row an event.")
        return fields

    def _check_columns(self) -> None:
        check_numbers(self.path, {key: m.dtype for key, m in zip(NAMES, self._members, strict=True)})
        shapes = [m.shape for m in self._members]
        if any(len(shape) != 1 for shape in shapes) or len(set(shapes)) > 1:
            found = listing(f"{m.name} {m.shape}" for m in self._members)
            raise EventsError(
                f"{self.path}: t, x, y and p must be four arrays of one length, found {found}. "
                f"Save them anew, or {MAP_THEM}."
            )


def _header(archive: zipfile.ZipFile, name: str) -> _Member:
    with archive.open(name) as stream:
        shape, by_columns, dtype = _read_header(stream)
    return _Member(name.removesuffix(".npy"), shape, dtype, by_columns)


def _read_header(stream: IO[bytes]) -> tuple[tuple[int, ...], bool, np.dtype]:
    version = np.lib.format.read_magic(stream)
    if version == (1, 0):
        return np.lib.format.read_array_header_1_0(stream)
    return np.lib.format.read_array_header_2_0(stream)


def _take(stream: IO[bytes], member: _Member, rows: int) -> NDArray[Any]:
    shape = (rows, *member.shape[1:])
    wanted = int(np.prod(shape)) * member.dtype.itemsize
    data = stream.read(wanted)
    if len(data) < wanted:
        raise EOFError(f"array {member.name} ends early")
    return np.frombuffer(data, dtype=member.dtype).reshape(shape)


def _damaged(path: Path, error: BaseException) -> EventsError:
    return EventsError(
        f"{path} cannot be read as NPZ: {error}. It may be damaged, cut short or still being written; "
        "copy it again or save it anew."
    )
