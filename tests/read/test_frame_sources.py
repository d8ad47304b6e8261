"""One contract for every kind of frames: right pictures, right times, light, crop, random access."""

from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

from enhance.errors import FramesError, JobError
from enhance.light import Light
from enhance.read import open_frames
from enhance.settings import FramesSettings

HEIGHT, WIDTH, COUNT = 32, 48, 14
#: Uneven on purpose; about the size of a microsecond count since 1970 for folders, from 0 for videos.
STAMPS = np.cumsum(np.r_[0, np.tile([4001, 39_999, 20_000, 7], 4)])[:COUNT]
EXPOSURE = 5


def pictures(depth, colour):
    """Smooth ramps that differ from picture to picture: they survive lossy codecs, and tell frames apart."""
    top = 2**depth - 1
    across = np.linspace(0.2, 0.7, WIDTH)[None, None, :] + np.linspace(0, 0.25, COUNT)[:, None, None]
    grey = np.broadcast_to(across, (COUNT, HEIGHT, WIDTH))
    shades = np.stack([grey, grey * 0.8, grey * 0.5], axis=-1) if colour else grey
    return np.rint(shades * top).astype(np.uint16 if depth == 16 else np.uint8)


def folder(tmp_path, codes, suffix, **options):
    import cv2

    place = tmp_path / "frames"
    place.mkdir()
    for i, image in enumerate(codes):
        stored = image[..., ::-1] if image.ndim == 3 else image
        assert cv2.imwrite(str(place / f"shot{i}{suffix}"), stored, options.get("flags", []))
    (place / "frames.csv").write_text(
        "frame,time_us\n" + "".join(f"shot{i}{suffix},{t}\n" for i, t in enumerate(STAMPS))
    )
    return FramesSettings(place, times=place / "frames.csv", exposure_us=EXPOSURE, light_curve="linear")


def video(path, codes, codec, pixels, layout, options=None, tags=None):
    import av

    base = Fraction(1, 1_000_000)
    with av.open(str(path), "w") as container:
        stream = container.add_stream(codec, rate=30, options=options or {})
        stream.height, stream.width = codes.shape[1:3]
        stream.pix_fmt, stream.time_base, stream.codec_context.time_base = pixels, base, base
        for name, value in (tags or {}).items():
            setattr(stream.codec_context, name, value)
        for image, pts in zip(codes, STAMPS, strict=False):
            frame = av.VideoFrame.from_ndarray(image, format=layout)
            if pixels.startswith("yuv"):
                frame = frame.reformat(format=pixels, dst_colorspace=1, dst_color_range=1)
            frame.pts, frame.time_base = int(pts), base
            container.mux(stream.encode(frame))
        container.mux(stream.encode())
    return FramesSettings(path, exposure_us=EXPOSURE, light_curve="linear")


BT709 = {"color_trc": 1, "colorspace": 1, "color_primaries": 1, "color_range": 1}


def h264(tmp_path, codes):
    # key frames every 5 pictures and B frames between: decoding order differs from showing order
    return video(tmp_path / "v.mp4", codes, "libx264", "yuv444p", "rgb24", {"g": "5", "bf": "2", "crf": "4"}, BT709)


def ffv1(tmp_path, codes):
    return video(tmp_path / "v.nut", codes, "ffv1", "gray16le", "gray16le", {"level": "3", "slicecrc": "1"})


#: name -> depth, colour, writer, largest difference in codes
KINDS = {
    "png8": (8, False, lambda p, c: folder(p, c, ".png"), 0),
    "png8-colour": (8, True, lambda p, c: folder(p, c, ".png"), 0),
    "png16": (16, False, lambda p, c: folder(p, c, ".png"), 0),
    "png16-colour": (16, True, lambda p, c: folder(p, c, ".PNG"), 0),
    "tiff8": (8, False, lambda p, c: folder(p, c, ".tif"), 0),
    "tiff16": (16, False, lambda p, c: folder(p, c, ".tiff"), 0),
    "tiff16-colour": (16, True, lambda p, c: folder(p, c, ".tif"), 0),
    "jpeg": (8, False, lambda p, c: folder(p, c, ".jpg"), 3),
    "jpeg-colour": (8, True, lambda p, c: folder(p, c, ".jpeg"), 6),
    "ffv1-grey16": (16, False, ffv1, 0),
    "h264": (8, True, h264, 4),
}


