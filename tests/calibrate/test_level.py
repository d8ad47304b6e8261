"""One brightness and one level for all frames: what is found, what is left alone, what counts as no evidence."""

import numpy as np
import pytest

from enhance.calibrate.clipped import ClippedCount, tells_light
from enhance.calibrate.gain import find_gain
from enhance.calibrate.levelled import LevelledFrames, as_tabled
from enhance.calibrate.stripes import find_stripes
from enhance.light import Light
from enhance.recording import Contrast, EventArray, Events, Frame, FrameArray
from enhance.simulate import Camera, EventSensor, make_scene, simulate

CONTRAST = Contrast(0.2, 0.2)
SIZE = (96, 72)


def pictures(factors, noise=0.002):
    """Smooth pictures that differ by a factor only, 16 bit."""
    rng = np.random.default_rng(8)
    x, y = np.meshgrid(np.linspace(0, 3, SIZE[0]), np.linspace(0, 2, SIZE[1]))
    light = 0.35 + 0.2 * np.sin(x + y)
    return np.stack(
        [np.rint(65535 * (f * light + rng.normal(0, noise, light.shape))).astype(np.uint16) for f in factors]
    )


def frames_of(codes, lengths=10_000, gains=None):
    starts = np.arange(len(codes), dtype=np.int64) * 40_000
    return FrameArray(codes, starts, starts + lengths, Light("linear", 0, 65535), gains=gains)


def events_of(t_us=(), x=(), y=()):
    columns = np.asarray(t_us, np.int64), np.asarray(x, np.uint16), np.asarray(y, np.uint16)
    return EventArray(Events(*columns, np.ones(len(columns[0]), np.int8)), SIZE, (0, 10**6))


class TestTable:
    def test_light_goes_with_exposure_and_gain(self):
        # 5 ms at gain 2 is 10 ms at gain 1; 10 ms at gain 2 is twice as much
        lengths, gains = np.array([10_000, 5_000, 10_000]), np.array([1.0, 2.0, 2.0])
        frames = as_tabled(frames_of(pictures((0.5, 0.5, 1.0), noise=0), lengths, gains))
        images = [frames.frame(i).image for i in range(3)]
        assert images[1] == pytest.approx(images[0], abs=2e-5)
        assert images[2] == pytest.approx(images[0], abs=2e-5)
        assert [frames.frame(i).scale for i in range(3)] == [1, 1, 2]
        assert "exposures run from 5.000 to 10.000 ms, gains from 1 to 2" in frames.notes[-1]

    def test_equal_frames_and_a_tables_jitter_are_left_as_they_are(self):
        codes = pictures((1, 1, 1))
        for lengths in (10_000, np.array([10_000, 10_040, 9_980])):
            frames = frames_of(codes, lengths)
            assert as_tabled(frames) is frames

    def test_a_frame_without_length_tells_no_exposure(self):
        frames = frames_of(pictures((1, 1, 1)), np.array([0, 10_000, 5_000]))
        assert as_tabled(frames) is frames


