"""What an event file can have wrong, and what the message says of it."""

import sys

import numpy as np
import pytest

from enhance.errors import EventsError, JobError, PackageError
from enhance.read import open_events
from enhance.settings import EventsSettings

SIZE = (64, 48)
GOOD = {"t": np.arange(2000), "x": np.arange(2000) % 64, "y": np.arange(2000) % 48, "p": np.arange(2000) % 2}


def npz(path, **changed):
    np.savez(path, **{key: values for key, values in (GOOD | changed).items() if values is not None})
    return path


def refused(path, match, error=EventsError, **settings):
    with pytest.raises(error, match=match):
        open_events(EventsSettings(path, **settings), SIZE)


@pytest.mark.parametrize("name", ["e.raw", "e.dat", "e.bin", "e.bag", "e.unknown", "events"])
def test_a_cameras_own_dump_names_what_is_read_and_how_to_convert(tmp_path, name):
    (tmp_path / name).write_bytes(b"\0" * 100)
    refused(tmp_path / name, r"HDF5 \(.h5, .hdf5\), NPZ.*own dump format.*export the columns t, x, y, p to HDF5 or CSV")


def test_a_file_that_is_not_there(tmp_path):
    refused(tmp_path / "e.h5", "is not there, or not a file. Check events.source")


def test_an_unknown_unit_and_an_impossible_size(tmp_path):
    path = npz(tmp_path / "e.npz")
    refused(path, 'events.time_unit is "min"; expected s, ms, us or ns', JobError, time_unit="min")
    refused(path, "events.size is 0 x 5; expected width and height", JobError, size=(0, 5))


def test_a_column_map_with_another_key(tmp_path):
    refused(npz(tmp_path / "e.npz"), "events.columns names time; its keys are", JobError, columns={"time": "t"})


def test_events_of_another_sensor_size_say_how_far_they_reach(tmp_path):
    path = npz(tmp_path / "e.npz", x=np.arange(2000) % 346)
    refused(path, r"another sensor size: .* of 2000 lie outside 64 x 48; x goes up to 345, y to 47.* Set events.size")


def test_swapped_coordinates_are_recognised(tmp_path):
    path = npz(tmp_path / "e.npz", x=GOOD["y"], y=GOOD["x"])
    refused(path, "x and y look swapped: see events.columns")


def test_negative_coordinates_are_named(tmp_path):
    refused(npz(tmp_path / "e.npz", x=-GOOD["x"]), "and down to -63, 0")


def test_fractions_of_a_pixel(tmp_path):
    refused(npz(tmp_path / "e.npz", x=GOOD["x"] + 0.5), "column x holds fractions of a pixel.*export the raw")


def test_times_that_are_all_missing(tmp_path):
    refused(npz(tmp_path / "e.npz", t=np.full(2000, np.nan)), "none of its 2000 events has a time")


@pytest.mark.parametrize("times", [np.arange(2000) * 10**17, np.linspace(0, 1e20, 2000)])
def test_times_beyond_64_bits_of_microseconds(tmp_path, times):
    refused(npz(tmp_path / "e.npz", t=times), 'too large to be one. Check events.time_unit .now "s"', time_unit="s")


@pytest.mark.parametrize(
    ("polarity", "match"),
    [
        (np.r_[0, -1, np.ones(1998)], "polarities -1, 0 and .1 in one file"),
        (np.r_[0, 1, 7, np.ones(1997)], r"a polarity of 7.0 at event 2 \(counted from 0\).*is column p the right one"),
        (np.r_[np.nan, np.ones(1999)], "column p holds NaN"),
    ],
)
def test_polarities_that_are_none(tmp_path, polarity, match):
    refused(npz(tmp_path / "e.npz", p=polarity), match)


def test_a_missing_and_an_ambiguous_column(tmp_path):
    refused(npz(tmp_path / "a.npz", p=None), r"no column for p among t, x, y. .*events.columns = \{ t =")
    refused(npz(tmp_path / "b.npz", ts=GOOD["t"]), r"t, ts could each be t; say which is which: events.columns")


