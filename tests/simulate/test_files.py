"""A simulated recording on disk: what a user's files would hold, and the job that names them."""

import tomllib

import cv2
import h5py
import numpy as np
import pytest

from enhance.errors import WriteError
from enhance.simulate import Camera, EventSensor, demo_recording, make_scene, simulate, write_recording


@pytest.fixture(scope="module")
def small():
    scene = make_scene("parts", (64, 48), np.random.default_rng(3), 500.0, color=True)
    camera = Camera(rate_hz=50.0, exposure_us=8000, bits=12, light_curve="srgb", black=64.0)
    sensor = EventSensor(0.2, 0.24, hot_fraction=0.002)
    return simulate(scene, camera, sensor, 0.08, 1, clock_offset_us=-500, title="Small")


def test_frames_events_and_times_read_back_as_they_were(small, tmp_path):
    job = write_recording(small, tmp_path / "new" / "folder")
    folder = job.parent
    frames, events = small.recording.frames, small.recording.events.events
    rows = (folder / "frames.csv").read_text().split()
    assert rows[0] == "frame,start_us,end_us"
    assert len(rows) == len(frames) + 1
    for index, row in enumerate(rows[1:]):
        name, start, end = row.split(",")
        assert (int(start), int(end)) == (frames.start_us[index], frames.end_us[index])
        codes = cv2.imread(str(folder / "frames" / name), cv2.IMREAD_UNCHANGED)
        assert codes.dtype == np.uint16
        np.testing.assert_array_equal(codes[..., ::-1], frames.codes[index])
    with h5py.File(folder / "events.h5") as file:
        for name, column in (("t", events.t_us), ("x", events.x), ("y", events.y), ("p", events.polarity)):
            assert file[name].dtype == column.dtype
            np.testing.assert_array_equal(file[name][:], column)


def test_the_job_names_the_files_and_what_the_codes_mean(small, tmp_path):
    job = tomllib.loads(write_recording(small, tmp_path).read_text())
    assert job["title"] == "Small"
    assert job["frames"] == {
        "source": "frames",
        "times": "frames.csv",
        "light_curve": "srgb",
        "black": 64,
        "white": 4095,
    }
    assert job["events"] == {"source": "events.h5", "size": [64, 48], "cover": ["500 us", "80500 us"]}
    assert job["slow_motion"] == {"factor": 8}
    assert job["measure"] == {"hold_out": 2}
    assert job["output"] == {"folder": "out"}


def test_the_truth_stands_beside_the_recording(small, tmp_path):
    write_recording(small, tmp_path)
    truth = tomllib.loads((tmp_path / "truth.toml").read_text())
    assert truth["contrast"] == {"positive": 0.2, "negative": 0.24, "mismatch": 0.0}
    assert truth["clock"] == {"offset_us": -500, "drift_ppm": 0.0}
    assert truth["pixels"]["hot"] == small.hot.tolist()
    assert truth["seed"] == 1


def test_writing_again_gives_the_same_bytes_and_leaves_nothing_behind(small, tmp_path):
    first, second = tmp_path / "a", tmp_path / "b"
    for folder in (first, first, second):
        write_recording(small, folder)
    files = sorted(path.relative_to(first) for path in first.rglob("*"))
    assert files == sorted(path.relative_to(second) for path in second.rglob("*"))
    assert {path.name for path in first.iterdir()} == {"frames", "frames.csv", "events.h5", "truth.toml", "job.toml"}
    for path in files:
        if (first / path).is_file():
            assert (first / path).read_bytes() == (second / path).read_bytes()


@pytest.mark.parametrize("name", ["events.h5", "frames.csv", "job.toml", "frames/000000.png"])
def test_a_recording_of_somebody_is_not_written_over(small, tmp_path, name):
    (tmp_path / name).parent.mkdir(exist_ok=True)
    (tmp_path / name).write_bytes(b"measured")
    with pytest.raises(WriteError, match=rf"holds {name} without truth\.toml beside it"):
        write_recording(small, tmp_path)
    assert [path for path in tmp_path.rglob("*") if path.is_file()] == [tmp_path / name]
    assert (tmp_path / name).read_bytes() == b"measured"


def test_an_earlier_copy_is_replaced(small, tmp_path):
    job = write_recording(small, tmp_path)
    before = (tmp_path / "events.h5").read_bytes()
    (tmp_path / "events.h5").write_bytes(b"cut short")
    assert write_recording(small, tmp_path) == job
    assert (tmp_path / "events.h5").read_bytes() == before


def test_pictures_of_something_else_are_not_mixed_in(small, tmp_path):
    (tmp_path / "truth.toml").touch()
    (tmp_path / "frames").mkdir()
    (tmp_path / "frames" / "holiday.png").touch()
    with pytest.raises(WriteError, match=r"holds 1 files that are not part of this recording, such as holiday\.png"):
        write_recording(small, tmp_path)
    assert not (tmp_path / "job.toml").exists()


def test_a_folder_that_cannot_be_made_is_told(small, tmp_path):
    (tmp_path / "taken").write_text("a file")
    with pytest.raises(WriteError, match=r"taken: the folder cannot be made .* Choose one that can be written"):
        write_recording(small, tmp_path / "taken")


def test_a_failed_write_leaves_no_half_file(small, tmp_path, monkeypatch):
    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.replace", full)
    with pytest.raises(WriteError, match=r"truth\.toml: cannot be written .*No space left.* Free some space"):
        write_recording(small, tmp_path)
    assert [path for path in tmp_path.rglob("*") if path.is_file()] == []


def test_the_demo_is_a_blurred_labelling_line_with_a_clock_of_its_own(tmp_path):
    job = tomllib.loads(demo_recording(tmp_path).read_text())
    assert job["title"] == "Labelling wheel, line 3"
    truth = tomllib.loads((tmp_path / "truth.toml").read_text())
    assert abs(truth["clock"]["offset_us"]) > 1000
    table = np.loadtxt(tmp_path / "frames.csv", delimiter=",", skiprows=1, usecols=(1, 2), dtype=np.int64)
    assert 13 <= len(table) <= 17
    blur = truth["speed_px_s"] * (table[:, 1] - table[:, 0]) * 1e-6
    assert ((blur >= 10) & (blur <= 15)).all()
    assert cv2.imread(str(tmp_path / "frames" / "000000.png"), cv2.IMREAD_UNCHANGED).shape == (260, 346)
    with h5py.File(tmp_path / "events.h5") as file:
        # every exposure is covered once the clocks are brought together
        assert file["t"][0] + truth["clock"]["offset_us"] < table[0, 0]
        assert file["t"][-1] + truth["clock"]["offset_us"] > table[-1, 1]
        start, end = (int(edge.removesuffix(" us")) for edge in job["events"]["cover"])
        assert start <= file["t"][0] <= file["t"][-1] < end
