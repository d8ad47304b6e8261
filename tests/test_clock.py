"""Time: units, middles, grids, and the map from one clock to another."""

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from enhance.clock import ClockMap, factor_times, middle_us, parse_duration, parse_exact, rate_times, to_microseconds

EPOCH_US = 1_589_163_147_364_965


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("20 ms", 20_000),
        ("2.134 s", 2_134_000),
        ("14.8 us", 14),
        ("999 ns", 0),
        ("-0.5 us", -1),
        ("1e-3s", 1_000),
        (" .5ms ", 500),
        ("0.000003 s", 3),
        ("1589163147.364965 s", EPOCH_US),
    ],
)
def test_a_time_with_its_unit_is_floored_to_microseconds(text, expected):
    assert parse_duration(text) == expected


def test_an_exact_time_keeps_fractions_of_a_microsecond():
    assert parse_exact("14.8 us") == Fraction(148, 10)


@pytest.mark.parametrize("text", ["20", "ms", "20 min", "1,5 ms", "nan s", "", "20 ms 3"])
def test_text_that_is_no_time_is_refused(text):
    with pytest.raises(ValueError, match='is not a time with its unit; write for example "20 ms"'):
        parse_duration(text)


@pytest.mark.parametrize(
    ("values", "unit", "expected"),
    [
        (np.array([1_999, -1], np.int64), "ns", [1, -1]),
        (np.array([3], np.int8), "s", [3_000_000]),
        (np.array([1_589_163_147_364_965_999], np.uint64), "ns", [EPOCH_US]),
        (np.array([0.000003, 2.3]), "s", [3, 2_300_000]),
        (np.array([1.9999, -0.0001]), "us", [1, -1]),
        (np.array([1_589_163_147.364965]), "s", [EPOCH_US]),
        (np.array([0.5], np.float32), "ms", [500]),
    ],
)
def test_stored_times_are_floored_and_whole_microseconds_survive(values, unit, expected):
    found = to_microseconds(values, unit)
    assert found.dtype == np.int64
    assert found.tolist() == expected


@given(st.integers(0, 10**15))
def test_every_whole_microsecond_survives_being_stored_as_seconds(time_us):
    # a double resolves 0.12 us at 10^15 us: the nearest decimal second is still that microsecond
    assert to_microseconds(np.array([time_us / 1e6]), "s")[0] == time_us


def test_a_frame_stands_at_the_floored_middle_of_its_exposure():
    assert [middle_us(0, 5), middle_us(-3, 0), middle_us(7, 7)] == [2, -2, 7]
    assert middle_us(EPOCH_US, EPOCH_US + 501) == EPOCH_US + 250


def test_a_factor_gives_one_picture_less_than_its_number():
    # t0 + floor(i (t1 - t0) / n)
    assert factor_times(100, 110, 3) == [103, 106]
    assert factor_times(EPOCH_US, EPOCH_US + 40_001, 4) == [EPOCH_US + k for k in (10_000, 20_000, 30_000)]
    assert factor_times(0, 10, 1) == []


def test_a_scene_rate_runs_from_the_first_key_and_never_past_the_last():
    # t_first + floor(k 10^6 / r)
    assert rate_times(5, 100_005, Fraction(30)) == [5, 33_338, 66_671, 100_005]
    assert rate_times(5, 100_004, Fraction(30)) == [5, 33_338, 66_671]
    ntsc = rate_times(0, 3_600_000_000, Fraction(30_000, 1001))
    assert ntsc[-1] == (len(ntsc) - 1) * 1_000_000 * 1001 // 30_000 <= 3_600_000_000 < ntsc[-1] + 33_367


def test_a_plain_offset_is_added_exactly_even_to_an_epoch():
    clock = ClockMap(offset_us=-EPOCH_US)
    assert clock.to_frame(np.array([EPOCH_US + 7], np.int64)).tolist() == [7]
    assert clock.to_event(7) == EPOCH_US + 7


def test_drift_counts_from_the_first_event():
    # t_frame = t_event + offset + 1e-6 drift (t_event - t_first); 100 ppm are 6 ms a minute
    clock = ClockMap(offset_us=10, drift_ppm=100.0, first_event_us=EPOCH_US)
    event = np.array([EPOCH_US, EPOCH_US + 60_000_000], np.int64)
    assert clock.to_frame(event).tolist() == [EPOCH_US + 10, EPOCH_US + 60_006_010]


@given(
    st.integers(-(10**10), 10**10),
    st.integers(-(10**15), 10**15),
    st.floats(-1000, 1000),
    st.sampled_from([0, EPOCH_US]),
)
def test_the_way_back_finds_the_earliest_event_at_or_after_a_frame_time(elapsed, offset, drift, first):
    clock = ClockMap(offset, drift, first)
    frame = first + elapsed + offset
    event = clock.to_event(frame)
    before, at = clock.to_frame(np.array([event - 1, event], np.int64))
    assert before < frame <= at


@given(st.floats(-1000, 1000), st.integers(0, 10**12))
def test_drift_never_turns_the_order_of_events_around(drift, start):
    times = np.arange(start, start + 3000, dtype=np.int64)
    assert (np.diff(ClockMap(0, drift, 0).to_frame(times)) >= 0).all()