def test_columns_of_different_lengths(tmp_path):
    refused(npz(tmp_path / "e.npz", x=np.arange(5)), r"four arrays of one length, found t \(2000,\), x \(5,\)")


def test_pickled_objects_are_never_loaded(tmp_path):
    refused(npz(tmp_path / "e.npz", t=np.array([{}] * 2000)), "column t is of type object, expected whole or decimal")


def test_a_table_stored_by_columns_or_with_a_map(tmp_path):
    table = np.column_stack(list(GOOD.values()))
    np.savez(tmp_path / "a.npz", events=np.asfortranarray(table))
    refused(tmp_path / "a.npz", "stored column after column.*Save t, x, y and p as four arrays")
    np.savez(tmp_path / "b.npz", events=table)
    refused(tmp_path / "b.npz", "has no column names.*Leave out events.columns", columns={"t": "time"})
    np.savez(tmp_path / "c.npz", events=np.zeros((3, 2), dtype=[("t", int), ("x", int), ("y", int), ("p", int)]))
    refused(tmp_path / "c.npz", r"has shape \(3, 2\); expected one row an event")


@pytest.mark.parametrize("share", [0.02, 0.5, 0.95])
def test_a_cut_file_names_itself(binary_container, some_events, share):
    path = binary_container(some_events)
    data = path.read_bytes()
    path.write_bytes(data[: int(len(data) * share)])
    refused(path, f"{path.name} cannot be read as .*copy it again")


def test_a_damaged_middle_of_an_archive_is_noticed(tmp_path):
    path = npz(tmp_path / "e.npz")
    data = bytearray(path.read_bytes())
    data[5000:5010] = b"\xff" * 10
    path.write_bytes(data)
    refused(path, "cannot be read as NPZ: Bad CRC-32")


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("t,x,y,p\n1,2,3,1\n2,oops,3,1\n", r"e.csv, line 3: '2,oops,3,1' is not an event. Expected .* with commas"),
        ("1 2 3 1\n2 3 1\n", r"line 2: '2 3 1' is not an event"),
        ("1 2 3\n", "line 1: 3 columns and no header. A file without header must have exactly t, x, y, p"),
        ("# only a remark\n", "holds no events"),
        ("time,x,y,sign\n1,2,3,1\n", "no column for p among time, x, y, sign"),
        ("time;row;row;p\n1;2;3;1\n", "no column for x among"),
    ],
)
def test_text_that_holds_no_events(tmp_path, text, match):
    path = tmp_path / "e.csv"
    path.write_text(text)
    refused(path, match)


def test_names_without_a_header_and_bytes_without_text(tmp_path):
    path = tmp_path / "e.csv"
    path.write_text("1 2 3 1\n")
    refused(path, "has no header, so events.columns has no names to map", columns={"t": "time"})
    path.write_bytes(b"\xff\xfe\x80" * 100)
    refused(path, "is not a text file")
    path.write_bytes(b"1 2 3 1\n" * 2000 + b"\xff\xfe\x80" * 100)
    refused(path, "is not a text file")


def hdf5(path, fill):
    import h5py

    with h5py.File(path, "w") as file:
        fill(file)
    return path


def good(group):
    for key, values in GOOD.items():
        group[key] = values


def test_two_sensors_in_one_file_must_be_told_apart(tmp_path):
    path = hdf5(tmp_path / "e.h5", lambda f: (good(f.create_group("left")), good(f.create_group("right"))))
    refused(path, "could be read from each of /left, /right; say which is which")
    mapping = {key: f"/right/{key}" for key in "txyp"}
    assert open_events(EventsSettings(path, columns=mapping), SIZE).count == 2000


def test_hdf5_without_the_columns_lists_what_it_holds(tmp_path):
    path = hdf5(tmp_path / "e.h5", lambda f: f.create_dataset("scan/depth", data=np.arange(3)))
    refused(path, "no columns t, x, y, p .* among /scan/depth; say which")
    refused(path, "t = '/cam/t', which is not in the file. It holds /scan/depth", columns={"t": "/cam/t"})


