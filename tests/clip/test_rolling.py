"""Pictures of a rolling shutter: one instant each, and held-out frames re-exposed row by row."""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from enhance.clip.held_out import judge
from enhance.clip.keys import Keys
from enhance.clip.pictures import Pictures
from enhance.measure import psnr
from enhance.recording import EventArray, Kind
from enhance.rig import Quantity, Rig, RiggedEvents
from enhance.rows import row_delays_us
from enhance.simulate import Camera, EventSensor, make_scene, simulate

SIZE = (96, 96)
FRAMES = 7


@cache
def recorded(row_time, exposure_us=10_000, color=False):
    camera = Camera(rate_hz=40.0, exposure_us=exposure_us, start_us=24_000, row_time_us=row_time)
    scene = make_scene("texture", SIZE, np.random.default_rng(3), 900.0, color=color)
    return simulate(scene, camera, EventSensor(0.2, 0.22, mismatch=0.02), 0.21, 3)


def keys_of(simulated, indices=range(FRAMES), row_time=None, cover=None, sharp=False):
    frames, events = simulated.recording.frames, simulated.recording.events
    row_time = simulated.camera.row_time_us if row_time is None else row_time
    rig = Rig(
        Quantity(0),
        Quantity(0.0),
        Quantity(0.2),
        Quantity(0.22),
        ramp_us=Quantity(0 if sharp else 1_500),
        sensor_size=SIZE,
        row_time_us=Quantity(row_time),
    )
    if sharp:
        frames = replace(frames, end_us=frames.start_us)
    if cover:
        events = EventArray(events.events, SIZE, cover)
    return Keys(frames, indices, RiggedEvents(events, rig, SIZE), rig)


def quality(simulated, picture):
    return psnr(simulated.truth(picture.time_us), np.clip(picture.image, 0, 1), 1.0)


@pytest.mark.parametrize("row_time", [180.0, -180.0])
@pytest.mark.parametrize("color", [False, True])
def test_a_key_shows_all_its_rows_at_its_middle_rows_time(row_time, color):
    simulated = recorded(row_time, color=color)
    keys = keys_of(simulated)
    key = keys.picture(3)
    assert key.kind is Kind.DEBLURRED
    assert key.time_us == simulated.recording.frames.start_us[3] + 5_000 + 48 * row_time
    # taken for a global shutter's, the outer rows are displaced by half a readout's motion
    wrong = keys_of(simulated, row_time=0.0).picture(3)
    captured = simulated.recording.frames.frame(3)
    best = max(psnr(simulated.truth(key.time_us), image, 1.0) for image in (captured.image, np.clip(wrong.image, 0, 1)))
    assert quality(simulated, key) > best + 6


def test_rows_far_from_the_middle_are_nearly_as_good_as_those_beside_it():
    simulated = recorded(180.0)
    key = keys_of(simulated).picture(3)
    error = np.square(simulated.truth(key.time_us) - key.image).mean(axis=1)
    outer = np.concatenate([error[:12], error[-12:]]).mean()
    assert 10 * np.log10(outer / error[36:60].mean()) < 5


def test_sharp_frames_are_brought_to_one_instant_too():
    # exposure 0 says the frames are sharp; here they were exposed for 300 us, a quarter of a pixel
    simulated = recorded(180.0, exposure_us=300)
    key = keys_of(simulated, sharp=True).picture(3)
    captured = simulated.recording.frames.frame(3).image
    assert key.kind is Kind.DEBLURRED
    assert quality(simulated, key) > psnr(simulated.truth(key.time_us), captured, 1.0) + 6


def test_sharp_frames_of_a_global_shutter_stay_as_captured():
    simulated = recorded(0.0, exposure_us=300)
    assert keys_of(simulated, sharp=True).picture(3).kind is Kind.CAPTURED


def test_a_key_is_deblurred_only_if_every_row_of_it_is_covered():
    simulated = recorded(180.0)
    start = int(simulated.recording.frames.start_us[2])
    end = start + 10_000 + int(180.0 * 95)
    assert keys_of(simulated, cover=(start, end)).picture(2).kind is Kind.DEBLURRED
    assert keys_of(simulated, cover=(start, end - 2_000)).picture(2).kind is Kind.CAPTURED
    assert keys_of(simulated, cover=(start + 2_000, end)).picture(2).kind is Kind.CAPTURED


def test_a_held_out_frame_is_re_exposed_row_by_row():
    simulated = recorded(180.0)
    pictures = Pictures(keys_of(simulated, range(0, FRAMES, 2)))
    judged = judge(pictures, 3)
    assert judged.picture.time_us == simulated.recording.frames.start_us[3] + 5_000 + 48 * 180
    # the truth itself, re-exposed as one instant's picture, misses the frame's skew
    held = simulated.recording.frames.frame(3).image
    skewless = psnr(held, simulated.truth(judged.picture.time_us), 1.0)
    assert judged.figures["psnr"] > skewless + 8
    assert judged.figures["psnr"] > 30


def test_a_row_time_that_moves_no_row_changes_nothing():
    # a ten-thousandth of a microsecond: all delays are floored to 0 or -1 us
    simulated = recorded(0.0)
    tiny = keys_of(simulated, row_time=1e-4)
    assert np.abs(row_delays_us(1e-4, 96)).max() == 1
    plain = keys_of(simulated).picture(3).image
    np.testing.assert_allclose(tiny.picture(3).image, plain, atol=0.03)
