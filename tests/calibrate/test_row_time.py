"""The row time of a rolling shutter, against simulated recordings that were made with one."""

from dataclasses import replace

import numpy as np
import pytest

from enhance.calibrate import calibrate, known_rig, read_rig, rig_text
from enhance.calibrate.row_time import Bands, _line
from enhance.errors import CalibrationError
from enhance.recording import EventArray, Events, Recording
from enhance.settings import RigSettings
from enhance.simulate import Camera, EventSensor, simulate

ESTIMATE = RigSettings(row_time_us=None)


@pytest.fixture(scope="module")
def rolling(pan):
    """60 rows read in 11.8 ms of 20, upward; the events' clock 3.3 ms late."""
    camera = Camera(rate_hz=50.0, exposure_us=9_000, start_us=20_000, row_time_us=-200.0)
    return simulate(pan(21, 500.0), camera, EventSensor(0.2, 0.24, noise_hz=0.2), 0.22, 11, clock_offset_us=3_300)


@pytest.fixture(scope="module")
def found(rolling):
    recording = rolling.recording
    return calibrate(recording, range(len(recording.frames)), ESTIMATE)


def test_row_time_and_clock_are_both_found(found):
    # a readout of 11.8 ms within 3 %; the clock within 2 % of the exposure
    assert found.row_time_us.value == pytest.approx(-200, abs=6)
    assert found.row_time_us.method == "clock of bands of rows"
    assert 0 < found.row_time_us.uncertainty < 10
    assert found.offset_us.value == pytest.approx(3_300, abs=300)


def test_thresholds_are_found_as_with_a_global_shutter(found):
    assert found.contrast_positive.value == pytest.approx(0.2, rel=0.06)
    assert found.contrast_negative.value == pytest.approx(0.24, rel=0.06)


def test_it_goes_through_the_rig_file_and_back(found, rolling, tmp_path):
    path = tmp_path / "rig.toml"
    path.write_text(rig_text(found))
    again = read_rig(path, found.sensor_size)
    assert again.row_time_us.value == found.row_time_us.value
    assert known_rig(rolling.recording, replace(ESTIMATE, file=path)).row_time_us.value == found.row_time_us.value
    # what the job gives comes first
    given = RigSettings(file=path, row_time_us=-150.0)
    assert known_rig(rolling.recording, given).row_time_us.value == -150.0


def without_motion(recording):
    """Events at random, and frames that never change."""
    rng = np.random.default_rng(4)
    t = np.sort(rng.integers(0, 220_000, 4_000))
    x, y = rng.integers(0, 80, 4_000), rng.integers(0, 60, 4_000)
    noise = Events(t, x.astype(np.uint16), y.astype(np.uint16), rng.choice([-1, 1], 4_000).astype(np.int8))
    still = replace(recording.frames, codes=np.repeat(recording.frames.codes[:1], len(recording.frames), axis=0))
    return Recording("still", still, EventArray(noise, (80, 60), (0, 220_000)))


def test_a_scene_without_motion_cannot_tell_it(rolling):
    recording = without_motion(rolling.recording)
    keys = range(len(recording.frames))
    with pytest.raises(
        CalibrationError, match=r"still: the row time .* cannot be told: .*Give frames.row_time, or set"
    ):
        calibrate(recording, keys, ESTIMATE)
    rig = calibrate(recording, keys, replace(ESTIMATE, unknown="frames"))
    assert rig.row_time_us.value is None
    assert rig.offset_us.value is None
    assert "row time" in rig.offset_us.evidence


def test_a_readout_longer_than_a_frame_interval_is_refused(rolling):
    with pytest.raises(CalibrationError, match=r"frames.row_time: with 400 us from row to row, 60 rows take 23.6 ms"):
        known_rig(rolling.recording, RigSettings(row_time_us=400.0))


def test_a_rig_file_of_a_slower_camera_is_refused_by_its_own_name(found, rolling, tmp_path):
    path = tmp_path / "rig.toml"
    path.write_text(rig_text(replace(found, row_time_us=replace(found.row_time_us, value=500.0))))
    with pytest.raises(CalibrationError, match=r"rig.file: with 500 us from row to row"):
        known_rig(rolling.recording, replace(ESTIMATE, file=path))


def test_bands_that_fit_by_chance_do_not_turn_the_line():
    row = np.arange(-35.0, 36.0, 10.0)
    offset = 700.0 - 180.0 * row
    offset[[1, 6]] = 9_000.0, 4_000.0
    line = _line(Bands(row, offset, np.full(8, 100.0)))
    assert line.slope == pytest.approx(-180.0)
    assert line.middle_us == pytest.approx(700.0)
    assert line.bands == 6


@pytest.mark.parametrize("bands", [3, 4])
def test_bands_of_one_half_of_the_frame_are_no_line(bands):
    row = np.arange(1.0, bands + 1)
    assert _line(Bands(row, -180.0 * row, np.full(bands, 100.0))) is None
