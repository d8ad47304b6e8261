"""The times table: what it may hold, and what each mistake in it is answered."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from enhance.clock import middle_us
from enhance.errors import FramesError, JobError
from enhance.read.frame_times import around, from_stamps, read_table
from enhance.settings import FramesSettings

NAMES = ["a.png", "b.png", "c.png"]


def read(tmp_path, text, **settings):
    path = tmp_path / "frames.csv"
    path.write_text(text)
    return read_table(FramesSettings(tmp_path, times=path, **settings), NAMES)


@pytest.mark.parametrize(
    "text",
    [
        "frame,start_us,end_us\na.png,0,5\nb.png,10,15\nc.png,20,25\n",
        "frame,start_us,end_us\n0,0,5\n1,10,15\n2,20,25\n",
        "frame,start_us,end_us,gain\nc.png,20,25,1\n000,0,5,1.0\n1,10,15,1\n\n",
        "\ufeffend_us, start_us ,frame,lens\r\n5,0,0,x\r\n15,10,1,x\r\n25,20,2,x\r\n",
    ],
)
def test_every_way_to_write_the_table_reads_alike(tmp_path, text):
    times = read(tmp_path, text)
    assert (times.start_us.tolist(), times.end_us.tolist()) == ([0, 10, 20], [5, 15, 25])
    assert times.start_us.dtype == np.int64
    assert times.gain.tolist() == [1, 1, 1]


def test_unused_columns_and_an_unused_exposure_are_noted(tmp_path):
    text = "frame,start_us,end_us,lens\n0,0,5,x\n1,10,15,x\n2,20,25,x\n"
    notes = read(tmp_path, text, exposure_us=7).notes
    assert "columns lens are not used" in notes[0]
    assert "frames.exposure is not used" in notes[1]


def test_times_of_the_epoch_in_microseconds_stay_exact(tmp_path):
    start = 1_589_163_147_364_965
    text = "frame,start_us,end_us\n" + "".join(
        f"{i},{start + 40_000 * i},{start + 40_000 * i + 500}\n" for i in range(3)
    )
    assert read(tmp_path, text).start_us.tolist() == [start, start + 40_000, start + 80_000]


@pytest.mark.parametrize(("marks", "starts"), [("start", [0, 10, 20]), ("middle", [-2, 8, 18]), ("end", [-5, 5, 15])])
def test_one_time_a_frame_marks_what_the_job_says(tmp_path, marks, starts):
    times = read(tmp_path, "frame,time_us\n0,0\n1,10\n2,20\n", exposure_us=5, time_marks=marks)
    assert times.start_us.tolist() == starts
    assert (times.end_us - times.start_us).tolist() == [5, 5, 5]


@given(time_us=st.integers(-(10**16), 10**16), exposure_us=st.integers(0, 10**6))
def test_a_time_that_marks_the_middle_is_the_frames_time_exactly(time_us, exposure_us):
    settings = FramesSettings("f", exposure_us=exposure_us, time_marks="middle")
    start, end = around(np.array([time_us]), settings)
    assert middle_us(start[0], end[0]) == time_us


HEAD = "frame,start_us,end_us\n"


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("", r"row 1: columns \(none\). Expected the header frame,start_us,end_us"),
        ("frame,start_us\n", "row 1: columns frame,start_us. Expected the header"),
        ("frame,time_us,start_us,end_us\n", "Expected the header frame,start_us,end_us .* or frame,time_us"),
        (HEAD + "0,0,5\n1,10,15\n", "2 rows for 3 frames; no row for frame c.png. Add the rows"),
        (HEAD + "2,0,5\n", "1 rows for 3 frames; no row for frame a.png and 1 more"),
        (
            HEAD + "0,0,5\n1,10,15\n2,20,25\n3,30,35\n",
            "row 5: frame '3' is neither a file name nor an index from 0 to 2",
        ),
        (HEAD + "0,0,5\na.png,10,15\n", "row 3: frame 'a.png' stands in row 2 already"),
        (HEAD + "0,0,5\n1,ten,15\n2,20,25\n", "row 3: start_us is 'ten', expected whole microseconds"),
        (HEAD + "0,0,5\n1,10.5,15\n2,20,25\n", "row 3: start_us is '10.5', expected whole microseconds"),
        (HEAD + "0,0,5\n1,10,nan\n2,20,25\n", "row 3: end_us is 'nan', expected whole microseconds"),
        (HEAD + f"0,0,5\n1,{2**62},{2**62}\n2,20,25\n", "row 3: start_us is 4611686018427387904, too large"),
        (HEAD + "0,0,5\n1,10\n", r"row 3: 2 cells, expected 3 \(frame,start_us,end_us\)"),
        (
            HEAD + "0,0,5\n1,813000,812040\n2,900000,900001\n",
            "frames.csv, row 3: end_us 812 040 is before start_us 813 000. Exposure must not be negative; mend the row",
        ),
        (HEAD + "0,0,5\n1,20,25\n2,10,15\n", r"row 4: start 10 us does not come after 20 us \(row 3\)"),
        (HEAD + "0,0,5\n1,10,10\n2,10,15\n", r"row 4: start 10 us does not come after 10 us \(row 3\)"),
        (
            HEAD + "0,0,5\n1,10,21\n2,20,25\n",
            r"row 3: the exposure ends at 21 us, after the next one .* 20 us \(row 4\)",
        ),
        ("frame,start_us,end_us,gain\n0,0,5,1\n1,10,15,\n2,20,25,1\n", "row 3: gain is '', expected a number"),
    ],
)
def test_each_mistake_is_named_with_its_row_and_values(tmp_path, text, match):
    with pytest.raises(FramesError, match=match):
        read(tmp_path, text)


def test_a_changing_gain_is_read(tmp_path):
    text = "frame,start_us,end_us,gain\n0,0,5,1\n1,10,15,1.4125\n2,20,25,2\n"
    assert read(tmp_path, text).gain.tolist() == [1, 1.4125, 2]


@pytest.mark.parametrize("gain", ["0", "-2", "nan", "inf"])
def test_a_gain_that_no_camera_has_is_an_error(tmp_path, gain):
    with pytest.raises(FramesError, match=rf"row 3: gain is {gain}; expected a factor above 0 \(6 dB are a factor"):
        read(tmp_path, f"frame,start_us,end_us,gain\n0,0,5,1\n1,10,15,{gain}\n2,20,25,1\n")


def test_a_table_that_is_no_text_or_not_there(tmp_path):
    (tmp_path / "t.csv").write_bytes(b"frame\xff\xfe\n")
    for name in ("t.csv", "none.csv"):
        with pytest.raises(FramesError, match=f"{name} cannot be read as a table of times.*Check frames.times"):
            read_table(FramesSettings(tmp_path, times=tmp_path / name), NAMES)


@pytest.mark.parametrize(
    ("settings", "match"),
    [
        ({}, r'frames.exposure is missing.*for example exposure = "20 ms"'),
        ({"exposure_us": -1}, "frames.exposure is -1 us; it must not be negative"),
        ({"exposure_us": 1, "time_marks": "begin"}, 'frames.time_marks is "begin"; expected start, middle or end'),
    ],
)
def test_settings_for_one_time_a_frame(tmp_path, settings, match):
    with pytest.raises(JobError, match=match):
        read(tmp_path, "frame,time_us\n0,0\n1,10\n2,20\n", **settings)


def test_an_exposure_longer_than_the_frame_interval_of_a_video_is_refused():
    settings = FramesSettings("v.mp4", exposure_us=40_001)
    with pytest.raises(FramesError, match=r"v.mp4, frame 0: the exposure ends at 40 001 us.*check frames.exposure"):
        from_stamps(settings, np.array([0, 40_000, 80_000]))
