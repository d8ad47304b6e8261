"""The clock from trigger pulses: exact where the pulses are."""

from dataclasses import replace

import numpy as np
import pytest

from enhance.calibrate import calibrate, known_rig
from enhance.calibrate.triggers import clock_from_triggers
from enhance.errors import CalibrationError
from enhance.light import Light
from enhance.recording import FrameArray, Triggers
from enhance.settings import RigSettings


def frames_of(count, step_us=40_000, first_us=1_700_000_000_000_000):
    start = first_us + np.arange(count) * step_us
    return FrameArray(np.zeros((count, 2, 2), np.uint8), start, start + 10_000, Light("linear"))


@pytest.mark.parametrize("ppm", [0.0, 87.0, -200.0])
def test_offset_and_drift_are_those_of_the_pulses(ppm):
    # ten minutes at 25 frames a second, counters that began at 0 and in 1970
    frames = frames_of(15_000)
    elapsed = frames.start_us - frames.start_us[0]
    pulses = 5_000_000 + np.rint(elapsed / (1 + 1e-6 * ppm)).astype(np.int64)
    offset, drift = clock_from_triggers(Triggers(pulses), frames, 4_000_000)
    assert drift.value == pytest.approx(ppm, abs=0.001)
    end = offset.value + 1e-6 * drift.value * (pulses[-1] - 4_000_000) + pulses[-1]
    assert end == pytest.approx(frames.start_us[-1], abs=2)
    assert isinstance(offset.value, int)
    assert offset.method == drift.method or "not significant" in drift.evidence


def test_a_jittering_trigger_says_how_much():
    frames = frames_of(100)
    jitter = np.random.default_rng(3).normal(0, 30, 100)
    offset, _ = clock_from_triggers(Triggers(frames.start_us - 500 + np.rint(jitter).astype(np.int64)), frames, 0)
    assert offset.value == pytest.approx(500, abs=10)
    assert 2 < offset.uncertainty < 4
    assert "100 pulses at the exposures' starts, scatter" in offset.evidence


@pytest.mark.parametrize("count", [1, 2])
def test_one_or_two_pulses_tell_an_offset_alone(count):
    frames = frames_of(count)
    offset, drift = clock_from_triggers(Triggers(frames.start_us - 500), frames, 0)
    assert (offset.value, drift.value, drift.uncertainty) == (500, 0.0, None)


def test_clocks_that_run_too_far_apart_are_refused():
    frames = frames_of(100)
    pulses = ((frames.start_us - frames.start_us[0]) * 1.01).astype(np.int64)
    with pytest.raises(CalibrationError, match=r"run apart by -99\d\d ppm, more than two clocks of one rig do"):
        clock_from_triggers(Triggers(pulses), frames, 0)


def test_a_trigger_table_goes_before_the_rig_file_and_before_any_estimate(simulated):
    truth = simulated("plain")
    recording = replace(truth.recording, triggers=Triggers(truth.triggers_us, ("one echo left out",)))
    rig = calibrate(recording, range(len(recording.frames)), RigSettings())
    assert abs(rig.offset_us.value - truth.clock.offset_us) <= 1
    assert rig.offset_us.method == "trigger table"
    assert "one echo left out" in rig.offset_us.evidence
    assert rig.contrast_positive.value == pytest.approx(0.2, rel=0.08)
    assert known_rig(recording, RigSettings()).offset_us == rig.offset_us
