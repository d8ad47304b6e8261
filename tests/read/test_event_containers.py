"""One contract for every container: the same events come back, for every window."""

from pathlib import Path

import numpy as np
import pytest

from enhance.read import open_events
from enhance.recording import Events
from enhance.settings import EventsSettings

SIZE = (64, 48)
COLUMNS = ("t_us", "x", "y", "polarity")


def same(one: Events, other: Events) -> bool:
    return all(np.array_equal(getattr(one, c), getattr(other, c)) for c in COLUMNS)


class TestEveryContainer:
    @pytest.fixture
    def source(self, container, some_events):
        source = open_events(EventsSettings(container(some_events)), SIZE)
        yield source
        source.close()

    def test_gives_every_event_back_with_its_type(self, source, some_events):
        events = source.between(source.first_us, source.last_us + 1)
        assert same(events, some_events)
        assert [getattr(events, c).dtype for c in COLUMNS] == [np.int64, np.uint16, np.uint16, np.int8]

    def test_windows_are_half_open_and_keep_ties_together(self, source, some_events):
        t = some_events.t_us
        # every border that ties with an event, at and beside the index's entries
        for start, end in [(t[0], t[1024]), (t[1024], t[2048]), (t[1023], t[1024] + 1), (t[5], t[5]), (t[9], t[9] + 1)]:
            inside = (t >= start) & (t < end)
            assert same(source.between(int(start), int(end)), some_events.keep(inside))

    def test_windows_that_meet_add_up_to_the_whole(self, source, some_events):
        borders = np.linspace(source.first_us, source.last_us + 1, 8).astype(int)
        parts = [source.between(int(a), int(b)) for a, b in zip(borders[:-1], borders[1:], strict=True)]
        assert same(Events(*(np.concatenate([getattr(p, c) for p in parts]) for c in COLUMNS)), some_events)

    def test_is_empty_outside_and_for_a_backward_window(self, source):
        assert len(source.between(source.last_us + 1, source.last_us + 10**12)) == 0
        assert len(source.between(-(10**15), source.first_us)) == 0
        assert len(source.between(source.last_us, source.first_us)) == 0

    def test_knows_its_extent(self, source, some_events):
        assert (source.count, source.size) == (len(some_events), SIZE)
        assert (source.first_us, source.last_us) == (some_events.t_us[0], some_events.t_us[-1])
        assert (source.cover_start_us, source.cover_end_us) == (some_events.t_us[0], some_events.t_us[-1] + 1)
        assert list(source.notes) == []

    def test_counts_about_what_a_window_holds(self, source, some_events):
        assert source.count_between(source.first_us, source.last_us + 1) == len(some_events)
        start = source.first_us + 200
        held = len(source.between(start, start + 900))
        assert source.count_between(start, start + 900) == pytest.approx(held, rel=0.1)
        assert source.count_between(start, start) == 0

    def test_of_no_events_is_refused(self, container):
        from enhance.errors import EventsError

        path = container(Events.none())
        with pytest.raises(EventsError, match="holds no events"):
            open_events(EventsSettings(path), SIZE)


@pytest.mark.parametrize(
    ("unit", "scale", "kind"),
    [
        ("s", 1e-6, np.float64),
        ("ms", 1e-3, np.float64),
        ("us", 1, np.int64),
        ("us", 1, np.uint64),
        ("us", 1, np.float64),
        ("ns", 1000, np.int64),
    ],
)
def test_every_unit_and_type_of_time_gives_the_same_microseconds(tmp_path, some_events, unit, scale, kind):
    stored = (some_events.t_us * scale).astype(kind)
    path = tmp_path / "e.npz"
    np.savez(path, t=stored, x=some_events.x, y=some_events.y, p=some_events.polarity)
    source = open_events(EventsSettings(path, time_unit=unit), SIZE)
    assert np.array_equal(source.between(source.first_us, source.last_us + 1).t_us, some_events.t_us)


def test_nanoseconds_of_the_epoch_in_text_are_floored_exactly(tmp_path):
    # as floats these two would be 1 589 163 147 000 001 024 and ...000 000 896: off by a microsecond
    path = tmp_path / "e.csv"
    path.write_text("1589163147000000999,1,2,1\n1589163147000001000,1,2,0\n")
    source = open_events(EventsSettings(path, time_unit="ns"), SIZE)
    assert (source.first_us, source.last_us) == (1_589_163_147_000_000, 1_589_163_147_000_001)


@pytest.mark.parametrize("stored", [[0, 1, 1, 0], [-1, 1, 1, -1], [False, True, True, False], [0.0, 1.0, 1.0, 0.0]])
def test_every_way_to_store_polarity_reads_alike(tmp_path, stored):
    path = tmp_path / "e.npz"
    np.savez(path, t=np.arange(4), x=np.arange(4), y=np.arange(4), p=np.array(stored))
    source = open_events(EventsSettings(path), SIZE)
    assert source.between(0, 4).polarity.tolist() == [-1, 1, 1, -1]


