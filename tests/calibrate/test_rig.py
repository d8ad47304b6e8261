"""The whole rig of a recording: precedence, what cannot be told, and what is never looked at."""

import tomllib
from dataclasses import replace

import numpy as np
import pytest

from enhance.calibrate import calibrate, known_rig, rig_text
from enhance.errors import CalibrationError
from enhance.recording import EventArray, Events, FrameArray
from enhance.rig import Quantity, Rig
from enhance.settings import RigSettings

FILE = Rig(Quantity(111), Quantity(7.5), Quantity(0.31), Quantity(0.32), Quantity(900), Quantity([[1, 2]]))


@pytest.fixture
def rig_file(tmp_path, simulated):
    path = tmp_path / "rig.toml"
    path.write_text(rig_text(replace(FILE, sensor_size=simulated("plain").recording.events.size)))
    return path


def test_a_given_value_goes_before_the_files_and_that_before_an_estimate(simulated, rig_file):
    recording = simulated("plain").recording
    settings = RigSettings(file=rig_file, contrast=(0.15, 0.16), drift_ppm=3.0)
    rig = calibrate(recording, range(len(recording.frames)), settings)
    assert (rig.contrast_positive.value, rig.contrast_positive.method) == (0.15, "given")
    assert (rig.contrast_negative.value, rig.contrast_negative.method) == (0.16, "given")
    assert (rig.drift_ppm.value, rig.drift_ppm.method) == (3.0, "given")
    assert (rig.offset_us.value, rig.offset_us.method) == (111, "rig file")
    assert (rig.ramp_us.value, rig.hot_pixels.value) == (900, [[1, 2]])
    assert known_rig(recording, RigSettings(file=rig_file, offset_us=-5)).offset_us == Quantity(-5)


def test_what_nothing_tells_is_unknown_before_it_is_measured(simulated):
    recording = simulated("plain").recording
    rig = known_rig(recording, RigSettings(offset_us=0))
    assert rig.offset_us == Quantity(0)
    assert rig.contrast_positive.value is rig.ramp_us.value is rig.hot_pixels.value is rig.frame_noise.value is None
    # drift is never left open: a clock needs one
    assert (rig.drift_ppm.value, rig.drift_ppm.method) == (0.0, "assumed")
    assert rig.sensor_size == recording.events.size


def test_a_given_clock_is_kept_and_the_rest_estimated_with_it(simulated):
    truth = simulated("plain")
    recording = truth.recording
    rig = calibrate(recording, range(len(recording.frames)), RigSettings(offset_us=-5_300))
    assert rig.offset_us == Quantity(-5_300)
    assert rig.contrast_positive.value == pytest.approx(0.2, rel=0.08)
    assert rig.contrast_negative.value == pytest.approx(0.24, rel=0.08)
    assert rig.frame_noise.method != "assumed"


def test_every_estimate_says_how_and_on_what(found):
    rig = found("plain")
    for name in ("offset_us", "contrast_positive", "contrast_negative", "ramp_us", "hot_pixels", "frame_noise"):
        quantity = getattr(rig, name)
        assert quantity.value is not None, name
        assert quantity.method not in ("given", "rig file", "assumed", ""), name
        assert quantity.evidence, name
    assert rig.contrast.ramp_us > 0


def test_a_held_out_frame_is_never_looked_at(simulated, only_keys):
    recording = simulated("plain").recording
    keys = tuple(range(0, len(recording.frames), 2))
    blind = replace(recording, frames=only_keys(recording.frames, keys))
    rig = calibrate(blind, keys, RigSettings())
    assert abs(rig.offset_us.value + 5_300) < 0.05 * 12_000
    with pytest.raises(AssertionError, match="frame 1 is held out"):
        blind.frames.frame(1)


def static(recording):
    frames = recording.frames
    noise = np.random.default_rng(8).normal(0, 1.5, frames.codes.shape)
    codes = np.clip(np.rint(frames.codes[:1] + noise), 0, 255).astype(np.uint8)
    return replace(recording, frames=FrameArray(codes, frames.start_us, frames.end_us, frames.light))


