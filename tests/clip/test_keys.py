"""Keys: each frame that is used, as one sharp picture that depends on its window alone."""

from dataclasses import dataclass, replace

import numpy as np
import pytest

from enhance.clip.keys import Keys
from enhance.deblur import WINDOW
from enhance.light import Light
from enhance.recording import By, EventArray, Events, FrameArray, Kind, Recording
from enhance.rig import Quantity, Rig, RiggedEvents
from enhance.simulate import Camera, EventSensor, make_scene, simulate

SIZE = (64, 48)
RIG = Rig(Quantity(-3_000), Quantity(0.0), Quantity(0.2), Quantity(0.23), Quantity(700), sensor_size=SIZE)
COUNT = 2 * WINDOW + 5


@pytest.fixture(scope="module")
def recorded():
    scene = make_scene("texture", SIZE, np.random.default_rng(4), 500.0)
    camera = Camera(rate_hz=50.0, exposure_us=12_000, start_us=5_000)
    sensor = EventSensor(0.2, 0.23, mismatch=0.03, noise_hz=0.5)
    return simulate(scene, camera, sensor, COUNT * 0.02, 5, clock_offset_us=-3_000)


def keys_of(recording: Recording, indices=None, rig=RIG):
    height, width = recording.frames.shape[:2]
    events = RiggedEvents(recording.events, rig, (width, height)) if rig.offset_us.value is not None else None
    return Keys(recording.frames, range(len(recording.frames)) if indices is None else indices, events, rig)


def covering(recording, start_us, end_us):
    """The same recording by a sensor that recorded only for a while (event clock)."""
    source = recording.events
    seen = source.between(start_us, end_us)
    return replace(recording, events=EventArray(seen, source.size, (start_us, end_us)))


def mse(picture, truth):
    return float(np.mean((picture[8:-8, 8:-8] - truth[8:-8, 8:-8]) ** 2))


def test_a_key_is_sharper_than_its_frame(recorded):
    keys = keys_of(recorded.recording)
    for key in (0, 9, len(keys) - 1):
        picture = keys.picture(key)
        truth = recorded.truth(picture.time_us)
        assert (picture.kind, picture.by) == (Kind.DEBLURRED, By.INTEGRAL)
        assert picture.image.dtype == np.float32
        assert picture.time_us == keys.times_us[key] == recorded.recording.frames.frame(key).time_us
        # 7 dB, at the ends of the recording too
        assert mse(picture.image, truth) < 0.2 * mse(recorded.recording.frames.frame(key).image, truth)


def test_neighbours_lend_a_key_their_light(recorded):
    alone = keys_of(recorded.recording, [9]).picture(0)
    among = keys_of(recorded.recording).picture(9)
    truth = recorded.truth(alone.time_us)
    assert mse(among.image, truth) < mse(alone.image, truth)


def test_a_key_gives_the_same_bytes_whatever_was_asked_before(recorded):
    fresh = keys_of(recorded.recording).picture(10).image.tobytes()
    for order in (range(COUNT - 2), range(COUNT - 3, -1, -1), [10, 0, 20, 3, 10]):
        keys = keys_of(recorded.recording)
        for key in order:
            picture = keys.picture(key)
            if key == 10:
                assert picture.image.tobytes() == fresh
        assert keys.picture(10).image.tobytes() == fresh


def test_a_key_is_a_function_of_its_window_only(recorded):
    # frames and events further away than the window may be anything at all
    recording = recorded.recording
    frames = recording.frames
    codes = frames.codes.copy()
    codes[:2] = codes[2 * WINDOW + 3 :] = 7
    start, end = int(frames.start_us[2]) + 3_000, int(frames.end_us[2 * WINDOW + 2]) + 3_000
    # a ramp beyond the exposures counts as well
    near = covering(replace(recording, frames=replace(frames, codes=codes)), start - 2_000, end + 2_000)
    key = WINDOW + 2
    assert keys_of(near).picture(key).image.tobytes() == keys_of(recording).picture(key).image.tobytes()


