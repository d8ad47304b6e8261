"""The event sensor against closed forms."""

import numpy as np
import pytest

from enhance.recording import Events
from enhance.simulate.sensor import EventSensor, SensorRun

SIZE = (64, 48)
PIXELS = SIZE[0] * SIZE[1]


def flat(log_light: float) -> np.ndarray:
    return np.full(SIZE[::-1], np.exp(log_light), dtype=np.float32)


def follow(sensor: EventSensor, log_light, duration_us: float, steps: int, seed: int = 5) -> tuple[Events, SensorRun]:
    """Show the sensor a flat field whose log light is a function of time."""
    run = SensorRun(sensor, SIZE, np.random.default_rng(seed))
    parts = [run.advance(flat(log_light(t)), t) for t in np.linspace(0, duration_us, steps + 1)]
    columns = [np.concatenate([getattr(p, n) for p in parts]) for n in ("t_us", "x", "y", "polarity")]
    return Events(*columns), run


def per_pixel(events: Events) -> np.ndarray:
    return np.bincount(events.y.astype(int) * SIZE[0] + events.x, minlength=PIXELS)


def of_pixel(events: Events, x: int, y: int) -> Events:
    return events.keep((events.x == x) & (events.y == y))


def test_a_log_ramp_gives_one_event_a_threshold_less_half_of_one_for_the_part_filled_start():
    # reference uniform in the dead band (width 2 c): count = floor((D - r) / c) + 1, mean D / c - 1/2 (computed)
    rise, c = 1.37, 0.2
    events, _ = follow(EventSensor(c, c), lambda t: -2 + rise * t / 1e5, 1e5, 40)
    counts = per_pixel(events)
    assert set(counts) == {5, 6, 7}
    assert counts.mean() == pytest.approx(rise / c - 0.5, abs=0.05)
    assert (events.polarity == 1).all()


def test_events_of_a_ramp_are_evenly_spaced_to_the_microsecond():
    # spacing T c / D = 100 000 * 0.2 / 1.6 = 12 500 us, whatever the steps at which the light was shown
    events, _ = follow(EventSensor(0.2, 0.2), lambda t: -1 - 1.6 * t / 1e5, 1e5, 37)
    for x, y in ((0, 0), (63, 47), (20, 31)):
        spacing = np.diff(of_pixel(events, x, y).t_us)
        np.testing.assert_allclose(spacing, 12_500, atol=1.5)
    assert (events.polarity == -1).all()


def test_one_large_step_gives_the_same_events_as_many_small_ones():
    once, _ = follow(EventSensor(0.2, 0.2), lambda t: -2 + 1.5 * t / 1e5, 1e5, 1)
    often, _ = follow(EventSensor(0.2, 0.2), lambda t: -2 + 1.5 * t / 1e5, 1e5, 50)
    assert abs(len(once) - len(often)) <= 2
    for x, y in ((1, 2), (40, 40)):
        np.testing.assert_allclose(of_pixel(once, x, y).t_us, of_pixel(often, x, y).t_us, atol=1.5)


def test_the_first_event_comes_at_a_time_spread_evenly_over_the_dead_band():
    events, _ = follow(EventSensor(0.2, 0.3), lambda t: -2 + t / 1e6, 5e5, 5)
    _, first = np.unique(events.y.astype(int) * SIZE[0] + events.x, return_index=True)
    # distance to the upper threshold is uniform over c+ + c- = 0.5, at 1 per second: 0 to 500 ms, mean 250, sd 144.3
    times = events.t_us[first] / 1000
    assert times.mean() == pytest.approx(250, abs=10)
    assert times.std() == pytest.approx(144.3, abs=6)


@pytest.mark.parametrize("depth", [0.05, 0.2, 0.5])
def test_a_flickering_lamp_gives_twice_its_swing_over_the_threshold_less_one(depth):
    # steady state, random phase: mean 2 (D / c - 1) a cycle with D = ln((1+m)/(1-m)), none for D < c (computed)
    sensor, c = EventSensor(0.2, 0.2, lamp_hz=100.0, lamp_depth=depth), 0.2
    events, _ = follow(sensor, lambda t: np.log(0.4 * sensor.lamp(t * 1e-6)), 60_000, 6 * 48)
    steady = events.between(20_000, 60_000)
    swing = np.log((1 + depth) / (1 - depth))
    expected = 2 * (swing / c - 1) if swing >= c else 0.0
    assert len(steady) / PIXELS / 4 == pytest.approx(expected, abs=0.08)
    assert per_pixel(steady).max() <= 4 * 2 * np.floor(swing / c)


def test_dead_time_turns_a_poisson_rate_r_into_r_over_one_plus_r_tau():
    # 1 kHz and 100 us: 1000 / 1.1 = 909.1 a second (non-paralysable counter, textbook)
    events, _ = follow(EventSensor(noise_hz=1000.0, refractory_us=100.0), lambda t: -1.0, 3e5, 10)
    rate = len(events) / PIXELS / 0.3
    assert rate == pytest.approx(1000 / 1.1, rel=0.004)
    shortest = np.diff(of_pixel(events, 3, 3).t_us).min()
    assert shortest >= 99


def test_a_pixel_held_in_reset_starts_anew_from_the_level_at_which_it_re_arms():
    # spacing without dead time 12 500 us; held in reset for 2000 us, the pixel starts again 2000 us later (computed)
    events, _ = follow(EventSensor(0.2, 0.2, refractory_us=2000.0), lambda t: -1 - 1.6 * t / 1e5, 1e5, 37)
    np.testing.assert_allclose(np.diff(of_pixel(events, 9, 9).t_us), 14_500, atol=1.5)