class TestGain:
    def test_a_step_that_no_event_saw_is_found_to_a_thousandth(self):
        scale, quantity, _ = find_gain(frames_of(pictures((1, 1, 1.3, 1.3, 1))), range(5), events_of(), CONTRAST)
        assert [frame for frame, _ in quantity.value] == [2, 4]
        assert [factor for _, factor in quantity.value] == pytest.approx([1.3, 1 / 1.3], rel=1e-3)
        assert scale == pytest.approx([1, 1, 1.3, 1.3, 1], rel=1e-3)

    def test_light_that_events_saw_change_is_no_step(self):
        # one event of 0.2 at every pixel explains a factor of e^0.2
        y, x = np.divmod(np.arange(SIZE[0] * SIZE[1]), SIZE[0])
        seen = events_of(np.full(len(x), 25_000), x, y)
        scale, quantity, _ = find_gain(frames_of(pictures((1, np.exp(0.2)))), range(2), seen, CONTRAST)
        assert quantity.value == []
        assert scale.tolist() == [1, 1]

    def test_a_shadow_over_half_the_picture_is_no_step(self):
        codes = pictures((1, 1))
        codes[1, :, :48] = (codes[1, :, :48] * 0.8).astype(np.uint16)
        assert find_gain(frames_of(codes), range(2), events_of(), CONTRAST)[1].value == []

    def test_steps_below_two_percent_are_left_alone(self):
        assert find_gain(frames_of(pictures((1, 1.015))), range(2), events_of(), CONTRAST)[1].value == []

    def test_a_held_out_frame_tells_only_its_own_scale(self):
        one = find_gain(frames_of(pictures((1, 1.5, 1.3))), [0, 2], events_of(), CONTRAST)[0]
        other = find_gain(frames_of(pictures((1, 0.7, 1.3))), [0, 2], events_of(), CONTRAST)[0]
        assert (one[0], one[2]) == (other[0], other[2])
        assert (one[1], other[1]) == (pytest.approx(1.5, rel=2e-3), pytest.approx(0.7, rel=2e-3))

    def test_without_a_clock_nothing_can_be_told(self):
        scale, quantity, _ = find_gain(frames_of(pictures((1, 1.5))), range(2), None, None)
        assert quantity.value is None
        assert "clock of the events is not known" in quantity.evidence
        assert scale.tolist() == [1, 1]


class TestStripes:
    def recorded(self, kind, seed, stripes):
        scene = make_scene(kind, (160, 120), np.random.default_rng(seed), 700.0)
        camera = Camera(rate_hz=30, exposure_us=15_000, start_us=12_000, stripes=stripes)
        return simulate(scene, camera, EventSensor(0.9, 0.9), 0.2, seed).recording.frames

    def test_offsets_of_columns_are_found(self):
        offset, quantity = find_stripes(self.recorded("thin", 6, 0.01), range(6))
        truth = 0.01 * np.random.default_rng(77).standard_normal(160)
        # 160 columns: their root mean square is within a sixth of 0.01
        assert quantity.value == pytest.approx(0.01, rel=0.25)
        assert np.corrcoef(offset, truth)[0, 1] > 0.9

    @pytest.mark.parametrize(("kind", "seed"), [("texture", 2), ("label", 4), ("parts", 1)])
    def test_a_scene_without_stripes_is_left_alone(self, kind, seed):
        offset, quantity = find_stripes(self.recorded(kind, seed, 0.0), range(6))
        assert offset is None
        assert (quantity.value, quantity.evidence[:4]) == (0, "none")

    def test_frames_too_small_say_so(self):
        assert "too small" in find_stripes(frames_of(pictures((1, 1))[:, :, :40]), range(2))[1].evidence


def test_offset_and_scale_are_taken_out_in_this_order():
    codes = np.full((2, 4, 4), 30_000, np.uint16)
    frames = LevelledFrames(frames_of(codes), np.array([1.0, 2.0]), np.float32([0.1, 0, 0, 0]))
    light = 30_000 / 65535
    assert frames.frame(1).image[0] == pytest.approx([(light - 0.1) / 2, light / 2, light / 2, light / 2], abs=1e-6)
    # levelled again: the offset is light as captured
    again = LevelledFrames(frames, offset=np.float32([-0.1, 0, 0, 0]))
    assert again.frame(1).image[0] == pytest.approx([light / 2] * 4, abs=1e-6)
    assert again.frame(1).scale == 2


def test_dark_and_clipped_pixels_tell_no_light_however_they_are_scaled():
    image = np.float32([[0.3, 0.25, 0.005, 0.49]])
    frame = Frame(image, 0, 10, scale=2.0, clipped=np.array([[False, True, False, False]]))
    assert tells_light(frame).tolist() == [[True, False, False, False]]


def test_clipped_pixels_are_counted():
    count = ClippedCount()
    count.add(Frame(np.float32([[0.3, 0, -0.1, 1]]), 0, 10, clipped=np.array([[False, False, False, True]])))
    count.add(Frame(np.float32([[0.3, 0.2, 0.1, 0.5]]), 40, 50))
    assert (count.frames, count.pixels, count.ceiling, count.floor, count.most_at_us) == (2, 8, 1, 2, 5)
