"""The caption strip."""

from fractions import Fraction
from pathlib import Path

import av
import numpy as np
import pytest

from enhance.light import Light
from enhance.recording import Kind
from enhance.write import ClipWriter, caption_line
from enhance.write.strip import draw_strip, strip_rows

LONG = caption_line(1_234_567_890, Kind.DEBLURRED, 28.88, low=True)


def test_a_caption_says_when_what_and_how_good():
    assert caption_line(12_345_678, Kind.INSERTED, 34.14) == "t = 12.345678 s   inserted   expected 34.1 dB"
    assert caption_line(-5, Kind.INSERTED, None) == "t = -0.000005 s   inserted   expected: not known"
    assert caption_line(0, Kind.CAPTURED, None) == "t = 0.000000 s   captured"
    assert caption_line(0, Kind.INSERTED, 28.3, low=True) == "t = 0.000000 s   inserted   expected 28.3 dB, LOW"


@pytest.mark.parametrize("width", [100, 160, 346, 640, 1280, 1920, 3840])
def test_the_longest_caption_fits_inside_the_strip(width):
    check_that_it_fits(width, LONG)
    check_that_it_fits(width, caption_line(1_234_567_890, Kind.DEBLURRED, None))


def check_that_it_fits(width: int, caption: str) -> None:
    band = draw_strip(width, caption)
    rows = strip_rows(width)
    assert band.shape == (rows, width)
    assert rows % 2 == 0
    ink = band > 0.5
    assert ink.sum() > 100
    margins = [ink[0], ink[-1], ink[:, 0], ink[:, -1]]
    assert not any(margin.any() for margin in margins)


def test_different_captions_look_different_and_none_is_dark():
    one, other = (draw_strip(346, caption_line(t, Kind.INSERTED, 30.0)) for t in (1_000_000, 7_000_000))
    assert (one != other).any()
    assert draw_strip(346, "").max() < 0.1


@pytest.mark.parametrize("suffix", [".mp4", ".mkv"])
@pytest.mark.parametrize("shape", [(64, 120), (65, 121, 3)])
def test_the_strip_stands_below_the_picture_and_never_on_it(tmp_path: Path, suffix, shape):
    codec = "h264" if suffix == ".mp4" else "ffv1"
    image = np.full(shape, 0.5, np.float32)
    for name, strip in (("plain", False), ("strip", True)):
        with ClipWriter(tmp_path / f"{name}{suffix}", codec, shape, Light("srgb"), Fraction(30), {}, strip) as clip:
            clip.add(image, 0, LONG)
    grey = {}
    for name in ("plain", "strip"):
        with av.open(str(tmp_path / f"{name}{suffix}")) as container:
            # one thread: with more, this conversion leaves some rows unfilled now and then
            frame = next(container.decode(video=0)).reformat(format="gray16le", threads=1)
            grey[name] = frame.to_ndarray().astype(int) / 65535
    height, width = shape[:2]
    even = 2 if codec == "h264" else 1
    assert grey["strip"].shape[0] == -(-(height + strip_rows(width)) // even) * even
    assert np.abs(grey["strip"][:height, :width] - grey["plain"][:height, :width])[:-2].max() < 0.02
    below = grey["strip"][height : height + strip_rows(width)]
    assert np.median(below) < 0.15
    assert below.max() > 0.6
