"""Clips, written and opened again."""

import resource
from fractions import Fraction
from pathlib import Path

import av
import numpy as np
import pytest

from enhance.errors import WriteError
from enhance.light import Light
from enhance.write import ClipWriter, cautions

# Uneven on purpose: a window of factor 8 followed by one of factor 3.
TIMES_US = [0, 33_333, 66_667, 66_700, 1_200_001]
SRGB, RATE = Light("srgb"), Fraction(30)


def picture(shape: tuple[int, ...], value: tuple[float, ...] | float) -> np.ndarray:
    return np.broadcast_to(np.float32(value), shape).copy()


def write_pictures(path: Path, shape, images, times, light=SRGB, rate=RATE, strip=False, caption=None) -> Path:
    codec = "h264" if path.suffix == ".mp4" else "ffv1"
    metadata = {"title": "Bottle line 2", "comment": cautions.SHORT}
    with ClipWriter(path, codec, shape, light, rate, metadata, strip) as clip:
        for image, time_us in zip(images, times, strict=False):
            clip.add(image, time_us, caption)
    return path


def write_clip(path: Path, images, times=TIMES_US, **options) -> Path:
    return write_pictures(path, images[0].shape, images, times, **options)


def decode(path: Path):
    with av.open(str(path)) as container:
        return list(container.decode(video=0))


def planes(frame, name: str) -> list[np.ndarray]:
    assert frame.format.name == name
    return [
        np.frombuffer(plane, np.uint8).reshape(plane.height, plane.line_size)[:, : plane.width]
        for plane in frame.planes
    ]


def noise(count: int, shape: tuple[int, ...]) -> list[np.ndarray]:
    rng = np.random.default_rng(5)
    return [rng.random(shape).astype(np.float32) for _ in range(count)]


