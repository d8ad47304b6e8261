"""One small simulated recording on disk, shared by the tests of whole jobs."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from enhance.settings import ClipSettings, EventsSettings, FramesSettings, OutputSettings, RigSettings
from enhance.simulate import Camera, EventSensor, make_scene, simulate, write_recording

SIZE = (112, 96)


@pytest.fixture(scope="session")
def simulated():
    scene = make_scene("parts", SIZE, np.random.default_rng(5), 500.0)
    camera = Camera(rate_hz=40.0, exposure_us=12_000, start_us=9_000)
    sensor = EventSensor(0.2, 0.23, mismatch=0.03, noise_hz=0.5)
    return simulate(scene, camera, sensor, 0.2, 5, clock_offset_us=-3_000, title="Small")


@pytest.fixture(scope="session")
def folder(simulated, tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("small")
    write_recording(simulated, path)
    return path


@pytest.fixture
def settings(folder: Path, tmp_path: Path) -> ClipSettings:
    """Return a job that leaves the network and every estimate out; tests put in what they are about."""
    return ClipSettings(
        "Small",
        FramesSettings(folder / "frames", folder / "frames.csv", light_curve="linear"),
        EventsSettings(folder / "events.h5", size=SIZE, cover_us=(3_000, 203_000)),
        OutputSettings(tmp_path / "out", stills="all"),
        rig=RigSettings(contrast=(0.2, 0.23), offset_us=-3_000, drift_ppm=0.0),
        network="off",
    )


@pytest.fixture
def with_output(settings: ClipSettings):
    """Return a job like `settings` with other outputs."""

    def make(**output) -> ClipSettings:
        return replace(settings, output=replace(settings.output, **output))

    return make
