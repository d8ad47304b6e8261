"""How long before its event a change of light begins."""

import numpy as np
import pytest

from enhance.calibrate.evidence import gather_pairs
from enhance.calibrate.ramp import INTERVALS, estimate_ramp
from enhance.light import Light
from enhance.recording import EventArray, Events, FrameArray


def pairs_of(exposure_us):
    rng = np.random.default_rng(1)
    codes = rng.integers(60, 180, (2, 10, 20)).astype(np.uint8)
    start = np.array([0, 30_000])
    return gather_pairs(FrameArray(codes, start, start + exposure_us, Light("linear")), [0, 1])


def bursts(interval_us, count=5, start_us=2_000):
    """Every pixel fires `count` times, an interval apart, half of them darker."""
    y, x = (np.repeat(k.ravel(), count) for k in np.indices((10, 20)))
    t = start_us + np.tile(np.arange(count) * interval_us, 200)
    order = np.argsort(t, kind="stable")
    return EventArray(
        Events(
            t[order].astype(np.int64),
            x[order].astype(np.uint16),
            y[order].astype(np.uint16),
            np.where(x[order] % 2, 1, -1).astype(np.int8),
        ),
        (20, 10),
    )


@pytest.mark.parametrize("interval_us", [300, 1_000, 2_400])
def test_the_ramp_follows_the_interval_within_bursts(interval_us):
    quantity = estimate_ramp(pairs_of(12_000), bursts(interval_us))
    assert quantity.value == INTERVALS * interval_us
    assert isinstance(quantity.value, int)
    assert f"800 intervals of events of one sign, median {interval_us} us" in quantity.evidence


def test_a_ramp_as_long_as_the_exposure_is_not_told_from_the_clock():
    quantity = estimate_ramp(pairs_of(1_000), bursts(480))
    assert (quantity.value, quantity.method) == (0, "assumed")
    assert "exposures of 1000 us cannot tell a ramp of 960 us from a clock offset" in quantity.evidence


@pytest.mark.parametrize(("exposure_us", "count"), [(12_000, 1), (0, 5)])
def test_without_bursts_the_staircase_is_kept_and_the_reason_said(exposure_us, count):
    quantity = estimate_ramp(pairs_of(exposure_us), bursts(1_000, count))
    assert (quantity.value, quantity.method) == (0, "assumed")
    assert f"only 0 bursts within an exposure of {exposure_us} us" in quantity.evidence


def test_no_pairs_tell_no_ramp():
    assert estimate_ramp([], bursts(1_000)).value == 0


def test_faster_motion_has_a_shorter_ramp(simulated, found):
    # a burst shares out the time an edge takes to pass a pixel
    assert 500 < found("plain").ramp_us.value < found("long", 1_500_000).ramp_us.value < 0.5 * 20_000
    assert simulated("plain").scene.speed_px_s > simulated("long").scene.speed_px_s
