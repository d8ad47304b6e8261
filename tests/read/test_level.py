"""The level of no light, and the ceiling: a dark frame is subtracted in linear light, what is clipped is marked."""

from dataclasses import replace

import cv2
import numpy as np
import pytest

from enhance.errors import FramesError
from enhance.light import Light
from enhance.read import open_frames
from enhance.settings import FramesSettings

DARK = np.random.default_rng(2).integers(0, 30, (16, 20)).astype(np.uint8)


@pytest.fixture
def settings(tmp_path):
    (tmp_path / "frames").mkdir()
    frame = DARK + np.uint8(100)
    frame[3, 4] = 255
    cv2.imwrite(str(tmp_path / "frames" / "0.png"), frame)
    cv2.imwrite(str(tmp_path / "dark.png"), DARK)
    (tmp_path / "frames.csv").write_text("frame,start_us,end_us\n0,0,10\n")
    return FramesSettings(
        tmp_path / "frames", tmp_path / "frames.csv", light_curve="linear", dark=tmp_path / "dark.png"
    )


def test_a_dark_frame_is_taken_out_before_anything_else(settings):
    image = open_frames(settings).frame(0).image
    image[3, 4] = 100 / 255
    assert image == pytest.approx(np.full((16, 20), 100 / 255), abs=1e-6)


def test_a_dark_frame_is_cropped_with_the_frames(settings):
    part = open_frames(replace(settings, crop=(5, 6, 8, 9))).frame(0).image
    assert part == pytest.approx(np.full((9, 8), 100 / 255), abs=1e-6)


def test_a_dark_frame_is_taken_out_in_linear_light(settings):
    light = Light("srgb")
    image = open_frames(replace(settings, light_curve="srgb")).frame(0).image
    assert image[0, 0] == pytest.approx(light.to_linear(DARK[0, 0] + 100.0) - light.to_linear(DARK[0, 0]), abs=1e-6)


def test_pixels_at_the_ceiling_are_marked_before_the_dark_frame_is_taken_out(settings):
    assert np.argwhere(open_frames(settings).frame(0).clipped).tolist() == [[3, 4]]
    # 12 bit in a 16 bit file: what is above full scale is clipped as well
    assert open_frames(replace(settings, white=120)).frame(0).clipped.sum() == (DARK >= 20).sum() + (DARK[3, 4] < 20)


def test_a_frame_with_nothing_clipped_says_so(settings):
    assert open_frames(replace(settings, crop=(5, 6, 8, 9))).frame(0).clipped is None


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (np.zeros((16, 21), np.uint8), "the dark frame is 21 x 16, 1 channels of 8 bit, the frames are 20 x 16"),
        (np.zeros((16, 20), np.uint16), "1 channels of 16 bit, the frames are 20 x 16, 1 channels of 8 bit"),
        (np.zeros((16, 20, 3), np.uint8), "3 channels of 8 bit, the frames are 20 x 16, 1 channels of 8 bit"),
        (np.full((16, 20), 90, np.uint8), "median is 0.35 of full scale, expected below 0.25.*Cover the lens"),
    ],
)
def test_a_dark_frame_that_cannot_be_one_is_refused(settings, content, message):
    cv2.imwrite(str(settings.dark), content)
    with pytest.raises(FramesError, match=message):
        open_frames(settings)


def test_a_dark_frame_that_is_missing_or_no_picture_is_an_error(settings, tmp_path):
    with pytest.raises(FramesError, match=r"none.png is not there, or no file. Check frames.dark"):
        open_frames(replace(settings, dark=tmp_path / "none.png"))
    with pytest.raises(FramesError, match=r"frames.csv is no PNG, TIFF or JPEG file; expected one picture"):
        open_frames(replace(settings, dark=tmp_path / "frames.csv"))
