"""One set of events, written into every container that is read."""

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from enhance.recording import Events

SIZE = (64, 48)


def _hdf5(path, events, **options):
    import h5py

    with h5py.File(path, "w") as file:
        for name, column in (("ts", events.t_us), ("x", events.x), ("y", events.y), ("pol", events.polarity)):
            file.create_dataset(f"cam/{name}", data=column, maxshape=(None,), **options)


def _hdf5_compound(path, events):
    import h5py

    with h5py.File(path, "w") as file:
        file["recorded/events"] = _structured(events)


def _structured(events):
    fields = [("x", np.uint16), ("y", np.uint16), ("timestamp", np.int64), ("polarity", bool)]
    table = np.empty(len(events), dtype=fields)
    table["x"], table["y"], table["timestamp"], table["polarity"] = events.x, events.y, events.t_us, events.polarity > 0
    return table


def _hdf5_blosc(path, events):
    import hdf5plugin

    _hdf5(path, events, chunks=(512,), **hdf5plugin.Blosc(cname="lz4"))


def _table(events):
    return np.column_stack([events.t_us, events.x, events.y, events.polarity])


def _text(path, events, delimiter, header="", comments=""):
    np.savetxt(path, _table(events), fmt="%d", delimiter=delimiter, header=header, comments=comments)


def _reordered(path, events):
    columns = np.column_stack([events.polarity, events.y, events.x, events.t_us])
    np.savetxt(path, columns, fmt="%d", delimiter=";", header="polarity;y;x;time", comments="")


def _parquet(path, events):
    import pyarrow
    import pyarrow.parquet

    names = {"timestamp": events.t_us, "x": events.x, "y": events.y, "polarity": events.polarity > 0}
    pyarrow.parquet.write_table(pyarrow.table(names), path, row_group_size=700)


WRITERS: dict[str, tuple[str, Callable]] = {
    "hdf5 plain": (".h5", _hdf5),
    "hdf5 gzip": (".hdf5", lambda p, e: _hdf5(p, e, chunks=(777,), compression="gzip", shuffle=True)),
    "hdf5 blosc": (".h5", _hdf5_blosc),
    "hdf5 compound": (".h5", _hdf5_compound),
    "npz four arrays": (".npz", lambda p, e: np.savez_compressed(p, t=e.t_us, x=e.x, y=e.y, p=e.polarity)),
    "npz structured": (".npz", lambda p, e: np.savez(p, events=_structured(e))),
    "npz table": (".npz", lambda p, e: np.savez(p, events=_table(e).astype(np.float64))),
    "csv with header": (".csv", lambda p, e: _text(p, e, ",", "t,x,y,p")),
    "csv commented header": (".csv", lambda p, e: _text(p, e, ",", "t,x,y,p", "# ")),
    "csv other order": (".csv", _reordered),
    "txt blanks": (".txt", lambda p, e: _text(p, e, " ")),
    "txt tabs": (".txt", lambda p, e: _text(p, e, "\t")),
    "parquet": (".parquet", _parquet),
}


def _write_into(name: str, folder: Path) -> Callable[[Events], Path]:
    suffix, writer = WRITERS[name]

    def write(events: Events) -> Path:
        path = folder / f"events{suffix}"
        writer(path, events)
        return path

    return write


def _id(name: str) -> str:
    return name.replace(" ", "-")


@pytest.fixture(params=WRITERS, ids=_id)
def container(request, tmp_path) -> Callable[[Events], Path]:
    """Write events into one container, and return its path."""
    return _write_into(request.param, tmp_path)


@pytest.fixture(params=[name for name in WRITERS if not name.startswith(("csv", "txt"))], ids=_id)
def binary_container(request, tmp_path) -> Callable[[Events], Path]:
    """Write events into one container that knows its own length, and return its path."""
    return _write_into(request.param, tmp_path)


@pytest.fixture
def some_events() -> Events:
    """3000 events of the Unix epoch's size, with many ties: more than two steps of the index."""
    rng = np.random.default_rng(7)
    count = 3000
    t_us = 1_589_163_147_000_000 + np.sort(rng.integers(0, 1500, count))
    x, y = rng.integers(0, SIZE[0], count), rng.integers(0, SIZE[1], count)
    polarity = rng.choice([-1, 1], count)
    return Events(t_us, x.astype(np.uint16), y.astype(np.uint16), polarity.astype(np.int8))
