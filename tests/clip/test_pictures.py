"""Pictures at any instant of a pass: keys where they stand, events between, frames alone where no event tells."""

from dataclasses import replace

import numpy as np
import pytest

from enhance.clip.keys import Keys
from enhance.clip.pictures import Pictures
from enhance.kernels.optical_flow import frame_only_picture
from enhance.recording import By, EventArray, Kind
from enhance.rig import Quantity, Rig, RiggedEvents
from enhance.simulate import Camera, EventSensor, make_scene, simulate

SIZE = (64, 48)
RIG = Rig(Quantity(1_000), Quantity(0.0), Quantity(0.2), Quantity(0.23), Quantity(700), sensor_size=SIZE)


@pytest.fixture(scope="module")
def recorded():
    scene = make_scene("parts", SIZE, np.random.default_rng(3), 400.0)
    camera = Camera(rate_hz=40.0, exposure_us=10_000, start_us=5_000)
    return simulate(scene, camera, EventSensor(0.2, 0.23, mismatch=0.03, noise_hz=0.5), 0.16, 5, clock_offset_us=1_000)


def pictures_of(recording, cover=None, rig=RIG, indices=None):
    """Pictures by the analytic blend; `cover` in the frame clock."""
    source = recording.events
    if cover:
        start, end = (t - 1_000 for t in cover)
        source = EventArray(source.between(start, end), source.size, (start, end))
    events = RiggedEvents(source, rig, SIZE) if rig.offset_us.value is not None else None
    indices = range(len(recording.frames)) if indices is None else indices
    return Pictures(Keys(recording.frames, indices, events, rig))


def mse(picture, truth):
    return float(np.mean((picture - truth) ** 2))


def test_at_a_keys_time_the_picture_is_the_key_itself(recorded):
    pictures = pictures_of(recorded.recording)
    for key in range(len(pictures.keys)):
        assert pictures.at(pictures.keys.times_us[key]) is pictures.keys.picture(key)


def test_between_keys_a_picture_is_inserted_by_the_integral_and_beats_the_blend(recorded):
    pictures = pictures_of(recorded.recording)
    times = pictures.keys.times_us
    time_us = (times[2] + times[3]) // 2
    picture = pictures.at(time_us)
    assert (picture.kind, picture.by, picture.time_us) == (Kind.INSERTED, By.INTEGRAL, time_us)
    assert picture.image.dtype == np.float32
    assert picture.image.shape == SIZE[::-1]
    truth = recorded.truth(time_us)
    blend = 0.5 * (recorded.recording.frames.frame(2).image + recorded.recording.frames.frame(3).image)
    # 6 dB
    assert mse(picture.image, truth) < 0.25 * mse(blend, truth)


def test_pictures_are_the_same_bytes_in_any_order(recorded):
    first, last = 12_000, 120_000
    times = list(range(first, last, 9_000))
    rising = pictures_of(recorded.recording)
    expected = {t: rising.at(t).image.tobytes() for t in times}
    for order in (times[::-1], times[3:4], [times[k] for k in np.random.default_rng(1).permutation(len(times))]):
        pictures = pictures_of(recorded.recording)
        for t in order:
            assert pictures.at(t).image.tobytes() == expected[t]


def test_a_span_that_events_do_not_cover_is_moved_by_the_frames_alone(recorded):
    frames = recorded.recording.frames
    # from the second key's exposure on: the first span is not covered
    pictures = pictures_of(recorded.recording, cover=(int(frames.start_us[1]), 160_000))
    times = pictures.keys.times_us
    time_us = times[0] + (times[1] - times[0]) // 4
    picture = pictures.at(time_us)
    assert (picture.kind, picture.by) == (Kind.INSERTED, By.FRAMES)
    left, right = pictures.keys.picture(0), pictures.keys.picture(1)
    assert left.kind is Kind.CAPTURED
    expected = frame_only_picture(left.image, right.image, (time_us - times[0]) / (times[1] - times[0]))
    np.testing.assert_array_equal(picture.image, expected)
    assert pictures.at(times[1] + 1).by is By.INTEGRAL


def test_without_a_clock_all_pictures_are_by_the_frames_alone(recorded):
    unknown = replace(RIG, offset_us=Quantity(None, None, "estimate", "no motion"), contrast_positive=Quantity(None))
    pictures = pictures_of(recorded.recording, rig=unknown)
    times = pictures.keys.times_us
    assert {pictures.at(t).by for t in (*times, times[0] + 1, times[3] - 1)} == {By.FRAMES}


def test_next_to_a_key_a_picture_is_nearly_the_key(recorded):
    pictures = pictures_of(recorded.recording)
    time_us = pictures.keys.times_us[2]
    key = pictures.keys.picture(2).image
    for near in (time_us - 1, time_us + 1):
        assert mse(pictures.at(near).image, key) < 2e-4


def test_wider_keys_make_other_pictures_without_touching_the_frames_between(recorded):
    every, second = pictures_of(recorded.recording), pictures_of(recorded.recording, indices=range(0, 6, 2))
    time_us = every.keys.times_us[3]
    assert every.at(time_us).kind is Kind.DEBLURRED
    assert second.at(time_us).kind is Kind.INSERTED
    truth = recorded.truth(time_us)
    blend = 0.5 * (second.keys.picture(1).image + second.keys.picture(2).image)
    assert mse(second.at(time_us).image, truth) < 0.5 * mse(blend, truth)