class TestEveryKind:
    @pytest.fixture(params=KINDS)
    def footage(self, request, tmp_path):
        depth, colour, write, tolerance = KINDS[request.param]
        codes = pictures(depth, colour)
        return write(tmp_path, codes), codes, tolerance

    @pytest.fixture
    def source(self, footage):
        source = open_frames(footage[0])
        yield source
        source.close()

    def test_pictures_come_back_in_linear_light(self, source, footage):
        _, codes, tolerance = footage
        top = np.iinfo(codes.dtype).max
        assert len(source) == COUNT
        assert source.light == Light("linear", 0, top)
        for i in range(COUNT):
            image = source.frame(i).image
            assert image.dtype == np.float32
            assert image.shape == source.shape == codes.shape[1:]
            assert np.abs(image * top - codes[i]).max() <= tolerance + 0.01

    def test_any_order_gives_the_same_pictures(self, source):
        straight = [source.frame(i).image for i in range(COUNT)]
        for i in np.random.default_rng(3).permutation(np.repeat(np.arange(COUNT), 2)):
            assert np.array_equal(source.frame(int(i)).image, straight[i])

    def test_times_are_exact(self, source):
        assert source.start_us.tolist() == STAMPS.tolist()
        assert source.end_us.tolist() == (STAMPS + EXPOSURE).tolist()
        assert (source.start_us.dtype, source.gain.tolist()) == (np.int64, [1.0] * COUNT)
        frame = source.frame(9)
        assert (frame.start_us, frame.end_us) == (STAMPS[9], STAMPS[9] + EXPOSURE)

    def test_a_crop_is_cut_and_remembered(self, footage):
        settings = footage[0]
        whole = open_frames(settings)
        part = open_frames(replace(settings, crop=(5, 3, 20, 10)))
        assert (part.shape[:2], part.crop_origin, part.full_size) == ((10, 20), (5, 3), (WIDTH, HEIGHT))
        assert np.array_equal(part.frame(2).image, whole.frame(2).image[3:13, 5:25])
        whole.close()
        part.close()

    def test_black_white_and_curve_are_applied(self, footage):
        settings, _, _ = footage
        plain = open_frames(settings)
        top = plain.light.white
        shaped = open_frames(replace(settings, black=10, white=top - 5, light_curve="gamma 2.0"))
        signal = (plain.frame(0).image * top - 10) / (top - 15)
        assert np.allclose(shaped.frame(0).image, signal**2, atol=1e-5)
        plain.close()
        shaped.close()

    @pytest.mark.parametrize("crop", [(-1, 0, 5, 5), (0, 0, 0, 5), (40, 0, 9, 5), (0, 30, 5, 3)])
    def test_a_crop_outside_is_refused(self, footage, crop):
        with pytest.raises(JobError, match=r"frames.crop .* does not lie inside the frames of 48 x 32"):
            open_frames(replace(footage[0], crop=crop))

    def test_codes_outside_the_container_are_refused(self, footage):
        top = np.iinfo(footage[1].dtype).max
        for black, white in ((0, top + 1), (-1, top), (5, 5)):
            with pytest.raises(JobError, match=f"expected 0 <= black < white <= {top}"):
                open_frames(replace(footage[0], black=black, white=white))

    def test_an_unknown_curve_is_refused(self, footage):
        with pytest.raises(JobError, match="frames.light_curve: 'log' is not a light curve"):
            open_frames(replace(footage[0], light_curve="log"))

    def test_a_missing_curve_or_exposure_is_asked_for(self, footage):
        settings = footage[0]
        if settings.source.suffix != ".mp4":
            with pytest.raises(JobError, match=r'frames.light_curve is missing.*Give "linear"'):
                open_frames(replace(settings, light_curve=None))
        with pytest.raises(JobError, match="frames.exposure is missing"):
            open_frames(replace(settings, exposure_us=None))

    def test_an_index_outside_is_an_index_error(self, source):
        for index in (-1, COUNT):
            with pytest.raises(IndexError):
                source.frame(index)


def test_a_source_that_is_not_there(tmp_path):
    with pytest.raises(FramesError, match="is not there. Check frames.source"):
        open_frames(FramesSettings(tmp_path / "none"))


def test_the_real_recording_reads_whole(recordings: Path):
    # counts from the note beside the recording
    place = recordings / "street"
    source = open_frames(FramesSettings(place / "frames", times=place / "frames.csv", light_curve="linear"))
    assert (len(source), source.shape) == (59, (260, 346))
    assert np.all(source.end_us - source.start_us == 500)
    assert source.names[:2] == ("000000.png", "000001.png")
    assert 0 <= source.frame(58).image.min() < source.frame(58).image.max() <= 1
    source.close()
