"""Raw pictures: every pattern against known colours, at every depth, and cropped anywhere."""

from dataclasses import replace

import cv2
import numpy as np
import pytest

from enhance.errors import FramesError
from enhance.read import open_frames
from enhance.read.mosaic import demosaic
from enhance.settings import FramesSettings

PATTERNS = ("RGGB", "BGGR", "GRBG", "GBRG")
COLOUR = {"R": 0.1, "G": 0.5, "B": 0.8}


def seen_through(pattern, colour):
    """Let each pixel see its own colour, (H, W, 3) to (H, W)."""
    raw = np.empty(colour.shape[:2], colour.dtype)
    for place, name in enumerate(pattern):
        rows, columns = slice(place // 2, None, 2), slice(place % 2, None, 2)
        raw[rows, columns] = colour[rows, columns, "RGB".index(name)]
    return raw


def recorded(folder, raw, **options):
    (folder / "frames").mkdir()
    assert cv2.imwrite(str(folder / "frames" / "0.png"), raw)
    (folder / "frames.csv").write_text("frame,start_us,end_us\n0,0,10\n")
    return FramesSettings(folder / "frames", folder / "frames.csv", light_curve="linear", **options)


@pytest.mark.parametrize("pattern", PATTERNS)
@pytest.mark.parametrize(
    ("dtype", "white"), [(np.uint8, 255), (np.uint16, 1023), (np.uint16, 4095), (np.uint16, 65535)]
)
def test_a_mosaic_of_one_colour_gives_that_colour_everywhere(tmp_path, pattern, dtype, white):
    flat = np.broadcast_to(np.rint(np.array(list(COLOUR.values())) * white).astype(dtype), (14, 18, 3))
    frames = open_frames(recorded(tmp_path, seen_through(pattern, flat), mosaic=pattern, white=white))
    assert frames.shape == (14, 18, 3)
    # pattern mixed up: red would read 0.8 for 0.1
    assert np.abs(frames.frame(0).image - flat / white).max() < 1e-6


@pytest.mark.parametrize("pattern", PATTERNS)
def test_a_pixels_own_colour_is_kept(pattern):
    colour = np.random.default_rng(4).integers(0, 4096, (12, 16, 3)).astype(np.uint16)
    raw = seen_through(pattern, colour)
    made = demosaic(raw, pattern)
    # the outermost pixels are copies of their neighbours
    assert np.array_equal(seen_through(pattern, made)[1:-1, 1:-1], raw[1:-1, 1:-1])


@pytest.mark.parametrize("corner", [(0, 0), (1, 0), (0, 1), (5, 3)])
def test_a_crop_at_any_corner_keeps_the_colours(tmp_path, corner):
    rng = np.random.default_rng(9)
    small = rng.random((6, 8, 3)).astype(np.float32)
    colour = np.rint(cv2.resize(small, (32, 24), interpolation=cv2.INTER_CUBIC).clip(0, 1) * 255).astype(np.uint8)
    settings = recorded(tmp_path, seen_through("GRBG", colour), mosaic="GRBG")
    whole = open_frames(settings).frame(0).image
    cut = open_frames(replace(settings, crop=(*corner, 12, 10)))
    x, y = corner
    assert np.array_equal(cut.frame(0).image, whole[y : y + 10, x : x + 12])
    assert (cut.crop_origin, cut.full_size) == (corner, (32, 24))


def test_what_is_filled_in_from_a_clipped_pixel_counts_as_clipped(tmp_path):
    raw = np.full((12, 12), 100, np.uint8)
    raw[5, 6] = 255
    clipped = open_frames(recorded(tmp_path, raw, mosaic="RGGB", crop=(3, 3, 8, 8))).frame(0).clipped
    assert np.argwhere(clipped).tolist() == [[y, x] for y in (1, 2, 3) for x in (2, 3, 4)]


def test_colour_pictures_are_no_mosaic(tmp_path):
    with pytest.raises(FramesError, match="frames.mosaic is RGGB, but the pictures have 3 channels.*leave the key out"):
        open_frames(recorded(tmp_path, np.zeros((8, 8, 3), np.uint8), mosaic="RGGB"))


def test_a_picture_too_small_for_the_pattern_is_refused(tmp_path):
    with pytest.raises(FramesError, match="the pictures are 8 x 3; expected at least 4 x 4"):
        open_frames(recorded(tmp_path, np.zeros((3, 8), np.uint8), mosaic="RGGB"))
