"""Bad input as a user meets it: an exit code, one clear message without a traceback, nothing half written."""

import shutil
from collections.abc import Callable
from pathlib import Path

import av
import cv2
import h5py
import numpy as np
import pytest

from enhance.cli import main

JOB = """
title = "Small"
[frames]
source = "frames"
times = "frames.csv"
light_curve = "linear"
[events]
source = "events.h5"
size = [112, 96]
cover = ["3 ms", "203 ms"]
[rig]
clock = {{ offset = "-3 ms", drift_ppm = 0.0 }}
contrast = [0.2, 0.23]
[slow_motion]
factor = 2
[network]
use = "off"
[output]
folder = "{out}"
stills = "deblurred"
"""


@pytest.fixture
def home(folder: Path, tmp_path: Path) -> Path:
    """Return a folder with a recording of its own to be spoiled, and a job that would run."""
    for name in ("frames", "frames.csv", "events.h5"):
        source = folder / name
        (shutil.copytree if source.is_dir() else shutil.copy)(source, tmp_path / name)
    (tmp_path / "job.toml").write_text(JOB.format(out="out"))
    return tmp_path


def edit(path: Path, change: Callable[[list[str]], list[str]]) -> None:
    path.write_text("\n".join(change(path.read_text().splitlines())) + "\n")


def replace_in_job(home: Path, old: str, new: str) -> None:
    text = (home / "job.toml").read_text()
    assert old in text
    (home / "job.toml").write_text(text.replace(old, new))


def rewrite_events(home: Path, change: Callable[[dict[str, np.ndarray]], dict[str, np.ndarray]]) -> None:
    with h5py.File(home / "events.h5") as file:
        columns = {name: file[name][:] for name in "txyp"}
    with h5py.File(home / "events.h5", "w") as file:
        for name, column in change(columns).items():
            file[name] = column


def truncate(path: Path) -> None:
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])


def as_video(home: Path) -> None:
    with av.open(str(home / "frames.mkv"), "w") as container:
        stream = container.add_stream("ffv1", rate=40)
        stream.width, stream.height, stream.pix_fmt = 112, 96, "gray"
        for file in sorted((home / "frames").glob("*.png")):
            image = cv2.imread(str(file), cv2.IMREAD_UNCHANGED)
            container.mux(stream.encode(av.VideoFrame.from_ndarray(image, format="gray")))
        container.mux(stream.encode(None))
    replace_in_job(home, 'source = "frames"\ntimes = "frames.csv"', 'source = "frames.mkv"\nexposure = "12 ms"')


def truncated_png(home: Path) -> None:
    truncate(home / "frames" / "000003.png")


def truncated_events(home: Path) -> None:
    truncate(home / "events.h5")


def truncated_video(home: Path) -> None:
    as_video(home)
    (home / "frames.mkv").write_bytes((home / "frames.mkv").read_bytes()[:600])


def video_without_exposure(home: Path) -> None:
    as_video(home)
    replace_in_job(home, 'exposure = "12 ms"\n', "")


def missing_row(home: Path) -> None:
    edit(home / "frames.csv", lambda lines: lines[:4] + lines[5:])


def repeated_row(home: Path) -> None:
    edit(home / "frames.csv", lambda lines: [*lines[:4], lines[3], *lines[4:]])


def backward_row(home: Path) -> None:
    edit(home / "frames.csv", lambda lines: [*lines[:4], "000003.png,20000,10000", *lines[5:]])


def other_sensor(home: Path) -> None:
    rewrite_events(home, lambda c: {**c, "x": c["x"] * 4, "y": c["y"] * 3})


def no_events(home: Path) -> None:
    rewrite_events(home, lambda c: {name: column[:0] for name, column in c.items()})


def dump_format(home: Path) -> None:
    (home / "events.raw").write_bytes(b"% evt 3.0\n" + bytes(100))
    replace_in_job(home, "events.h5", "events.raw")


def folder_holds_inputs(home: Path) -> None:
    replace_in_job(home, 'folder = "out"', 'folder = "."')


def unwritable_folder(home: Path) -> None:
    (home / "out").write_text("a file stands where the folder should be")


