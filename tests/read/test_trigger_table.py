"""Tables of trigger pulses: matched with the frames, or refused with the place and the remedy."""

import numpy as np
import pytest

from enhance.errors import FramesError
from enhance.light import Light
from enhance.read import read_triggers
from enhance.recording import FrameArray

STARTS = 1_000_000 + np.arange(8) * 40_000
PULSES = STARTS + 7_000


@pytest.fixture
def frames():
    return FrameArray(np.zeros((8, 2, 2), np.uint8), STARTS, STARTS + 10_000, Light("linear"))


@pytest.fixture
def table(tmp_path):
    def write(rows, header="time_us"):
        path = tmp_path / "triggers.csv"
        path.write_text("\n".join([header, *map(str, rows)]) + "\n")
        return path

    return write


def test_pulses_in_the_frames_order_are_taken_as_they_are(frames, table):
    found = read_triggers(table(PULSES), frames)
    assert found.times_us.tolist() == PULSES.tolist()
    assert found.times_us.dtype == np.int64
    assert found.remarks == ()


def test_pulses_with_their_frames_may_stand_in_any_order(frames, table):
    rows = [f"{k},{PULSES[k]}" for k in (3, 0, 1, 2, 7, 6, 5, 4)]
    assert read_triggers(table(rows, "frame,time_us"), frames).times_us.tolist() == PULSES.tolist()


def test_an_echo_right_behind_a_pulse_is_left_out_with_a_remark(frames, table):
    rows = sorted([*PULSES, PULSES[3] + 300])
    found = read_triggers(table(rows), frames)
    assert found.times_us.tolist() == PULSES.tolist()
    assert found.remarks == ("1 doubled trigger pulses right behind another were left out (row 6)",)


@pytest.mark.parametrize(
    ("rows", "header", "message"),
    [
        (
            np.delete(PULSES, 3),
            "time_us",
            r"7 pulses for 8 frames, so 1 are missing; the first odd distance is 80000 us",
        ),
        (np.delete(PULSES, 7), "time_us", r"7 pulses for 8 frames, so 1 are missing, at the end. Give exactly one"),
        (sorted([*PULSES, PULSES[3] + 20_000]), "time_us", "9 pulses for 8 frames, so 1 are doubled or foreign"),
        (sorted([*np.delete(PULSES, 5), PULSES[2] + 300]), "time_us", "row 5: this pulse comes 300 us after the one"),
        (PULSES[::-1], "time_us", "row 3: the pulse at .* does not come after that at"),
        (PULSES * 1000, "time_us", "row 3: this pulse comes 40000000 us after .* the times are not microseconds"),
        (
            [f"{k},{PULSES[k]}" for k in (0, 1, 2, 3, 4, 6)],
            "frame,time_us",
            "missing is the pulse of frame 5 and of 1 m",
        ),
        ([f"{k},{PULSES[k]}" for k in (0, 1, 1)], "frame,time_us", "row 4: a doubled pulse: frame '1' stands in row 3"),
        (
            [f"{k},1" for k in (0, 9)],
            "frame,time_us",
            "row 3: frame '9' is neither a file name nor an index from 0 to 7",
        ),
        (["1.5"], "time_us", "row 2: time_us is '1.5', expected whole microseconds"),
        ([2**63], "time_us", "row 2: time_us is 9223372036854775808, too large"),
        (["1,2"], "time_us", r"row 2: 2 cells, expected 1"),
        ([1], "when", r"row 1: columns when. Expected the header frame,time_us, or time_us alone"),
    ],
)
def test_a_table_that_does_not_fit_is_refused(frames, table, rows, header, message):
    with pytest.raises(FramesError, match=message):
        read_triggers(table(rows, header), frames)


def test_a_table_that_is_not_there_is_refused(frames, tmp_path):
    with pytest.raises(
        FramesError, match=r"none.csv cannot be read as a table of triggers: .* Check rig.clock.triggers"
    ):
        read_triggers(tmp_path / "none.csv", frames)