class TestMp4:
    def test_the_stream_says_what_it_is(self, tmp_path: Path):
        path = write_clip(tmp_path / "a.mp4", noise(5, (48, 64, 3)))
        with av.open(str(path)) as container:
            stream = container.streams.video[0]
            context = stream.codec_context
            assert (context.name, context.pix_fmt, context.width, context.height) == ("h264", "yuv420p", 64, 48)
            # H.273: 1 is BT.709 in all three, and limited range
            assert (context.color_primaries, context.color_trc, context.colorspace) == (1, 1, 1)
            assert context.color_range == 1
            assert stream.time_base == Fraction(1, 1_000_000)
            assert stream.frames == 5
            assert container.metadata["title"] == "Bottle line 2"
            assert container.metadata["comment"] == cautions.SHORT

    @pytest.mark.parametrize("rate", [Fraction(25), Fraction(30000, 1001), Fraction(1, 2)])
    def test_every_time_is_exact_and_the_last_picture_stands_for_one_period(self, tmp_path: Path, rate):
        path = write_clip(tmp_path / "a.mp4", noise(5, (32, 32)), rate=rate)
        assert [frame.pts for frame in decode(path)] == TIMES_US
        with av.open(str(path)) as container:
            assert container.streams.video[0].duration == TIMES_US[-1] + round(1_000_000 / rate)

    def test_a_single_picture_makes_a_clip(self, tmp_path: Path):
        path = write_clip(tmp_path / "a.mp4", noise(1, (32, 32)))
        assert [frame.pts for frame in decode(path)] == [0]

    def test_a_long_clip_keeps_its_exact_times(self, tmp_path: Path):
        times = [i * 1_000_000 // 30 for i in range(70)]
        path = write_clip(tmp_path / "a.mp4", noise(70, (32, 32)), times)
        assert [frame.pts for frame in decode(path)] == times

    # BT.709 limited range, computed; BT.601 would give 81.48 / 90.20 / 240 for red
    @pytest.mark.parametrize(
        ("colour", "expected"),
        [((1, 0, 0), (62.56, 102.34, 240)), ((0, 0, 1), (31.81, 240, 117.66)), ((1, 1, 1), (235, 128, 128))],
    )
    def test_pure_colours_go_through_the_matrix_of_bt709(self, tmp_path: Path, colour, expected):
        path = write_clip(tmp_path / "a.mp4", [picture((32, 32, 3), colour)] * 2)
        for plane, value in zip(planes(decode(path)[1], "yuv420p"), expected, strict=True):
            assert np.abs(plane - value).max() <= 1.0

    @pytest.mark.parametrize("light", [Light("linear"), Light("srgb", 16, 255)])
    def test_grey_is_encoded_for_display_from_linear_light_whatever_the_frames_curve(self, tmp_path: Path, light):
        # BT.709 OETF of linear 0.18: 0.4090077 (computed with the standard's constants)
        path = write_clip(tmp_path / "a.mp4", [picture((32, 32), 0.18)] * 2, light=light)
        y, cb, cr = planes(decode(path)[0], "yuv420p")
        assert np.abs(y - (16 + 219 * 0.4090077)).max() <= 1.0
        assert (cb == 128).all()
        assert (cr == 128).all()

    def test_light_beyond_the_scale_is_clipped(self, tmp_path: Path):
        path = write_clip(tmp_path / "a.mp4", [picture((32, 32), -0.2), picture((32, 32), 3.0)])
        dark, bright = decode(path)
        assert planes(dark, "yuv420p")[0].max() <= 17
        assert planes(bright, "yuv420p")[0].min() >= 234

    def test_an_odd_size_gains_an_edge_row_and_column(self, tmp_path: Path):
        image = picture((33, 35), 0.2)
        image[-1], image[:, -1] = 0.8, 0.5
        path = write_clip(tmp_path / "a.mp4", [image])
        y = planes(decode(path)[0], "yuv420p")[0].astype(int)
        assert y.shape == (34, 36)
        assert np.abs(y[33, :34] - y[32, :34]).max() <= 4
        assert np.abs(y[:32, 35] - y[:32, 34]).max() <= 4
        assert y[33, 10] > y[31, 10] + 50

    def test_detail_survives(self, tmp_path: Path):
        ramp = np.linspace(0.05, 0.9, 64, dtype=np.float32)
        image = np.outer(0.5 + 0.5 * np.sin(np.arange(48) / 3), ramp).astype(np.float32)
        path = write_clip(tmp_path / "a.mp4", [image] * 3)
        y = planes(decode(path)[2], "yuv420p")[0]
        wanted = 16 + 219 * np.where(image < 0.018, 4.5 * image, 1.099 * image**0.45 - 0.099)
        assert np.sqrt(np.mean((y - wanted) ** 2)) < 2.0

    def test_a_player_need_not_read_to_the_end_before_it_starts(self, tmp_path: Path):
        data = write_clip(tmp_path / "a.mp4", noise(3, (32, 32))).read_bytes()
        assert 0 < data.index(b"moov") < data.index(b"mdat")


class TestMkv:
    @pytest.mark.parametrize(("shape", "name"), [((33, 35), "gray16le"), ((33, 35, 3), "gbrp16le")])
    @pytest.mark.parametrize("light", [Light("linear"), Light("srgb", 10, 1023)])
    def test_every_level_comes_back_exactly_as_in_a_still(self, tmp_path: Path, shape, name, light):
        images = noise(3, shape)
        path = write_clip(tmp_path / "a.mkv", images, light=light)
        frames = decode(path)
        assert len(frames) == 3
        for image, frame in zip(images, frames, strict=True):
            assert frame.format.name == name
            wanted = np.rint(light.to_codes(image).astype(np.float64) / light.white * 65535)
            np.testing.assert_array_equal(frame.to_ndarray(), wanted)

    def test_the_stream_names_the_curve_and_the_caution(self, tmp_path: Path):
        path = write_clip(tmp_path / "a.mkv", noise(2, (32, 32)), light=Light("linear"))
        with av.open(str(path)) as container:
            context = container.streams.video[0].codec_context
            # H.273: 8 is linear; full range
            assert (context.name, context.color_trc, context.color_range) == ("ffv1", 8, 2)
            assert container.metadata["title"] == "Bottle line 2"
            assert container.metadata["COMMENT"] == cautions.SHORT

    def test_times_are_right_to_the_millisecond_the_container_keeps(self, tmp_path: Path):
        path = write_clip(tmp_path / "a.mkv", noise(5, (32, 32)))
        assert [float(frame.time) for frame in decode(path)] == pytest.approx([t / 1e6 for t in TIMES_US], abs=0.00051)


class TestBoth:
    @pytest.mark.parametrize("suffix", [".mp4", ".mkv"])
    @pytest.mark.parametrize("shape", [(33, 40), (33, 40, 3)])
    def test_the_same_pictures_give_the_same_bytes(self, tmp_path: Path, suffix, shape):
        first = write_clip(tmp_path / f"a{suffix}", noise(4, shape), strip=True, caption="t = 1.000000 s   captured")
        second = write_clip(tmp_path / f"b{suffix}", noise(4, shape), strip=True, caption="t = 1.000000 s   captured")
        assert first.read_bytes() == second.read_bytes()

    @pytest.mark.parametrize("suffix", [".mp4", ".mkv"])
    def test_a_stop_in_the_middle_leaves_nothing(self, tmp_path: Path, suffix):
        def pictures():
            yield from noise(60, (64, 64))
            assert [p.suffix for p in tmp_path.iterdir()] == [suffix]
            assert not (tmp_path / f"a{suffix}").exists()
            raise KeyboardInterrupt

        with pytest.raises(KeyboardInterrupt):
            write_pictures(tmp_path / f"a{suffix}", (64, 64), pictures(), range(100))
        assert list(tmp_path.iterdir()) == []

    @pytest.mark.parametrize("suffix", [".mp4", ".mkv"])
    @pytest.mark.parametrize("largest", [0, 20_000])
    def test_a_file_the_disk_does_not_take_is_told_and_removed(self, tmp_path: Path, suffix, largest):
        soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
        resource.setrlimit(resource.RLIMIT_FSIZE, (largest, hard))
        try:
            with pytest.raises(WriteError, match=f"a{suffix} cannot be written: .*File too large.*; check the disk"):
                write_pictures(tmp_path / f"a{suffix}", (64, 64), noise(60, (64, 64)), range(100))
        finally:
            resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
        assert list(tmp_path.iterdir()) == []

    @pytest.mark.parametrize("suffix", [".mp4", ".mkv"])
    @pytest.mark.parametrize(
        ("shape", "times", "words"),
        [
            ((32, 32), [5], "picture 0: shown at 5 us, expected 0"),
            ((32, 32), [0, 40, 40], "picture 2: shown at 40 us, expected later than 40 us"),
            ((30, 32), [0], r"picture 0: shape \(30, 32\), expected \(32, 32\)"),
            ((32, 32), [], "no picture was given"),
        ],
    )
    def test_a_picture_that_does_not_fit_is_refused(self, tmp_path: Path, suffix, shape, times, words):
        with pytest.raises(WriteError, match=words):
            write_pictures(tmp_path / f"a{suffix}", (32, 32), [picture(shape, 0.5) for _ in times], times)
        assert list(tmp_path.iterdir()) == []

    def test_an_unknown_codec_is_refused(self, tmp_path: Path):
        with pytest.raises(WriteError, match='expected "h264" or "ffv1"'):
            ClipWriter(tmp_path / "a.mp4", "vp9", (32, 32), Light("srgb"), Fraction(30), {})

    def test_a_folder_that_cannot_be_made_is_told(self, tmp_path: Path):
        (tmp_path / "out").write_text("a file")
        clip = ClipWriter(tmp_path / "out" / "a.mp4", "h264", (32, 32), Light("srgb"), Fraction(30), {})
        with pytest.raises(WriteError, match="a file stands where a folder is expected"), clip:
            pass

    def test_an_old_clip_stays_until_the_new_one_is_whole(self, tmp_path: Path):
        path = write_clip(tmp_path / "a.mp4", noise(2, (32, 32)))
        old = path.read_bytes()
        with pytest.raises(WriteError, match="no picture"):
            write_clip(path, noise(1, (32, 32)), times=[])
        assert path.read_bytes() == old
