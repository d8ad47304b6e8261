"""Videos: colour, depth and range from the tags, damage, and time stamps that are none."""

from fractions import Fraction
from pathlib import Path

import av
import numpy as np
import pytest

from enhance.errors import FramesError, JobError
from enhance.read import open_frames
from enhance.settings import FramesSettings

SIZE = (48, 32)


def write(path, codec, pixels, planes, count=3, options=None, tags=None, step=40_000, base=Fraction(1, 1_000_000)):
    """Write frames whose planes hold one constant each (or an array): no converter comes between."""
    with av.open(str(path), "w") as container:
        stream = container.add_stream(codec, rate=25, options=options or {})
        stream.width, stream.height, stream.pix_fmt = *SIZE, pixels
        stream.time_base = stream.codec_context.time_base = base
        for name, value in (tags or {}).items():
            setattr(stream.codec_context, name, value)
        for i in range(count):
            frame = av.VideoFrame(*SIZE, pixels)
            for plane, value in zip(frame.planes, planes(i) if callable(planes) else planes, strict=True):
                kind = np.uint16 if frame.format.components[0].bits > 8 else np.uint8
                rows = np.zeros((plane.height, plane.line_size // kind().itemsize), kind)
                rows[:, : plane.width] = value
                plane.update(rows.tobytes())
            frame.pts, frame.time_base = int(i * step * base.denominator // 1_000_000), base
            container.mux(stream.encode(frame))
        container.mux(stream.encode())
    return path


def opened(path, curve="linear", **settings):
    return open_frames(FramesSettings(path, exposure_us=0, light_curve=curve, **settings))


#: 8-bit limited-range Y, Cb, Cr of pure red (ITU-R BT.601 and BT.709, computed), rounded
RED = {"bt601": ((81, 90, 240), 6), "bt709": ((63, 102, 240), 1)}


@pytest.mark.parametrize("matrix", RED)
def test_the_colour_matrix_is_the_tags(tmp_path, matrix):
    planes, tag = RED[matrix]
    tags = {"colorspace": tag, "color_range": 1}
    source = opened(write(tmp_path / "v.mp4", "libx264", "yuv444p", planes, options={"crf": "0"}, tags=tags))
    # one step of Y is 1.16 codes of R, G, B
    assert np.allclose(source.frame(0).image * 255, [255, 0, 0], atol=2.5)
    assert source.notes == ()
    source.close()


def test_an_untagged_matrix_goes_by_size_and_says_so(tmp_path):
    source = opened(write(tmp_path / "v.mp4", "libx264", "yuv444p", RED["bt601"][0], options={"crf": "0"}))
    assert np.allclose(source.frame(0).image * 255, [255, 0, 0], atol=2.5)
    assert "its colour matrix is not told; BT.601 is assumed" in source.notes[0]
    source.close()


@pytest.mark.parametrize(("tag", "codes", "values"), [(1, (16, 235), (0, 255)), (2, (16, 235), (16, 235))])
def test_limited_range_is_stretched_and_full_range_kept(tmp_path, tag, codes, values):
    half = np.r_[np.full(24, codes[0]), np.full(24, codes[1])]
    for codec, pixels, planes in (("ffv1", "yuv444p", (half, 128, 128)), ("ffv1", "gray", (half,))):
        tags = {"color_range": tag, "colorspace": 1}
        path = write(tmp_path / "v.mkv", codec, pixels, planes, tags=tags, base=Fraction(1, 1000))
        image = opened(path).frame(0).image * 255
        assert np.abs(image[:, [2, 45]].reshape(SIZE[1], 2, -1).mean(2) - values).max() < 1


def test_ten_bits_keep_their_steps_and_are_scaled_to_sixteen(tmp_path):
    ramp = np.arange(500, 548)
    source = opened(write(tmp_path / "v.nut", "ffv1", "gray10le", (ramp,)))
    assert source.light.white == 65_535
    assert np.allclose(source.frame(0).image[5] * 1023, ramp, atol=0.1)
    assert "10-bit codes are scaled to 16 bit" in source.notes[0]
    source.close()


def test_sixteen_bit_colour_is_exact(tmp_path):
    # planes of gbrp16 are G, B, R
    source = opened(write(tmp_path / "v.nut", "ffv1", "gbrp16le", (1001, 40_003, 65_535)))
    assert np.allclose(source.frame(1).image * 65_535, [65_535, 1001, 40_003], atol=0.01)
    source.close()


#: H.273 transfer characteristics
@pytest.mark.parametrize(
    ("tag", "curve"), [(1, "bt709"), (13, "srgb"), (8, "linear"), (4, "gamma 2.2"), (5, "gamma 2.8"), (6, "bt709")]
)
def test_the_light_curve_comes_from_the_transfer_tag_unless_given(tmp_path, tag, curve):
    path = write(tmp_path / "v.mp4", "libx264", "yuv420p", (100, 128, 128), tags={"color_trc": tag})
    tagged, given = opened(path, None), opened(path, "gamma 1.5")
    assert (tagged.light.curve, given.light.curve) == (curve, "gamma 1.5")
    tagged.close()
    given.close()


@pytest.mark.parametrize("tag", [2, 16])
def test_no_curve_or_one_that_is_not_ours_is_asked_for(tmp_path, tag):
    path = write(tmp_path / "v.mp4", "libx264", "yuv420p", (100, 128, 128), tags={"color_trc": tag})
    with pytest.raises(JobError, match="frames.light_curve is missing"):
        opened(path, None)


def test_a_table_overrules_the_videos_own_times(tmp_path):
    path = write(tmp_path / "v.mp4", "libx264", "yuv420p", (100, 128, 128))
    table = tmp_path / "t.csv"
    table.write_text("frame,start_us,end_us\n0,7,8\n1,1007,1008\n2,2007,2008\n")
    source = opened(path, times=table)
    assert source.start_us.tolist() == [7, 1007, 2007]
    source.close()


def test_coarse_container_times_are_noted(tmp_path):
    source = opened(write(tmp_path / "v.mkv", "ffv1", "gray", (100,), base=Fraction(1, 1000)))
    assert "keeps times in steps of 1000 us only; give exact times in frames.times" in source.notes[0]
    assert source.start_us.tolist() == [0, 40_000, 80_000]
    source.close()


def noise(i):
    return np.random.default_rng(i).integers(0, 255, (SIZE[1], SIZE[0])), 128, 128


def test_a_cut_video_is_refused(tmp_path):
    path = write(tmp_path / "v.mp4", "libx264", "yuv444p", noise, count=20)
    path.write_bytes(path.read_bytes()[:-200])
    with pytest.raises(FramesError, match="v.mp4 cannot be read as a video: .*cut short"):
        opened(path)


def test_a_cut_video_with_its_index_in_front_is_refused(tmp_path):
    whole = write(tmp_path / "v.mp4", "libx264", "yuv444p", noise, count=20, options={"movflags": "faststart"})
    path = tmp_path / "front.mp4"
    # the same streams, copied with the index before the pictures
    with av.open(str(whole)) as source, av.open(str(path), "w", options={"movflags": "faststart"}) as target:
        stream = target.add_stream_from_template(source.streams.video[0])
        for packet in source.demux(source.streams.video[0]):
            if packet.size:
                packet.stream = stream
                target.mux(packet)
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    with pytest.raises(FramesError, match=r"front.mp4: \d+ pictures, its header says 20. The file is cut short"):
        opened(path)


def test_a_cut_recording_without_an_index_is_noted(tmp_path):
    path = write(tmp_path / "v.mkv", "ffv1", "yuv444p", noise, count=20)
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    source = opened(path)
    assert any("the file may be cut short" in note for note in source.notes)
    source.close()


def test_damage_that_the_checksum_shows_is_refused_every_time(tmp_path):
    path = write(tmp_path / "v.nut", "ffv1", "yuv444p", noise, count=10, options={"level": "3", "slicecrc": "1"})
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 0x55
    path.write_bytes(data)
    source = opened(path)
    # every later picture of the same group of pictures is built on the damaged one
    for i in [*range(4), *range(6, 10), *range(4), *range(6, 10)]:
        if i < 4:
            source.frame(i)
        else:
            with pytest.raises(FramesError, match=f"frame {i} at {40_000 * i} us .* its checksum does not fit"):
                source.frame(i)
    source.close()


def test_a_file_that_is_no_video(tmp_path):
    (tmp_path / "v.mp4").write_text("no video" * 100)
    with pytest.raises(FramesError, match="v.mp4 cannot be read as a video.*check frames.source"):
        opened(tmp_path / "v.mp4")


def test_sound_alone_is_no_video(tmp_path):
    with av.open(str(tmp_path / "a.wav"), "w") as container:
        stream = container.add_stream("pcm_s16le", rate=8000)
        stream.layout = "mono"
        frame = av.AudioFrame.from_ndarray(np.zeros((1, 800), np.int16), format="s16", layout="mono")
        frame.sample_rate = 8000
        container.mux(stream.encode(frame))
    with pytest.raises(FramesError, match="holds no video stream"):
        opened(tmp_path / "a.wav")


def test_pictures_without_time_stamps_are_refused(tmp_path):
    path = write(tmp_path / "v.h264", "libx264", "yuv420p", (100, 128, 128))
    with pytest.raises(FramesError, match="3 pictures but 0 different time stamps. Expected one a picture"):
        opened(path)


def test_pixel_formats_beyond_sixteen_bits_are_refused(tmp_path):
    import enhance.read.video_colour as video_colour

    with pytest.raises(FramesError, match="pixel format gbrpf32le is not read.*Export the pictures as 16-bit PNG"):
        video_colour.conversion("v.mkv", None, av.VideoFrame(*SIZE, "gbrpf32le"))


def test_reading_in_order_never_seeks(tmp_path, monkeypatch):
    import enhance.read.frame_video as frame_video

    monkeypatch.setattr(frame_video, "_CACHE_PICTURES", 2)
    path = write(tmp_path / "v.mp4", "libx264", "yuv444p", noise, count=20, options={"g": "40", "bf": "2"})
    video = frame_video.Video(path)
    started = video._frames
    for i in range(20):
        video.codes(i)
        assert video._frames is started
    video.close()


def test_a_colon_in_a_relative_name_is_no_protocol(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    write(tmp_path / "v.mp4", "libx264", "yuv420p", (100, 128, 128)).rename("line:3.mp4")
    source = opened(Path("line:3.mp4"))
    assert len(source) == 3
    source.close()