def test_hdf5_columns_must_be_numbers_of_one_length(tmp_path):
    def short(file):
        good(file)
        del file["x"]
        file["x"] = np.arange(5)

    refused(hdf5(tmp_path / "a.h5", short), r"four columns of one length, found .*x \(5,\)")

    def text(file):
        good(file)
        del file["t"]
        file["t"] = ["a"] * 2000

    refused(hdf5(tmp_path / "b.h5", text), "column t is of type object")


def test_hdf5_that_leads_to_another_file_is_refused(tmp_path):
    import h5py

    hdf5(tmp_path / "other.h5", good)

    def link(file):
        good(file.create_group("own"))
        file["away"] = h5py.ExternalLink("other.h5", "/")
        file["detour"] = h5py.SoftLink("/away/t")

    path = hdf5(tmp_path / "e.h5", link)
    assert open_events(EventsSettings(path), SIZE).count == 2000
    rest = {"x": "/own/x", "y": "/own/y", "p": "/own/p"}
    refused(path, "/away/t leads to another file", columns={"t": "/away/t", **rest})
    refused(path, "/away/t leads to another file", columns={"t": "/detour", **rest})

    def virtual(file):
        good(file)
        del file["t"]
        layout = h5py.VirtualLayout(shape=(2000,), dtype="i8")
        layout[:] = h5py.VirtualSource("other.h5", "t", shape=(2000,))
        file.create_virtual_dataset("t", layout)

    refused(hdf5(tmp_path / "v.h5", virtual), "/t leads to another file")


def test_a_missing_filter_says_how_to_install_it(tmp_path, monkeypatch):
    import h5py

    path = hdf5(tmp_path / "e.h5", lambda f: [f.create_dataset(k, data=v, compression="gzip") for k, v in GOOD.items()])
    data_read = h5py.Dataset.__getitem__

    def without_filter(self, key):
        if isinstance(key, slice):
            raise OSError("Can't synchronously read data (required filter is not registered)")
        return data_read(self, key)

    monkeypatch.setattr(h5py.Dataset, "__getitem__", without_filter)
    monkeypatch.setattr(h5py.h5z, "filter_avail", lambda code: False)
    refused(path, r'compressed with filter 1 \(deflate\).*pip install "enhance\[hdf5\]"', PackageError)


def test_parquet_without_its_package_says_how_to_install_it(tmp_path, monkeypatch):
    (tmp_path / "e.parquet").write_bytes(b"PAR1")
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    refused(tmp_path / "e.parquet", r'pip install "enhance\[parquet\]"', PackageError)


def test_parquet_columns_must_be_numbers(tmp_path):
    import pyarrow
    import pyarrow.parquet

    table = pyarrow.table(GOOD | {"p": [["a"]] * 2000})
    pyarrow.parquet.write_table(table, tmp_path / "e.parquet")
    refused(tmp_path / "e.parquet", "column p is of type object")


def test_a_cover_shorter_than_the_events(tmp_path):
    refused(
        npz(tmp_path / "e.npz"), r"run from 0 us to 1999 us, outside events.cover \(0 us to 500 us\)", cover_us=(0, 500)
    )


def test_a_full_disk_is_told_before_and_while_copying(tmp_path, monkeypatch):
    import enhance.read.event_scratch as scratch

    path = npz(tmp_path / "e.npz")
    with monkeypatch.context() as patch:
        patch.setattr(scratch.shutil, "disk_usage", lambda folder: type("Usage", (), {"free": 10}))
        refused(path, "needs about 26,000 bytes there and 10 are free.*TMPDIR")

    def full(file, data):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(scratch.os, "write", full)
    refused(path, r"could not be written \(No space left on device\). Free some space")


def test_a_damaged_chunk_of_hdf5_is_noticed(tmp_path):
    path = hdf5(tmp_path / "e.h5", lambda f: [f.create_dataset(k, data=v, compression="gzip") for k, v in GOOD.items()])
    data = bytearray(path.read_bytes())
    import h5py

    with h5py.File(path) as file:
        chunk = file["t"].id.get_chunk_info(0)
    middle = chunk.byte_offset + chunk.size // 2
    data[middle : middle + 8] = b"\xff" * 8
    path.write_bytes(data)
    refused(path, "e.h5 cannot be read as HDF5: .*copy it again or export it anew")
