"""Drift between two clocks, from recordings of up to ten minutes whose clock is known."""

import numpy as np
import pytest

from enhance.calibrate import calibrate
from enhance.calibrate.drift import Mark, drift_quantity, fit_line, stretches, too_short
from enhance.light import Light
from enhance.recording import FrameArray
from enhance.settings import RigSettings
from enhance.simulate import Camera, EventSensor, simulate
from enhance.simulate.takes import join_takes


@pytest.fixture(scope="module")
def takes(pan):
    camera = Camera(rate_hz=50.0, exposure_us=12_000, start_us=6_000)
    return [
        simulate(pan(30 + k, 500.0, size=(56, 42)), camera, EventSensor(0.2, 0.24, noise_hz=0.2), 0.16, 30 + k)
        for k in range(10)
    ]


def error_us(recording, clock, rig):
    """Largest clock error at the first and the last event."""
    elapsed = np.array([0, recording.events.last_us - recording.events.first_us]) / 1e6
    return np.abs(rig.offset_us.value - clock.offset_us + (rig.drift_ppm.value - clock.drift_ppm) * elapsed).max()


@pytest.mark.parametrize(
    ("pause_us", "offset_us", "ppm"),
    [
        pytest.param(60_000_000, -5_300, 87.0, id="nine minutes"),
        pytest.param(60_000_000, 1_400_000, -200.0, id="the most that clocks part by, and far off"),
        pytest.param(60_000_000, 300, 0.0, id="nine minutes of equal clocks"),
    ],
)
def test_the_clock_is_told_all_through_a_long_recording(takes, pause_us, offset_us, ppm):
    recording, clock = join_takes(takes, [k * pause_us for k in range(10)], offset_us, ppm)
    rig = calibrate(recording, range(len(recording.frames)), RigSettings())
    # the scene of `conftest` leaves 1.4 % of an exposure of 12 ms whatever the length: see test_clock
    assert error_us(recording, clock, rig) < 0.016 * 12_000
    assert error_us(recording, clock, rig) < 2 * rig.offset_us.uncertainty
    assert rig.drift_ppm.value == pytest.approx(ppm, abs=1.0)
    assert ("not significant, taken as 0" in rig.drift_ppm.evidence) == (ppm == 0)
    assert "over 10 stretches of 540.1 s" in rig.drift_ppm.evidence or "over 9 stretches" in rig.drift_ppm.evidence


def test_a_given_drift_or_offset_is_kept(takes):
    recording, clock = join_takes(takes, [k * 2_000_000 for k in range(10)], -2_000, 120.0)
    rig = calibrate(recording, range(len(recording.frames)), RigSettings(drift_ppm=120.0))
    assert rig.drift_ppm.value == 120.0
    assert rig.drift_ppm.method == "given"
    assert error_us(recording, clock, rig) < 2 * rig.offset_us.uncertainty
    rig = calibrate(recording, range(len(recording.frames)), RigSettings(offset_us=-2_000))
    assert (rig.offset_us.value, rig.drift_ppm.value) == (-2_000, 0.0)
    assert "not looked for: the offset is given without it" in rig.drift_ppm.evidence


def test_takes_that_cannot_be_joined_are_refused(takes):
    with pytest.raises(ValueError, match="takes overlap"):
        join_takes(takes[:2], [0, 1_000])


def marks(count, ppm, sigma=40.0, seed=1):
    rng = np.random.default_rng(seed)
    times = np.linspace(1_000_000, 61_000_000, count).astype(int)
    return [Mark(int(t), round(500 + ppm * t / 1e6 + rng.normal(0, sigma)), sigma) for t in times]


def test_the_line_is_that_of_least_squares_with_the_textbooks_deviation():
    found = fit_line(marks(10, 100.0), 0)
    x = np.array([mark.event_us for mark in marks(10, 100.0)]) / 1e6
    y = [mark.offset_us for mark in marks(10, 100.0)]
    slope, base = np.polyfit(x, y, 1)
    assert found.ppm == pytest.approx(slope, abs=1e-6)
    assert found.at_first_us == pytest.approx(base, abs=1e-6)
    # sigma / sqrt(sum (x - mean)^2), widened at the most by the scatter
    assert 40 / np.sqrt(((x - x.mean()) ** 2).sum()) <= found.sigma_ppm * 1.0001 < 2.0
    assert drift_quantity(found, 60_000_000).value == found.ppm


def test_an_outlier_does_not_pull_the_line():
    some = marks(10, 50.0)
    some[7] = Mark(some[7].event_us, some[7].offset_us + 20_000, 40.0)
    found = fit_line(some, 0)
    assert found.ppm == pytest.approx(50.0, abs=2.5)
    assert found.marks == 9


def test_what_is_not_significant_is_zero_and_says_so():
    quantity = drift_quantity(fit_line(marks(10, 0.3), 0), 60_000_000)
    assert quantity.value == 0.0
    assert quantity.uncertainty > 0.3
    assert "ppm over 10 stretches of 60.0 s: not significant, taken as 0" in quantity.evidence


def test_a_drift_that_no_clock_has_is_not_believed():
    quantity = drift_quantity(fit_line(marks(10, 900.0), 0), 60_000_000)
    assert quantity.value == 0.0
    assert "more than clocks part by (200 ppm), not believed" in quantity.evidence


def test_too_few_stretches_tell_no_line():
    assert fit_line(marks(3, 100.0), 0) is None
    assert "fewer than 4 stretches" in drift_quantity(None, 60_000_000).evidence


def test_a_short_recording_says_how_little_drift_matters_there():
    assert "0.30 s are too short to tell; 200 ppm move the clock by 30 us at most" in too_short(300_000).evidence
    assert too_short(1_000_000) is None


def test_stretches_divide_time_and_keep_neighbours_together():
    start = np.concatenate([np.arange(100) * 20_000, 50_000_000 + np.arange(100) * 20_000])
    frames = FrameArray(np.zeros((200, 2, 2), np.uint8), start, start + 10_000, Light("linear"))
    parts = stretches(frames, range(200))
    assert [len(part) > 0 for part in parts] == [True, *[False] * 8, True]
    assert len(parts[0]) <= 16
    assert all(k + 1 in parts[0] or k - 1 in parts[0] for k in parts[0])