@pytest.mark.parametrize(("stored", "sign", "word"), [(1, 1, "positive"), (0, -1, "negative"), (-1, -1, "negative")])
def test_one_polarity_only_is_read_with_a_note(tmp_path, stored, sign, word):
    path = tmp_path / "e.npz"
    np.savez(path, t=np.arange(4), x=np.arange(4), y=np.arange(4), p=np.full(4, stored))
    source = open_events(EventsSettings(path), SIZE)
    assert source.between(0, 4).polarity.tolist() == [sign] * 4
    assert f"all 4 events are {word}" in source.notes[0]


def test_text_may_hold_comments_blank_lines_and_words_for_polarity(tmp_path):
    path = tmp_path / "e.txt"
    path.write_text("# a remark\n\nt x y p\n1 2 3 True\n# another\n\n4.5 5 6 False\n")
    events = open_events(EventsSettings(path), SIZE).between(0, 10)
    assert (events.t_us.tolist(), events.polarity.tolist()) == ([1, 4], [1, -1])


def test_a_long_text_is_read_in_blocks_without_a_seam(tmp_path, monkeypatch, some_events):
    import enhance.read.event_text as event_text

    monkeypatch.setattr(event_text, "_BLOCK", 100)
    path = tmp_path / "e.csv"
    table = np.column_stack([some_events.t_us, some_events.x, some_events.y, some_events.polarity])
    np.savetxt(path, table, fmt="%d", delimiter=",", header="t,x,y,p", comments="")
    source = open_events(EventsSettings(path), SIZE)
    assert same(source.between(source.first_us, source.last_us + 1), some_events)


def test_columns_are_mapped_by_dataset_path_name_and_field(tmp_path, some_events):
    import h5py

    path = tmp_path / "e.h5"
    with h5py.File(path, "w") as file:
        file["left/when"], file["left/u"] = some_events.t_us, some_events.x
        file["left/v"], file["left/sign"] = some_events.y, some_events.polarity
        file["other/t"] = some_events.t_us
    mapping = {"t": "/left/when", "x": "left/u", "y": "v", "p": "sign"}
    source = open_events(EventsSettings(path, columns=mapping), SIZE)
    assert same(source.between(source.first_us, source.last_us + 1), some_events)


def test_columns_are_mapped_by_field_of_a_compound_dataset(tmp_path, some_events):
    import h5py

    table = np.empty(len(some_events), dtype=[("when", "i8"), ("x", "u2"), ("y", "u2"), ("on", "?")])
    table["when"], table["x"], table["y"] = some_events.t_us, some_events.x, some_events.y
    table["on"] = some_events.polarity > 0
    path = tmp_path / "e.h5"
    with h5py.File(path, "w") as file:
        file["cam/list"] = table
    source = open_events(EventsSettings(path, columns={"t": "when", "p": "on"}), SIZE)
    assert same(source.between(source.first_us, source.last_us + 1), some_events)


def test_columns_that_stand_apart_are_found_if_each_is_the_only_one(tmp_path, some_events):
    import h5py

    path = tmp_path / "e.h5"
    with h5py.File(path, "w") as file:
        file["clock/ts"], file["place/x"] = some_events.t_us, some_events.x
        file["place/y"], file["sign/pol"] = some_events.y, some_events.polarity
    source = open_events(EventsSettings(path), SIZE)
    assert same(source.between(source.first_us, source.last_us + 1), some_events)


def test_the_sensor_may_differ_in_size_from_the_frames(tmp_path):
    path = tmp_path / "e.npz"
    np.savez(path, t=[0, 1], x=[0, 199], y=[0, 99], p=[1, 0])
    assert open_events(EventsSettings(path, size=(200, 100)), SIZE).size == (200, 100)


def test_cover_may_be_longer_than_the_events(tmp_path):
    path = tmp_path / "e.npz"
    np.savez(path, t=[10, 20], x=[0, 1], y=[0, 1], p=[1, 0])
    source = open_events(EventsSettings(path, cover_us=(0, 100)), SIZE)
    assert (source.cover_start_us, source.cover_end_us, source.first_us) == (0, 100, 10)


def test_nothing_is_left_behind_even_if_the_process_dies(tmp_path, monkeypatch, container, some_events):
    import tempfile

    scratch = tmp_path / "scratch"
    scratch.mkdir()
    monkeypatch.setattr(tempfile, "tempdir", str(scratch))
    source = open_events(EventsSettings(container(some_events)), SIZE)
    # the copy has no name: there is nothing to find, or to forget, from the start
    assert list(scratch.iterdir()) == []
    assert source.count == len(source.between(source.first_us, source.last_us + 1))
    source.close()


def test_the_real_recording_reads_whole(recordings: Path):
    # counts from the note beside the recording
    source = open_events(EventsSettings(recordings / "street" / "events.npz"), (346, 260))
    events = source.between(source.first_us, source.last_us + 1)
    assert len(events) == source.count == 78_830
    stored = np.load(recordings / "street" / "events.npz")
    assert np.array_equal(events.t_us, stored["t"])
    assert np.array_equal(events.x, stored["x"])
    assert np.array_equal(events.polarity, stored["p"])
    source.close()