def test_a_static_scene_stops_the_job_with_the_reason_and_what_to_do(simulated):
    recording = static(simulated("plain").recording)
    with pytest.raises(
        CalibrationError,
        match=r"pan: the clock of the events cannot be told: frames and events do not move together .best correlation "
        r'only 0\.\d\d.; .* Give rig.clock .an offset, or "shared"., or set rig.unknown = "frames"',
    ):
        calibrate(recording, range(len(recording.frames)), RigSettings())


def test_unknown_frames_goes_on_without_a_clock_and_keeps_the_reason(simulated):
    recording = static(simulated("plain").recording)
    rig = calibrate(recording, range(len(recording.frames)), RigSettings(unknown="frames"))
    assert rig.offset_us.value is None
    assert "do not move together" in rig.offset_us.evidence
    assert rig.contrast_positive.value is rig.contrast_negative.value is rig.ramp_us.value is None
    assert rig.contrast_positive.evidence == "the clock of the events is not known"
    assert "value" not in tomllib.loads(rig_text(rig))["clock"]["offset_us"]


def test_a_single_frame_goes_on_without_a_clock(simulated):
    recording = simulated("plain").recording
    frames = recording.frames
    one = FrameArray(frames.codes[:1], frames.start_us[:1], frames.end_us[:1], frames.light)
    rig = calibrate(replace(recording, frames=one), [0], RigSettings())
    assert rig.offset_us.value is None
    assert "no two successive keys" in rig.offset_us.evidence


def test_thresholds_that_cannot_be_told_are_assumed_and_say_so(simulated, with_events):
    recording = simulated("plain").recording
    few = with_events(recording, recording.events.events.keep(slice(0, 300)), cover=(0, 200_000))
    rig = calibrate(few, range(len(recording.frames)), RigSettings(offset_us=-5_300))
    for quantity in (rig.contrast_positive, rig.contrast_negative):
        assert (quantity.value, quantity.method) == (0.2, "assumed")
        assert "cannot be told (only" in quantity.evidence
        assert "a common value was taken" in quantity.evidence


def test_frames_that_the_sensor_did_not_see_spoil_neither_clock_nor_noise(simulated, with_events):
    # The sensor ceased to record at 0.7 of the time: motion after that has no events and is not the frames' noise
    recording = simulated("plain").recording
    source = recording.events
    start, end = source.cover_start_us, source.cover_start_us + 112_000
    part = with_events(recording, source.between(start, end), (start, end))
    rig = calibrate(part, range(len(recording.frames)), RigSettings())
    floor, shot = rig.frame_noise.value
    assert floor**2 + 0.3 * shot < 1.5 * ((5 / 20_000) ** 2 + (1 / 255) ** 2 / 12 + 0.3 / 20_000)
    # 150 before the clock had its own model of events; 168 is left
    assert abs(rig.offset_us.value + 5_300) < min(170, 2 * rig.offset_us.uncertainty)


def test_the_real_recording_is_told_within_what_was_measured_on_it(recordings):
    # The recording's own note: events lag by 6 to 7 ms; thresholds 0.22 to 0.31 in ln(grey + 5)
    from enhance.read import open_events, open_frames
    from enhance.recording import Recording
    from enhance.settings import EventsSettings, FramesSettings

    street = recordings / "street"
    settings = FramesSettings(source=street / "frames", times=street / "frames.csv", light_curve="linear")
    frames = open_frames(settings)
    events = open_events(EventsSettings(source=street / "events.npz"), frames.full_size)
    rig = calibrate(Recording("street", frames, events), range(len(frames)), RigSettings())
    assert -7_200 < rig.offset_us.value < -6_000
    assert 0.15 < rig.contrast_positive.value < 0.5
    assert 0.15 < rig.contrast_negative.value < 0.5


def test_a_recording_one_pixel_high_is_told_or_refused_but_never_breaks(simulated):
    recording = simulated("plain").recording
    frames, seen = recording.frames, recording.events.events
    row = seen.keep(seen.y == 30)
    line = Events(row.t_us, row.x, np.zeros_like(row.y), row.polarity)
    cut = FrameArray(frames.codes[:, 30:31], frames.start_us, frames.end_us, frames.light)
    events = EventArray(
        line, (frames.full_size[0], 1), (recording.events.cover_start_us, recording.events.cover_end_us)
    )
    rig = calibrate(replace(recording, frames=cut, events=events), range(len(cut)), RigSettings(unknown="frames"))
    assert rig.offset_us.value is None or abs(rig.offset_us.value + 5_300) < 3_000