def test_frames_that_are_no_keys_are_never_decoded(recorded):
    @dataclass(frozen=True)
    class Even(FrameArray):
        def frame(self, index):
            assert index % 2 == 0, f"frame {index} is no key"
            return super().frame(index)

    frames = recorded.recording.frames
    even = Even(frames.codes, frames.start_us, frames.end_us, frames.light)
    keys = keys_of(replace(recorded.recording, frames=even), range(0, COUNT - 1, 2))
    assert [keys.picture(key).kind for key in range(len(keys))] == [Kind.DEBLURRED] * len(keys)


def test_an_exposure_that_events_do_not_cover_stays_as_captured(recorded):
    frames = recorded.recording.frames
    # the sensor begins in the middle of frame 4's exposure and stops a millisecond before the end of frame 12
    part = covering(recorded.recording, int(frames.start_us[4]) + 6_000 + 3_000, int(frames.end_us[12]) - 1_000 + 3_000)
    keys = keys_of(part)
    for key in (0, 4, 12, 15):
        picture = keys.picture(key)
        assert (picture.kind, picture.by) == (Kind.CAPTURED, By.FRAMES)
        np.testing.assert_array_equal(picture.image, frames.frame(key).image)
    assert [keys.covered(key) for key in (4, 5, 11, 12)] == [False, True, True, False]
    assert [keys.span_covered(key) for key in (3, 4, 11, 12)] == [False, True, True, False]
    # a covered key beside uncovered ones is still made well
    picture = keys.picture(5)
    truth = recorded.truth(picture.time_us)
    assert picture.kind is Kind.DEBLURRED
    assert mse(picture.image, truth) < 0.2 * mse(frames.frame(5).image, truth)


def test_exactly_covered_is_covered(recorded):
    frames = recorded.recording.frames
    part = covering(recorded.recording, int(frames.start_us[4]) + 3_000, int(frames.end_us[12]) + 3_000)
    assert [keys_of(part).covered(key) for key in (3, 4, 12, 13)] == [False, True, True, False]


def test_without_a_clock_every_key_stays_as_captured(recorded):
    unknown = replace(RIG, offset_us=Quantity(None, None, "estimate", "no motion"), contrast_positive=Quantity(None))
    keys = keys_of(recorded.recording, rig=unknown)
    picture = keys.picture(3)
    assert (picture.kind, picture.by) == (Kind.CAPTURED, By.FRAMES)
    np.testing.assert_array_equal(picture.image, recorded.recording.frames.frame(3).image)
    assert not keys.span_covered(3)


def test_a_frame_that_counts_as_sharp_is_never_changed(recorded):
    frames = recorded.recording.frames
    middle = (frames.start_us + frames.end_us) // 2
    sharp = replace(frames, start_us=middle, end_us=middle)
    picture = keys_of(replace(recorded.recording, frames=sharp)).picture(3)
    assert picture.kind is Kind.CAPTURED
    np.testing.assert_array_equal(picture.image, frames.frame(3).image)


def test_a_key_at_which_no_event_fires_keeps_its_light(recorded):
    frames = recorded.recording.frames
    still = FrameArray(np.repeat(frames.codes[:1], COUNT - 1, axis=0), frames.start_us, frames.end_us, frames.light)

    class Silent(EventArray):
        first_us = last_us = 0

    silent = Silent(Events.none(), SIZE, (0, 10_000_000))
    keys = keys_of(Recording("still", still, silent), rig=replace(RIG, offset_us=Quantity(0)))
    np.testing.assert_allclose(keys.picture(5).image, frames.frame(0).image, atol=2e-6)


def test_colour_keys_change_all_channels_by_one_ratio(recorded):
    frames = recorded.recording.frames
    codes = np.stack([frames.codes, frames.codes // 2, frames.codes // 4], axis=-1)
    light = Light("linear", 0.0, 255.0)
    colour = FrameArray(codes, frames.start_us, frames.end_us, light)
    picture = keys_of(replace(recorded.recording, frames=colour)).picture(9).image
    floor = 1 / 255
    ratio = (picture + floor) / (np.maximum(colour.frame(9).image, 0) + floor)
    np.testing.assert_allclose(ratio, ratio[..., :1].repeat(3, axis=2), rtol=1e-4)
    assert picture.shape == (48, 64, 3)
    assert picture.dtype == np.float32
