"""Flicker's kernels against closed forms: what a lamp alone sets off leaves nothing, what the scene does stays."""

import numpy as np
import pytest

from enhance.kernels.flicker import long_differences, steady_steps


def columns(t, polarity):
    return np.array(t, np.int64), np.zeros(len(t), np.int64), np.array(polarity, np.int8)


def steady(t, polarity, level, parts=1, forget_us=1e12, reach_us=1e9):
    one = np.ones(1)
    steps = (1.0 / parts, 1.0 / parts)
    return steady_steps(*columns(t, polarity), np.array(level, float), one, (one, one), steps, forget_us, reach_us)


def test_stretches_end_with_the_first_event_that_is_late_enough():
    pixel, ends, count = long_differences(*columns([0, 40, 90, 120, 230], [1, 1, -1, 1, -1]), 1, 100)
    assert pixel.tolist() == [0, 0]
    assert ends.tolist() == [[0, 120], [120, 230]]
    # the event a stretch begins with is not of it, the one it ends with is
    assert count.tolist() == [[2, 1], [0, 1]]


def test_steps_that_are_the_lamps_own_leave_nothing():
    # light goes up by one threshold and down again, four times: the lamp does just that
    level = [0, 1, 2, 1, 0, 1, 2, 1, 0]
    t, _, _ = steady(range(0, 9_000, 1_000), [1, 1, 1, -1, -1, 1, 1, -1, -1], level)
    assert len(t) == 0


def test_without_a_lamp_every_step_after_a_pixels_first_event_is_told_at_its_own_time():
    t, pixel, polarity = steady([0, 1_000, 3_000, 3_500], [1, 1, -1, -1], [0.0] * 4)
    assert t.tolist() == [1_000, 3_000, 3_500]
    assert polarity.tolist() == [1, -1, -1]
    assert pixel.tolist() == [0, 0, 0]


def test_halves_are_told_on_the_straight_line_between_two_events():
    # one threshold from 1000 to 2000 us and the next to 3000: its halves at every 500 us
    t, _, polarity = steady([0, 1_000, 2_000, 3_000], [1, 1, 1, 1], [0.0, 1.0, 1.0, 1.0], parts=2)
    assert t.tolist() == [1_500, 2_000, 2_500, 3_000]
    assert (polarity == 1).all()


def test_a_fast_edge_is_not_spread_over_the_quiet_before_it():
    # quiet for 9 ms, then three thresholds, 100 us each: the first took about as long, 150 us at the most
    t, _, _ = steady([0, 9_000, 9_100, 9_200], [1, 1, 1, 1], [0.0] * 4, parts=2)
    assert t[0] == pytest.approx(9_000 - 75, abs=1)


def test_what_is_left_of_a_threshold_fades():
    # six tenths of a threshold twice, far apart: together they would be one, but the first is forgotten
    level = [0.0, 0.4, 0.8]
    assert len(steady([0, 1_000, 900_000], [1, 1, 1], level, forget_us=1e4)[0]) == 0
    assert len(steady([0, 1_000, 900_000], [1, 1, 1], level, forget_us=1e12)[0]) == 1
