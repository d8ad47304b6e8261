"""Row time: shifted by each row's delay, a rolling shutter's recording is a global one's."""

import numpy as np
import pytest

from enhance.light import Light
from enhance.recording import EventArray, Events, FrameArray
from enhance.rows import RowEvents, events_in_row_time, frames_in_row_time, in_row_time, row_delays_us

EVENTS = Events(
    np.array([100, 105, 110, 110, 120], dtype=np.int64),
    np.array([0, 1, 2, 0, 1], dtype=np.uint16),
    np.array([3, 0, 2, 1, 0], dtype=np.uint16),
    np.array([1, -1, 1, -1, 1], dtype=np.int8),
)


@pytest.mark.parametrize(
    ("row_time", "expected"), [(10.0, [-20, -10, 0, 10]), (-10.0, [20, 10, 0, -10]), (0.4, [-1, -1, 0, 0])]
)
def test_delays_count_from_the_middle_row(row_time, expected):
    assert row_delays_us(row_time, 4).tolist() == expected


def test_events_are_shifted_back_by_their_rows_delay_and_sorted():
    rowed = in_row_time(EVENTS, row_delays_us(10.0, 4))
    # rows 3, 0, 2, 1, 0 are late by 10, -20, 0, -10, -20
    assert rowed.t_us.tolist() == [90, 110, 120, 125, 140]
    assert rowed.y.tolist() == [3, 2, 1, 0, 0]
    assert rowed.polarity.tolist() == [1, 1, -1, -1, 1]


def test_a_window_in_row_time_holds_what_the_whole_shifted_recording_has_there():
    source = RowEvents(EventArray(EVENTS, (3, 4)), row_delays_us(10.0, 4))
    whole = in_row_time(EVENTS, row_delays_us(10.0, 4))
    for start, end in ((80, 200), (110, 125), (111, 141)):
        assert source.between(start, end).t_us.tolist() == whole.between(start, end).t_us.tolist()


def test_covered_is_what_is_covered_in_every_row():
    source = RowEvents(EventArray(EVENTS, (3, 4), (0, 1_000)), row_delays_us(10.0, 4))
    # the first row is seen from -20 + t on, the last one until 10 + t
    assert source.covers(20, 990)
    assert not source.covers(19, 990)
    assert not source.covers(20, 991)


@pytest.mark.parametrize(("row_time", "later"), [(10.0, 20), (-10.0, -20), (2.6, 5)])
def test_a_frame_stands_at_its_middle_rows_exposure(row_time, later):
    codes = np.zeros((2, 4, 3), np.uint8)
    frames = FrameArray(codes, np.array([100, 200]), np.array([150, 250]), Light("linear"))
    rowed = frames_in_row_time(frames, row_time)
    assert rowed.start_us.tolist() == [100 + later, 200 + later]
    assert rowed.frame(1).end_us == 250 + later
    assert rowed.frame(1).time_us == 225 + later
    assert (len(rowed), rowed.shape, rowed.names) == (2, (4, 3), ["0", "1"])


@pytest.mark.parametrize("row_time", [0.0, None])
def test_a_global_shutters_frames_and_events_stay_the_very_same(row_time):
    frames = FrameArray(np.zeros((1, 4, 3), np.uint8), np.array([0]), np.array([1]), Light("linear"))
    source = RowEvents(EventArray(EVENTS, (3, 4)), row_delays_us(1.0, 4))
    assert frames_in_row_time(frames, row_time) is frames
    assert events_in_row_time(source, row_time, 4) is source