def test_noise_is_poisson_of_either_sign_and_hot_pixels_are_the_ones_listed():
    sensor = EventSensor(noise_hz=20.0, hot_fraction=0.01, hot_rate_hz=900.0)
    events, run = follow(sensor, lambda t: -1.0, 1e6, 4)
    counts = per_pixel(events)
    hot = np.zeros(PIXELS, dtype=bool)
    hot[run.hot[:, 1] * SIZE[0] + run.hot[:, 0]] = True
    assert 10 <= hot.sum() <= 60
    assert counts[hot].min() > 700 > 60 > counts[~hot].max()
    # Poisson: variance = mean = 20
    assert counts[~hot].mean() == pytest.approx(20, rel=0.02)
    assert counts[~hot].var() == pytest.approx(20, rel=0.12)
    assert abs(events.polarity.astype(float).mean()) < 0.02


def test_leakage_gives_positive_events_at_its_rate_under_steady_light():
    events, _ = follow(EventSensor(0.2, 0.2, leak_hz=10.0), lambda t: -1.0, 1e6, 7)
    assert (events.polarity == 1).all()
    # from a start uniform over two thresholds: one half fewer than rate times time
    assert len(events) / PIXELS == pytest.approx(9.5, abs=0.06)
    np.testing.assert_allclose(np.diff(of_pixel(events, 5, 5).t_us), 100_000, atol=2)


def test_thresholds_spread_as_asked_each_polarity_on_its_own_and_the_events_show_them():
    sensor = EventSensor(0.2, 0.25, mismatch=0.03)
    events, run = follow(sensor, lambda t: -2 + 1.6 * t / 1e6, 1e6, 3)
    for own, nominal in ((run.contrast_positive, 0.2), (run.contrast_negative, 0.25)):
        assert own.mean() == pytest.approx(nominal, rel=0.003)
        assert own.std() / own.mean() == pytest.approx(0.03, rel=0.06)
    assert abs(np.corrcoef(run.contrast_positive.ravel(), run.contrast_negative.ravel())[0, 1]) < 0.06
    for x, y in ((0, 0), (50, 7)):
        spacing = np.diff(of_pixel(events, x, y).t_us).mean()
        assert spacing * 1.6e-6 == pytest.approx(run.contrast_positive[y, x], rel=1e-4)


def test_latency_delays_every_event_and_order_is_kept():
    plain, _ = follow(EventSensor(0.2, 0.2), lambda t: -2 + 1.6 * t / 1e5, 1e5, 1)
    late, _ = follow(EventSensor(0.2, 0.2, latency_us=300.0), lambda t: -2 + 1.6 * t / 1e5, 1e5, 1)
    np.testing.assert_array_equal(late.t_us, plain.t_us + 300)
    spread, _ = follow(EventSensor(latency_us=300.0, latency_jitter_us=50.0), lambda t: -2 + 1.6 * t / 1e5, 1e5, 1)
    assert (np.diff(spread.t_us) >= 0).all()
    assert spread.t_us.mean() - plain.t_us.mean() == pytest.approx(300, abs=3)


def test_a_step_with_more_events_than_the_output_holds_loses_none():
    # 3072 pixels x 140 crossings exceed one call's room of 262 144 events
    events, _ = follow(EventSensor(0.04, 0.04), lambda t: -6 + 5.6 * t / 1e5, 1e5, 1)
    assert len(events) / PIXELS == pytest.approx(5.6 / 0.04 - 0.5, abs=0.06)


def test_colour_is_seen_through_its_luma():
    # ITU-R BT.709: pure red counts 0.2126
    run = SensorRun(EventSensor(0.2, 0.2), SIZE, np.random.default_rng(1))
    grey = SensorRun(EventSensor(0.2, 0.2), SIZE, np.random.default_rng(1))
    red = np.zeros((48, 64, 3), dtype=np.float32)
    red[..., 0] = 1.0
    run.advance(red * 0.1, 0.0)
    grey.advance(red[..., 0] * np.float32(0.02126), 0.0)
    seen, expected = run.advance(red * 0.7, 1000.0), grey.advance(red[..., 0] * np.float32(0.14882), 1000.0)
    assert len(seen) > PIXELS
    np.testing.assert_allclose(seen.t_us, expected.t_us, atol=1)  # float32 luma: a floor may fall the other way


@pytest.mark.parametrize(
    ("wrong", "message"),
    [
        ({"contrast_positive": 0.0}, r"thresholds are 0\.0 and 0\.2; expected 0\.02 or more"),
        ({"lamp_depth": 1.0}, r"lamp_depth is 1\.0 .* expected shares"),
        ({"noise_hz": -1.0}, "must not be negative"),
    ],
)
def test_settings_that_cannot_be_are_refused(wrong, message):
    with pytest.raises(ValueError, match=message):
        EventSensor(**wrong)


def test_a_sensor_that_is_slower_in_the_dark_is_late_by_what_its_light_says():
    # lag = dark_latency * dark_light / (dark_light + light); the same crossings, told later
    before, after = np.full((1, 2), 0.1, np.float32), np.array([[0.2, 0.4]], np.float32)
    prompt, late = (
        SensorRun(EventSensor(0.2, 0.2, dark_latency_us=lag, dark_light=0.1), (2, 1), np.random.default_rng(1))
        for lag in (0.0, 3_000.0)
    )
    times = []
    for run in (prompt, late):
        run.advance(before, 0.0)
        events = run.advance(after, 10_000.0)
        times.append({x: np.sort(events.t_us[events.x == x]) for x in (0, 1)})
    for x, light in ((0, 0.2), (1, 0.4)):
        assert len(times[0][x]) > 1
        assert times[1][x] - times[0][x] == pytest.approx(300 / (0.1 + light), abs=1)