@pytest.mark.parametrize(
    ("spoil", "said"),
    [
        (truncated_png, "000003.png"),
        (truncated_events, "events.h5"),
        (truncated_video, "frames.mkv"),
        (video_without_exposure, "frames.exposure"),
        (missing_row, "frames.csv"),
        (repeated_row, "frames.csv"),
        (backward_row, "frames.csv"),
        (other_sensor, "events.size"),
        (no_events, "events.h5"),
        (dump_format, "columns t, x, y, p"),
        (folder_holds_inputs, "output.folder"),
        (unwritable_folder, "out"),
    ],
    ids=lambda value: getattr(value, "__name__", ""),
)
def test_bad_input_is_named_and_nothing_is_left(
    home: Path, spoil: Callable[[Path], None], said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    spoil(home)
    status = main(["run", str(home / "job.toml")])
    output = capsys.readouterr()
    assert status in (1, 2)
    assert said in output.err + output.out
    assert "Traceback" not in output.err + output.out
    assert "unforeseen" not in output.err + output.out
    assert not (home / "out" / "pictures.csv").exists()
    assert not list(home.rglob("*.partial*"))


def test_five_mistakes_are_reported_at_once(home: Path, capsys: pytest.CaptureFixture[str]) -> None:
    replace_in_job(home, 'light_curve = "linear"', 'light_curve = "log"')
    replace_in_job(home, "size = [112, 96]", "size = [112]")
    replace_in_job(home, "contrast = [0.2, 0.23]", "contrast = [0.2, -0.23]")
    replace_in_job(home, "factor = 2", "facto = 2")
    replace_in_job(home, 'stills = "deblurred"', 'stills = "some"')
    assert main(["check", str(home / "job.toml")]) == 1
    output = capsys.readouterr()
    for key in ("frames.light_curve", "events.size", "rig.contrast", "slow_motion.facto", "output.stills"):
        assert key in output.err + output.out
    assert "factor" in output.err + output.out


def test_events_of_one_sign_are_told_and_still_give_pictures(home: Path, capsys: pytest.CaptureFixture[str]) -> None:
    rewrite_events(home, lambda c: {name: column[c["p"] > 0] for name, column in c.items()})
    assert main(["run", str(home / "job.toml")]) == 0
    output = capsys.readouterr()
    assert "may have lost the other sign" in output.err + output.out


def test_one_frame_gives_a_still_and_exit_code_zero(home: Path) -> None:
    for file in sorted((home / "frames").glob("*.png"))[1:]:
        file.unlink()
    edit(home / "frames.csv", lambda lines: lines[:2])
    assert main(["run", str(home / "job.toml")]) == 0
    assert len(list((home / "out" / "stills").glob("*.png"))) == 1
    assert not (home / "out" / "slow-motion.mp4").exists()


def test_a_video_with_its_own_times_gives_the_same_pictures_as_the_images(home: Path) -> None:
    assert main(["run", str(home / "job.toml")]) == 0
    of_images = {p.name: p.read_bytes() for p in (home / "out" / "stills").glob("*.png")}
    as_video(home)
    # the video counts from 0, the table from the middle of the scene: 9 ms of clock lie between
    replace_in_job(home, 'offset = "-3 ms"', 'offset = "-12 ms"')
    replace_in_job(home, 'folder = "out"', 'folder = "out-video"')
    assert main(["run", str(home / "job.toml")]) == 0
    of_video = {p.name: p.read_bytes() for p in (home / "out-video" / "stills").glob("*.png")}
    assert len(of_video) == len(of_images)
    for (name, image), (shifted, other) in zip(sorted(of_images.items()), sorted(of_video.items()), strict=True):
        assert int(name[:16]) - int(shifted[:16]) == 9_000
        assert pixels(image) == pixels(other)


def pixels(png: bytes) -> bytes:
    return cv2.imdecode(np.frombuffer(png, np.uint8), cv2.IMREAD_UNCHANGED).tobytes()


def test_a_failing_job_does_not_stop_the_rest(home: Path, capsys: pytest.CaptureFixture[str]) -> None:
    shutil.copytree(home / "frames", home / "spoiled")
    truncate(home / "spoiled" / "000003.png")
    text = JOB.format(out="out-spoiled").replace('source = "frames"', 'source = "spoiled"')
    (home / "a-spoiled.toml").write_text(text)
    assert main(["run", str(home / "a-spoiled.toml"), str(home / "job.toml")]) == 1
    assert (home / "out" / "pictures.csv").exists()
    assert "000003.png" in capsys.readouterr().err
