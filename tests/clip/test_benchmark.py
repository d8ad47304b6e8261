"""The main job on fixed simulated recordings whose truth is known; everything estimated, nothing given.

The baseline is fixed: keys by the plain double integral with the true thresholds and clock, and between them both keys
carried along the events and blended by time (Pan et al., CVPR 2019). It does not move when candidates get better.
"""

from collections.abc import Iterator

import numpy as np
import pytest

from enhance.calibrate import calibrate
from enhance.clip.keys import Keys
from enhance.clip.passes import WEIGHTS
from enhance.clip.pictures import Pictures
from enhance.deblur import deblur
from enhance.interpolate.network import load_network
from enhance.kernels.double_integral import log_sum
from enhance.kernels.optical_flow import frame_only_picture
from enhance.recording import Contrast
from enhance.rig import RiggedEvents
from enhance.settings import RigSettings
from enhance.shipped import shipped_folder
from enhance.simulate import benchmark_recordings

pytestmark = pytest.mark.slow
FACTOR = 8
#: Spans looked at, spread over each recording: its first and last keys have neighbours on one side only, as in life.
SPANS = (0, 4, 7)


def psnr(truth: np.ndarray, picture: np.ndarray) -> float:
    return float(-10 * np.log10(np.mean((truth.astype(np.float64) - np.clip(picture, 0, 1)) ** 2)))


class Baseline:
    def __init__(self, simulated) -> None:
        self.frames = simulated.recording.frames
        self.events = simulated.recording.events
        sensor = simulated.sensor
        self.contrast = Contrast(sensor.contrast_positive, sensor.contrast_negative)

    def key(self, k: int, time_us: int) -> np.ndarray:
        f = self.frames.frame(k)
        return deblur(f.image, self.events.between(f.start_us, f.end_us), f.start_us, f.end_us, time_us, self.contrast)

    def inserted(self, k: int, times: tuple[int, int], time_us: int) -> np.ndarray:
        left, right = self.key(k, times[0]), self.key(k + 1, times[1])
        shape = left.shape
        from_left = left * np.exp(log_sum(self.events.between(*times), times[0], time_us, self.contrast, shape))
        from_right = right * np.exp(-log_sum(self.events.between(*times), time_us, times[1], self.contrast, shape))
        weight = (time_us - times[0]) / (times[1] - times[0])
        return (1 - weight) * from_left + weight * from_right


def passes(simulated) -> tuple[Pictures, Pictures]:
    """Pictures with and without the network; clock, ramp, thresholds, hot pixels and noise estimated."""
    recording = simulated.recording
    frames = recording.frames
    height, width = frames.shape
    rig = calibrate(recording, range(len(frames)), RigSettings())
    keys = Keys(frames, range(len(frames)), RiggedEvents(recording.events, rig, (width, height)), rig)
    return Pictures(keys, load_network(shipped_folder("models") / WEIGHTS)), Pictures(keys, None)


def figures(simulated) -> Iterator[tuple[str, float]]:
    fused, blended = passes(simulated)
    baseline, frames = Baseline(simulated), simulated.recording.frames
    times = fused.keys.times_us
    for k in SPANS:
        truth = simulated.truth(times[k])
        yield "key: captured", psnr(truth, frames.frame(k).image)
        yield "key: baseline", psnr(truth, baseline.key(k, times[k]))
        yield "key: ours", psnr(truth, fused.keys.picture(k).image)
        ends = (times[k], times[k + 1])
        for i in range(1, FACTOR):
            t = ends[0] + i * (ends[1] - ends[0]) // FACTOR
            truth = simulated.truth(t)
            plain = frame_only_picture(frames.frame(k).image, frames.frame(k + 1).image, i / FACTOR)
            yield "inserted: flow", psnr(truth, plain)
            yield "inserted: baseline", psnr(truth, baseline.inserted(k, ends, t))
            yield "inserted: off", psnr(truth, blended.at(t).image)
            yield "inserted: ours", psnr(truth, fused.at(t).image)


def test_deblurred_keys_and_inserted_pictures_reach_their_targets(capsys: pytest.CaptureFixture[str]) -> None:
    table: dict[str, list[float]] = {}
    names = []
    for name, simulated in benchmark_recordings():
        names.append(name)
        found: dict[str, list[float]] = {}
        for figure, value in figures(simulated):
            found.setdefault(figure, []).append(value)
        for figure, values in found.items():
            table.setdefault(figure, []).append(float(np.mean(values)))
    with capsys.disabled():
        print("\n" + " " * 12 + "".join(f"{figure:>20}" for figure in table))
        for name, *values in zip([*names, "mean"], *([*v, np.mean(v)] for v in table.values()), strict=True):
            print(f"{name:12}" + "".join(f"{v:20.2f}" for v in values))
    mean = {figure: float(np.mean(values)) for figure, values in table.items()}
    assert mean["key: ours"] >= mean["key: baseline"] - 0.5
    assert all(a >= b for a, b in zip(table["key: ours"], table["key: captured"], strict=True))
    assert mean["inserted: ours"] >= mean["inserted: baseline"] + 1.5
    assert mean["inserted: ours"] >= mean["inserted: flow"] + 9.0
    assert mean["inserted: off"] >= mean["inserted: baseline"]
