"""Corrections: disorder, bad rows, and windows against a mask over the whole array."""

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from enhance.errors import EventsError
from enhance.read import open_events
from enhance.read.event_index import STEP, TimeIndex, in_order
from enhance.recording import Events
from enhance.settings import EventsSettings

SIZE = (64, 48)


def numbered(t_us) -> Events:
    """Events whose x, y tell their place in the file."""
    t_us = np.asarray(t_us, dtype=np.int64)
    order = np.arange(len(t_us))
    polarity = np.where(order % 2, 1, -1)
    return Events(t_us, (order % 251).astype(np.uint16), (order // 251).astype(np.uint16), polarity.astype(np.int8))


def save(path, events):
    if path.suffix == ".npz":
        np.savez(path, t=events.t_us, x=events.x, y=events.y, p=events.polarity)
    else:
        import h5py

        with h5py.File(path, "w") as file:
            file["t"], file["x"], file["y"], file["p"] = events.t_us, events.x, events.y, events.polarity
    return path


@given(
    times=st.lists(st.integers(0, 60), min_size=1, max_size=400).map(sorted),
    step=st.sampled_from([1, 3, 64]),
    window=st.tuples(st.integers(-5, 70), st.integers(-5, 70)),
)
def test_a_window_lies_inside_the_rows_that_the_index_names(times, step, window):
    import enhance.read.event_index as event_index

    t = np.array(times, dtype=np.int64)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(event_index, "STEP", step)
        index = TimeIndex("e")
        for first in range(0, len(t), 7):
            index.take(t[first : first + 7])
        first, last = index.rows(*window)
    wanted = np.flatnonzero((t >= window[0]) & (t < window[1]))
    assert 0 <= first <= last <= len(t)
    assert len(wanted) == 0 or (first <= wanted[0] and wanted[-1] < last)
    assert last - first <= len(wanted) + 2 * step


@given(
    steps=st.lists(st.tuples(st.integers(0, 50), st.integers(0, 40)), min_size=1, max_size=300),
    block=st.integers(1, 50),
)
def test_sorting_in_blocks_equals_one_stable_sort(steps, block):
    # times rise by the first number and are delayed by at most the second: never more than 40 us out of order
    late = np.array([delay for _, delay in steps])
    events = numbered(np.cumsum([rise for rise, _ in steps]) - late)
    blocks = [events.keep(slice(i, i + block)) for i in range(0, len(events), block)]
    parts = list(in_order(blocks, late_us=40))
    order = np.argsort(events.t_us, kind="stable")
    assert np.array_equal(np.concatenate([p.t_us for p in parts]), events.t_us[order])
    assert np.array_equal(np.concatenate([p.x for p in parts]), events.x[order])


@pytest.mark.parametrize("suffix", [".npz", ".h5"])
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=15, deadline=None)
@given(seed=st.integers(0, 10**6))
def test_disordered_files_read_as_if_they_had_been_sorted(tmp_path, suffix, seed):
    rng = np.random.default_rng(seed)
    t = np.sort(rng.integers(0, 100_000, 3 * STEP)) - rng.integers(0, 5000, 3 * STEP)
    path = save(tmp_path / f"e{suffix}", numbered(t))
    source = open_events(EventsSettings(path), (256, 256))
    order = np.argsort(t, kind="stable")
    start, end = np.sort(rng.integers(-5000, 100_000, 2))
    events = source.between(int(start), int(end))
    inside = order[(t[order] >= start) & (t[order] < end)]
    assert np.array_equal(events.x + 251 * events.y.astype(int), inside)
    assert source.first_us == t.min()
    source.close()


def test_disorder_is_counted_with_its_size(tmp_path):
    path = save(tmp_path / "e.npz", numbered([10, 30, 20, 5, 40]))
    source = open_events(EventsSettings(path), (256, 256))
    assert source.between(0, 100).t_us.tolist() == [5, 10, 20, 30, 40]
    assert list(source.notes) == ["2 of 5 events came out of order, by at most 25 us; they were sorted"]


@pytest.mark.parametrize("suffix", [".npz", ".h5"])
def test_a_jump_back_is_refused_with_its_row_and_times(tmp_path, suffix):
    t = np.arange(3000) * 100
    t[2500:] -= 200_000
    path = save(tmp_path / f"e{suffix}", numbered(t))
    with pytest.raises(
        EventsError, match=r"jumps back from 249900 us to 50000 us at event 2500 \(counted from 0\).*Split"
    ):
        open_events(EventsSettings(path), (256, 256))


@pytest.mark.parametrize("suffix", [".npz", ".h5"])
def test_a_few_bad_rows_are_dropped_and_counted(tmp_path, suffix):
    events = numbered(np.arange(5000))
    t = events.t_us.astype(np.float64)
    t[[7, 4000]] = np.nan, np.inf
    x = events.x.astype(np.int32)
    x[100], x[200] = -1, 256
    path = save(tmp_path / f"e{suffix}", Events(t, x, events.y, events.polarity))
    source = open_events(EventsSettings(path), (256, 256))
    kept = np.delete(np.arange(5000), [7, 100, 200, 4000])
    assert np.array_equal(source.between(0, 5000).t_us, kept)
    assert source.count == 4996
    assert "2 of 5000 events without a time (NaN) were dropped" in source.notes[0]
    assert "2 of 5000 events outside the sensor's 256 x 256 were dropped" in source.notes[1]
    source.close()


def test_huge_chunks_are_copied_once_instead_of_read_in_place(tmp_path, monkeypatch, some_events):
    import enhance.read.event_hdf5 as event_hdf5

    monkeypatch.setattr(event_hdf5, "_LARGEST_CHUNK_BYTES", 100)
    import h5py

    path = tmp_path / "e.h5"
    with h5py.File(path, "w") as file:
        for name in ("t_us", "x", "y", "polarity"):
            file.create_dataset(name[0], data=getattr(some_events, name), chunks=(3000,), compression="gzip")
    source = open_events(EventsSettings(path), SIZE)
    assert np.array_equal(source.between(0, 2**61).t_us, some_events.t_us)
    source.close()
