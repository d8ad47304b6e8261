"""Events from HDF5, read in place by slices."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from enhance.errors import EventsError, PackageError
from enhance.read.event_columns import MAP_THEM, NAMES, Raw, check_numbers, listing, match_names, to_events
from enhance.recording import Events

# Rows read at a time when the whole file is streamed: 13 MB, and many chunks of a usual file.
_BLOCK = 1_000_000

# A chunk is decompressed as a whole for any part of it: above this, reading in place would cost more than a copy.
_LARGEST_CHUNK_BYTES = 64 << 20

# HDF5's own cache of 1 MB holds less than one chunk of a usual event file.
_CACHE_BYTES = 16 << 20

# A dataset, and a field of it where it is compound.
_Column = tuple[Any, str | None]


class Hdf5Events:
    """A row store over four datasets, or over one compound dataset.

    Parameters
    ----------
    path : Path
    columns : mapping, optional
        For any of t, x, y, p a dataset's path, or a field of a compound dataset.
    unit : str
        Unit of the times.

    Raises
    ------
    EventsError
        If the file is damaged, or its columns cannot be told.
    """

    def __init__(self, path: Path, columns: Mapping[str, str] | None, unit: str) -> None:
        import h5py

        _load_filters()
        self.path, self._unit = path, unit
        try:
            self._file = h5py.File(path, "r", rdcc_nbytes=_CACHE_BYTES)
        except OSError as error:
            raise _damaged(path, error) from error
        try:
            self._columns = _find_columns(self._file, path, columns)
            self._check()
        except BaseException:
            self._file.close()
            raise
        self.count = len(self._columns["t"][0])

    @property
    def in_place(self) -> bool:
        """Whether its chunks are small enough to read windows from it directly."""
        return self._largest_chunk() <= _LARGEST_CHUNK_BYTES

    def blocks(self) -> Iterator[Raw]:
        """Stream all rows, in file order."""
        chunk = (self._columns["t"][0].chunks or (1,))[0]
        step = chunk * max(1, _BLOCK // chunk)
        for first in range(0, self.count, step):
            yield self._raw(first, min(first + step, self.count))

    def times(self, first: int, last: int) -> NDArray[np.int64]:
        """Read the times of rows ``first .. last - 1``."""
        dataset, field = self._columns["t"]
        values = self._slice(dataset, first, last)
        t = values if field is None else values[field]
        return to_events(Raw(t, t[:0], t[:0], t[:0]), self._unit).t_us

    def rows(self, first: int, last: int) -> Events:
        """Read rows ``first .. last - 1``."""
        return to_events(self._raw(first, last), self._unit)

    def close(self) -> None:
        """Release the file."""
        self._file.close()

    def _raw(self, first: int, last: int) -> Raw:
        # A compound dataset is read once for its four fields.
        read = {dataset.name: self._slice(dataset, first, last) for dataset, _ in self._columns.values()}
        columns = ((read[dataset.name], field) for dataset, field in (self._columns[key] for key in NAMES))
        return Raw(*(values if field is None else values[field] for values, field in columns))

    def _slice(self, dataset: Any, first: int, last: int) -> NDArray[Any]:
        try:
            return dataset[first:last]
        except (OSError, RuntimeError) as error:
            missing = _missing_filter(dataset)
            if missing:
                raise PackageError(
                    f"{self.path}: {dataset.name} is compressed with {missing}, which is not installed. "
                    'Install it with: pip install "enhance[hdf5]"'
                ) from error
            raise _damaged(self.path, error) from error

    def _largest_chunk(self) -> int:
        datasets = [dataset for dataset, _ in self._columns.values()]
        return max(int(np.prod(d.chunks)) * d.dtype.itemsize if d.chunks else 0 for d in datasets)

    def _check(self) -> None:
        shapes = {key: dataset.shape for key, (dataset, _) in self._columns.items()}
        if any(len(shape) != 1 for shape in shapes.values()) or len(set(shapes.values())) > 1:
            found = ", ".join(f"{key} {shape}" for key, shape in shapes.items())
            raise EventsError(
                f"{self.path}: t, x, y and p must be four columns of one length, found {found}. "
                "The file may have been cut short while it was written; export it again."
            )
        for dataset, _ in self._columns.values():
            if dataset.is_virtual or dataset.external:
                raise _leads_outside(self.path, dataset.name)
        check_numbers(self.path, {k: d.dtype[f] if f else d.dtype for k, (d, f) in self._columns.items()})


def _load_filters() -> None:
    # Importing it registers the compression filters; without it, plain, gzip and lzf files still read.
    try:
        import hdf5plugin  # noqa: F401  (imported for what it registers)
    except ImportError:
        return


def _missing_filter(dataset: Any) -> str | None:
    import h5py

    plist = dataset.id.get_create_plist()
    for i in range(plist.get_nfilters()):
        code, _, _, name = plist.get_filter(i)
        if not h5py.h5z.filter_avail(code):
            return f"filter {code} ({name.decode(errors='replace') or 'unnamed'})"
    return None


def _find_columns(file: Any, path: Path, mapping: Mapping[str, str] | None) -> dict[str, _Column]:
    """Four columns of one group or compound dataset; else the only ones of their names in the whole file."""
    fixed = _mapped_datasets(file, path, mapping)
    names = {key: name for key, name in (mapping or {}).items() if key not in fixed}
    if len(fixed) == len(NAMES):
        return fixed
    places = _places(file)
    candidates: dict[str, dict[str, _Column]] = {}
    found: dict[str, dict[str, _Column]] = {key: {} for key in NAMES}
    for place, members in places.items():
        matches = match_names(list(members), names)
        choice = {key: fixed.get(key) or (members[m[0]] if m else None) for key, m in matches.items()}
        for key, matching in matches.items():
            found[key].update({f"{place}:{name}": members[name] for name in matching})
            if key not in fixed and len(matching) > 1:
                _refuse_ambiguous(path, [f"{place}/{name}".replace("//", "/") for name in matching])
        complete = {key: column for key, column in choice.items() if column is not None}
        if len(complete) == len(NAMES):
            candidates[place] = complete
    if not candidates and all(key in fixed or len(found[key]) == 1 for key in NAMES):
        return {key: fixed.get(key) or next(iter(found[key].values())) for key in NAMES}
    if len(candidates) > 1:
        _refuse_ambiguous(path, list(candidates))
    if not candidates:
        holds = [f"{place}/{name}".replace("//", "/") for place, members in places.items() for name in members]
        raise EventsError(
            f"{path}: no columns t, x, y, p (or names such as timestamp, polarity) among {listing(holds)}; {MAP_THEM}."
        )
    return next(iter(candidates.values()))


def _refuse_ambiguous(path: Path, candidates: list[str]) -> None:
    raise EventsError(f"{path}: events could be read from each of {listing(candidates)}; {MAP_THEM}.")


def _places(file: Any) -> dict[str, dict[str, _Column]]:
    """Each group with its datasets, and each compound dataset with its fields. Links are not followed."""
    import h5py

    places: dict[str, dict[str, _Column]] = {}

    def visit(name: str, item: Any) -> None:
        if not isinstance(item, h5py.Dataset):
            return
        group, _, leaf = f"/{name}".rpartition("/")
        if item.dtype.names:
            places[f"/{name}"] = {field: (item, field) for field in item.dtype.names}
        else:
            places.setdefault(group or "/", {})[leaf] = (item, None)

    file.visititems(visit)
    return places


def _mapped_datasets(file: Any, path: Path, mapping: Mapping[str, str] | None) -> dict[str, _Column]:
    """Find mapped columns that are datasets by path; the others are names or fields, looked for later."""
    import h5py

    fixed: dict[str, _Column] = {}
    for key, name in (mapping or {}).items():
        _refuse_outside(file, name, path)
        item = file.get(name)
        if isinstance(item, h5py.Dataset) and not item.dtype.names:
            fixed[key] = (item, None)
        elif item is None and "/" in name:
            raise EventsError(
                f"{path}: events.columns says {key} = {name!r}, which is not in the file. It holds "
                f"{listing(p.rstrip('/') + '/' + n for p, members in _places(file).items() for n in members)}."
            )
    return fixed


def _refuse_outside(file: Any, name: str, path: Path, depth: int = 0) -> None:
    """Walk a path link by link, so that no other file is opened on the way."""
    import h5py

    where = "/"
    for part in name.strip("/").split("/"):
        if not isinstance(file.get(where), h5py.Group):
            return
        link = file[where].get(part, getlink=True)
        if isinstance(link, h5py.ExternalLink) or depth > 16:
            raise _leads_outside(path, name)
        if isinstance(link, h5py.SoftLink):
            target = link.path if link.path.startswith("/") else f"{where}/{link.path}"
            _refuse_outside(file, target, path, depth + 1)
        where = f"{where.rstrip('/')}/{part}"


def _leads_outside(path: Path, name: str) -> EventsError:
    return EventsError(
        f"{path}: {name} leads to another file. Events are read from one file only; copy the data into it."
    )


def _damaged(path: Path, error: BaseException) -> EventsError:
    return EventsError(
        f"{path} cannot be read as HDF5: {error}. It may be damaged, cut short or still being written; "
        "copy it again or export it anew."
    )
