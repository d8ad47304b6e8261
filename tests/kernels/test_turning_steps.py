"""Events as steps whose time is right: closed forms of light that turns."""

import numpy as np
import pytest

from enhance.kernels.turning_steps import mean_light, turning_steps


def steps_of(times, signs, contrast=(0.2, 0.2), longest=1e9):
    t, _, step = turning_steps(
        np.array(times), np.zeros(len(times), np.int64), np.array(signs, np.int8), contrast, 1, longest
    )
    return t, step


def test_events_of_one_sign_stand_where_they_are():
    t, step = steps_of([100, 200, 300], [1, 1, 1])
    assert t.tolist() == [100, 200, 300]
    assert step.tolist() == [0.2, 0.2, 0.2]


@pytest.mark.parametrize("u", [0.1, 0.5, 0.9])
def test_the_crossing_behind_a_parabolas_peak_is_found(u):
    # light = -(t / 1000)^2 in thresholds, reported last at -u on the way up: then -(u + 1) and -(u + 2) on the way down
    up, first, second = (1000 * np.sqrt(u + k) for k in range(3))
    times = 10_000 + np.rint([-up, first, second]).astype(int)
    t, step = steps_of(times, [1, -1, -1])
    assert len(t) == 4
    assert t[1] == pytest.approx(10_000 + up, abs=15)
    assert step.tolist() == [0.2, -0.2, -0.2, -0.2]


def test_light_that_rested_turns_with_the_pace_it_goes_on_with():
    t, _ = steps_of([0, 1_000_000, 1_000_500], [1, -1, -1])
    assert t[1] == pytest.approx(1_000_000 - 500, abs=2)


def test_a_lone_event_takes_the_pace_before_its_turn():
    t, _ = steps_of([0, 700, 50_000], [1, 1, -1])
    assert t[2] == 50_000 - 700


def test_no_step_stands_further_ahead_than_is_allowed_or_than_the_event_before():
    t, _ = steps_of([0, 40_000, 60_000], [1, -1, -1], longest=5_000)
    assert t[1] == 35_000
    t, _ = steps_of([0, 1_000, 9_000], [1, -1, -1])
    assert t.tolist() == [0, 0, 1_000, 9_000]


def test_unequal_thresholds_do_not_let_the_sum_run_away():
    # up and down by the same light again and again: the turns' steps cancel each other
    _, step = steps_of(np.arange(1, 400) * 1_000, np.tile([1, -1], 200)[:399], (0.3, 0.2))
    turns = step[np.isclose(np.abs(step), 0.25)]
    assert len(turns) == 398
    assert abs(turns.sum()) < 1e-9


def test_mean_light_is_the_mean_of_its_steps():
    # exp(0) for 30, exp(0.5) for 70 of 100; then exp(0.5) throughout; a pixel without steps stays at 1
    windows = np.array([[0.0, 100.0], [200.0, 300.0]])
    mean = mean_light(np.array([30.0]), np.array([1]), np.array([0.5]), windows, 2)
    assert mean == pytest.approx(np.array([[1, 0.3 + 0.7 * np.exp(0.5)], [1, np.exp(0.5)]]))


def test_a_pixel_that_fires_for_no_reason_stays_finite():
    t = np.arange(1, 10_001, dtype=np.float64)
    mean = mean_light(t, np.zeros(10_000, np.int64), np.full(10_000, 0.3), np.array([[0.0, 20_000.0]]), 1)
    assert np.isfinite(mean).all()
