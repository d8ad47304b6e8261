"""What the tests of whole jobs share: one small simulated recording on disk, and the ways to make a picture.

The baseline is fixed: keys by the plain double integral with the true thresholds and clock, and between them both keys
carried along the events and blended by time (Pan et al., CVPR 2019). It does not move when candidates get better.
"""

from dataclasses import replace
from functools import cache, cached_property
from pathlib import Path

import numpy as np
import pytest

from enhance.calibrate import calibrate
from enhance.clip.keys import Keys
from enhance.clip.passes import WEIGHTS
from enhance.clip.pictures import Pictures
from enhance.clip.source import events_on_frames
from enhance.deblur import deblur
from enhance.interpolate.network import FusionNetwork, load_network
from enhance.interpolate.trust import TrustModel, load_trust
from enhance.kernels.double_integral import log_sum
from enhance.kernels.optical_flow import frame_only_picture
from enhance.light import Image
from enhance.measure import psnr
from enhance.recording import Contrast, Picture
from enhance.settings import ClipSettings, EventsSettings, FramesSettings, OutputSettings, RigSettings
from enhance.shipped import shipped_folder
from enhance.simulate import Camera, EventSensor, make_scene, simulate, write_recording
from enhance.simulate.recording import Simulated

SIZE = (112, 96)


class Baseline:
    """Pictures by the plain method that knows the truth of the rig."""

    def __init__(self, simulated: Simulated) -> None:
        assert simulated.clock.offset_us == simulated.clock.drift_ppm == 0, "the baseline reads events as frame times"
        self.frames = simulated.recording.frames
        self.events = simulated.recording.events
        sensor = simulated.sensor
        self.contrast = Contrast(sensor.contrast_positive, sensor.contrast_negative)
        # kept for the few spans that are looked at
        self.key = cache(self._key)

    def _key(self, k: int, time_us: int) -> Image:
        f = self.frames.frame(k)
        return deblur(f.image, self.events.between(f.start_us, f.end_us), f.start_us, f.end_us, time_us, self.contrast)

    def inserted(self, k: int, times: tuple[int, int], time_us: int) -> Image:
        left, right = self.key(k, times[0]), self.key(k + 1, times[1])
        shape = left.shape
        from_left = left * np.exp(log_sum(self.events.between(*times), times[0], time_us, self.contrast, shape))
        from_right = right * np.exp(-log_sum(self.events.between(*times), time_us, times[1], self.contrast, shape))
        weight = (time_us - times[0]) / (times[1] - times[0])
        return (1 - weight) * from_left + weight * from_right


class Ways:
    """Every way to make a picture of one simulated recording, and how near each comes to the truth.

    Clock, ramp, thresholds, hot pixels and noise are estimated, but for what `rig` gives. Figures are PSNR in dB of the
    whole picture, in the frames' own curve. ``off`` is without the network; without one at all, ``ours`` is as well.
    """

    def __init__(
        self,
        simulated: Simulated,
        network: FusionNetwork | None,
        rig: RigSettings | None = None,
        trust: TrustModel | None = None,
    ) -> None:
        recording = simulated.recording
        self.simulated, self.frames = simulated, recording.frames
        self.rig = calibrate(recording, range(len(self.frames)), rig or RigSettings())
        self.fused, self.blended = self._pictures(network, trust), self._pictures(None, None)
        self.times_us = self.fused.keys.times_us

    @cached_property
    def baseline(self) -> Baseline:
        return Baseline(self.simulated)

    def _pictures(self, network: FusionNetwork | None, trust: TrustModel | None) -> Pictures:
        events = events_on_frames(self.simulated.recording, self.rig)
        return Pictures(Keys(self.frames, range(len(self.frames)), events, self.rig, network, trust))

    def key(self, k: int) -> dict[str, float]:
        """Figures of a key."""
        return self._figures(
            self.times_us[k],
            {
                "captured": self.frames.frame(k).image,
                "baseline": self.baseline.key(k, self.times_us[k]),
                "off": self.blended.keys.picture(k).image,
                "ours": self.fused.keys.picture(k).image,
            },
        )

    def inserted(self, k: int, time_us: int) -> tuple[dict[str, float], Picture]:
        """Figures of one instant of the span from key `k`, and the picture that is ours."""
        start, end = self.times_us[k], self.times_us[k + 1]
        captured = (self.frames.frame(k).image, self.frames.frame(k + 1).image)
        ours = self.fused.at(time_us)
        made = {
            "flow": frame_only_picture(*captured, (time_us - start) / (end - start)),
            "baseline": self.baseline.inserted(k, (start, end), time_us),
            "off": self.blended.at(time_us).image,
            "ours": ours.image,
        }
        return self._figures(time_us, made), ours

    def instants(self, k: int, factor: int) -> list[int]:
        """Instants of the pictures inserted into the span from key `k`."""
        start, end = self.times_us[k], self.times_us[k + 1]
        return [start + i * (end - start) // factor for i in range(1, factor)]

    def _figures(self, time_us: int, made: dict[str, Image]) -> dict[str, float]:
        truth = self._signal(self.simulated.truth(time_us))
        return {name: psnr(truth, self._signal(image), 1.0) for name, image in made.items()}

    def _signal(self, linear: Image) -> Image:
        light = self.frames.light
        return np.clip(light.to_codes(linear) / light.full_scale, 0, 1)


@pytest.fixture(scope="session")
def network() -> FusionNetwork:
    return load_network(shipped_folder("models") / WEIGHTS)


@pytest.fixture(scope="session")
def trust() -> TrustModel:
    return load_trust(shipped_folder("models") / "trust.json")


@pytest.fixture(scope="session")
def ways() -> type[Ways]:
    """Return the class: a test module cannot import what stands here."""
    return Ways


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
