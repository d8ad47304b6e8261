"""The job files that travel with the package are right, once their recordings are there."""

import tomllib
from dataclasses import replace
from pathlib import Path

import pytest

from enhance.batch import read_job
from enhance.batch.checks import INPUTS
from enhance.settings import ClipSettings
from enhance.shipped import shipped_folder

JOBS = sorted(shipped_folder("jobs").glob("*.toml"))


def beside_its_inputs(job: Path, folder: Path) -> Path:
    """Copy a job to where stand-ins for its inputs exist."""
    copy = folder / "jobs" / job.name
    copy.parent.mkdir(parents=True)
    copy.write_bytes(job.read_bytes())
    document = tomllib.loads(job.read_text())
    for table, key in INPUTS:
        given = document.get(table, {})
        for name in key.split("."):
            given = given.get(name) if isinstance(given, dict) else None
        if given and Path(given).suffix:
            (copy.parent / given).parent.mkdir(parents=True, exist_ok=True)
            (copy.parent / given).touch()
        elif given:
            (copy.parent / given).mkdir(parents=True)
    return copy


@pytest.mark.parametrize("job", JOBS, ids=lambda path: path.name)
def test_every_shipped_job_is_right(job: Path, tmp_path: Path) -> None:
    assert read_job(beside_its_inputs(job, tmp_path)).title


def test_each_shows_its_situation(tmp_path: Path) -> None:
    found = {job.stem: read_job(beside_its_inputs(job, tmp_path / job.stem)) for job in JOBS}
    assert set(found) == {
        "auto-exposure",
        "demo",
        "lamp",
        "video-source",
        "windows",
        "rig-reuse",
        "rolling-shutter",
        "stills-only",
        "triggers",
        "trust",
        "two-sensors",
    }
    assert found["auto-exposure"].frames.mosaic == "GRBG"
    assert found["video-source"].frames.times is None
    assert [window.factor for window in found["windows"].slow_motion.windows] == [None, 32]
    assert found["rig-reuse"].rig.file is not None
    assert found["rolling-shutter"].rig.row_time_us == 14.8
    assert found["stills-only"].slow_motion is None
    assert found["triggers"].rig.triggers is not None
    assert found["trust"].output.trust
    assert found["two-sensors"].rig.registration == "estimate"
    assert found["two-sensors"].rig.event_lens is not None
    assert found["trust"].least_psnr == 32


def without_paths(settings: ClipSettings) -> ClipSettings:
    return replace(
        settings,
        frames=replace(settings.frames, source=Path(settings.frames.source.name), times=None),
        events=replace(settings.events, source=Path(settings.events.source.name)),
        output=replace(settings.output, folder=Path(settings.output.folder.name)),
    )


def test_the_demo_job_is_the_one_that_the_rendered_recording_brings(tmp_path: Path) -> None:
    from enhance.simulate import demo_recording

    rendered = demo_recording(tmp_path / "enhance-demo")
    (tmp_path / "jobs").mkdir()
    shipped = tmp_path / "jobs" / "demo.toml"
    shipped.write_bytes((shipped_folder("jobs") / "demo.toml").read_bytes())
    assert without_paths(read_job(shipped)) == without_paths(read_job(rendered))
    assert read_job(shipped).frames.source.resolve() == rendered.parent / "frames"
