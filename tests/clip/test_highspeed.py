"""Real high-speed footage as the truth: blur and events are made from it, and its pictures between keys found again.

Light between the footage's own pictures is motion-compensated (flow both ways, weighed by time); it serves the event
sensor and the exposures alone, and only instants of real pictures are judged. The footage's own noise and compression
are part of the truth. Nothing was trained or tuned on it.
"""

from pathlib import Path

import cv2
import numpy as np
import pytest

from enhance.kernels.optical_flow import flow_between, warp
from enhance.light import Image
from enhance.read import open_frames
from enhance.settings import FramesSettings, RigSettings
from enhance.simulate import Camera, EventSensor, simulate
from enhance.simulate.recording import Simulated

pytestmark = pytest.mark.slow
#: Mismatch and noise as in `enhance.simulate.BENCHMARK`.
SENSOR = EventSensor(0.2, 0.2, mismatch=0.03, noise_hz=1.0)
SEED = 3_000_001


class Footage:
    """A scene (`enhance.simulate.Scene`) made of real pictures, linear light, `interval_us` apart."""

    def __init__(self, name: str, pictures: list[Image], interval_us: int) -> None:
        self.name, self.pictures, self.interval_us = name, pictures, interval_us
        self.size = (pictures[0].shape[1], pictures[0].shape[0])
        pairs = list(zip(pictures[:-1], pictures[1:], strict=True))
        self._flows = [(flow_between(one, two), flow_between(two, one)) for one, two in pairs]
        fastest = max(float(np.hypot(flow[..., 0], flow[..., 1]).max()) for flow, _ in self._flows)
        self.speed_px_s = fastest / (interval_us * 1e-6)

    def render(self, t_s: float) -> Image:
        # at a real picture's instant that picture must come out, whatever its seconds were rounded to
        index, rest = divmod(round(t_s * 1e6, 3), self.interval_us)
        index = int(index)
        if rest == 0:
            return self.pictures[index]
        w = np.float32(rest / self.interval_us)
        there, back = self._flows[index]
        one, two = self.pictures[index : index + 2]
        return (1 - w) * warp(one, w * back) + w * warp(two, (1 - w) * there)


def record(footage: Footage, camera: Camera) -> Simulated:
    duration_s = (len(footage.pictures) - 1) * footage.interval_us * 1e-6
    return simulate(footage, camera, SENSOR, duration_s, SEED)


@pytest.fixture(scope="module")
def highspeed(recordings: Path) -> Path:
    """Return the folder of high-speed footage beside the recordings, or skip the test where it is not there."""
    folder = recordings.parent / "highspeed"
    if not folder.is_dir():
        pytest.skip("put the high-speed footage into highspeed/ beside the folder of real recordings")
    return folder


@pytest.fixture(scope="module")
def paw(highspeed: Path) -> Simulated:
    """Paws on a wheel, 250 pictures a second: 17 keys, one every 8 pictures, each exposed for 4."""
    source = open_frames(FramesSettings(highspeed / "paw-250fps.mp4", exposure_us=0, light_curve="srgb"))
    # compressed: half the size; the camera stores it as it was shot, since the scene is too dark for 8 linear bits
    pictures = [
        cv2.resize(grey(source.frame(i).image), None, fx=0.5, fy=0.5, interpolation=cv2.INTER_AREA) for i in range(137)
    ]
    source.close()
    footage = Footage("paw", pictures, 4_000)
    return record(footage, Camera(rate_hz=31.25, exposure_us=16_000, start_us=8_000, light_curve="srgb"))


@pytest.fixture(scope="module")
def ball(highspeed: Path) -> Simulated:
    """A falling ball, 15 pictures, taken to be 2 ms apart: 3 keys, one every 5 pictures, each exposed for 2.

    The footage's own 33 us would be lost in the steps of a microsecond.
    """
    codes = np.load(highspeed / "ball-30000fps.npz")["frames"]
    footage = Footage("ball", list(codes.astype(np.float32) / 4095), 2_000)
    return record(footage, Camera(rate_hz=100.0, exposure_us=4_000, start_us=2_000, bits=12))


def grey(image: Image) -> Image:
    return image if image.ndim == 2 else np.ascontiguousarray(image[..., 1])


def figures(made, pictures_a_key: int) -> tuple[dict[str, float], dict[str, float]]:
    """Mean figures of all keys and of all real pictures between keys."""
    interval = made.simulated.scene.interval_us
    spans = range(len(made.times_us) - 1)
    times = [(k, t) for k in spans for t in made.instants(k, pictures_a_key)]
    assert all(t % interval == 0 for t in [*made.times_us, *(t for _, t in times)]), "an instant without a real picture"
    keys = [made.key(k) for k in range(len(made.times_us))]
    inserted = [made.inserted(k, t)[0] for k, t in times]
    return tuple({name: float(np.mean([f[name] for f in some])) for name in some[0]} for some in (keys, inserted))


def judge(title: str, found: tuple[dict[str, float], dict[str, float]], capsys: pytest.CaptureFixture[str]) -> None:
    keys, inserted = found
    with capsys.disabled():
        print(f"\n{title} keys: " + ", ".join(f"{n} {v:.2f}" for n, v in keys.items()))
        print(f"{title} inserted: " + ", ".join(f"{n} {v:.2f}" for n, v in inserted.items()), end="; ")
        print(", ".join(f"gain over {n} {inserted['ours'] - inserted[n]:.2f}" for n in ("baseline", "flow")), end=" ")
    assert inserted["ours"] > inserted["baseline"]
    assert inserted["ours"] > inserted["flow"]


def test_paws_on_a_wheel_everything_estimated(paw: Simulated, ways, network, capsys) -> None:
    judge("paw", figures(ways(paw, network), 8), capsys)


def test_a_falling_ball_its_clock_given(ball: Simulated, ways, network, capsys) -> None:
    # three keys, all of whose motion is one straight fall, are too few to tell a clock: it is given as shared
    judge("ball", figures(ways(ball, network, RigSettings(offset_us=0, drift_ppm=0.0)), 5), capsys)
