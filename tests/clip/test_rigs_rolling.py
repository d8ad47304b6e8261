"""A rolling shutter against a global one of the same scene: row time, clock and thresholds estimated, both alike.

Readouts take 30 to 80 % of the frame interval, two of them upward. The middle row is exposed at the same times by both
shutters, so that the pictures are of the same instants. Scenes and seeds are none of the benchmark's.
"""

import numpy as np
import pytest

from enhance.calibrate import calibrate
from enhance.clip.keys import Keys
from enhance.clip.pictures import Pictures
from enhance.clip.source import events_on_frames
from enhance.settings import RigSettings
from enhance.simulate import Camera, EventSensor, make_scene, simulate

pytestmark = pytest.mark.slow
SIZE, RATE_HZ, EXPOSURE_US, FRAMES, FACTOR, SPANS = (160, 120), 30.0, 15_000, 9, 8, (1, 4, 6)
#: Kind of scene, seed, and the readout's share of the frame interval; negative: upward.
RECORDINGS = (("texture", 5, 0.6), ("parts", 6, 0.8), ("label", 7, -0.5), ("fluid", 8, 0.3), ("fan", 9, -0.6))
#: Decibels lost at the most, in any of the recordings.
TARGET_DB = 0.7


def psnr(truth: np.ndarray, picture: np.ndarray) -> float:
    return float(-10 * np.log10(np.mean((truth.astype(np.float64) - np.clip(picture, 0, 1)) ** 2)))


def record(kind: str, seed: int, readout: float):
    row_time = readout * 1e6 / RATE_HZ / (SIZE[1] - 1)
    margin = 30_000
    camera = Camera(
        rate_hz=RATE_HZ,
        exposure_us=EXPOSURE_US,
        start_us=margin - int(np.floor(row_time * (SIZE[1] // 2))),
        row_time_us=row_time,
    )
    scene = make_scene(kind, SIZE, np.random.default_rng(seed), 12.0 / (EXPOSURE_US * 1e-6))
    sensor = EventSensor(0.20, 0.22, mismatch=0.03, noise_hz=1.0)
    return simulate(scene, camera, sensor, (2 * margin + EXPOSURE_US) * 1e-6 + (FRAMES - 1) / RATE_HZ, seed)


def figures(simulated, shutter: float | None) -> tuple[float, float, float]:
    """Mean PSNR of keys and of inserted pictures, without the network, and the row time."""
    recording = simulated.recording
    rig = calibrate(recording, range(FRAMES), RigSettings(row_time_us=shutter))
    pictures = Pictures(Keys(recording.frames, range(FRAMES), events_on_frames(recording, rig), rig))
    times = pictures.keys.times_us
    keys = [psnr(simulated.truth(times[k]), pictures.at(times[k]).image) for k in SPANS]
    between = [times[k] + i * (times[k + 1] - times[k]) // FACTOR for k in SPANS for i in range(1, FACTOR)]
    inserted = [psnr(simulated.truth(t), pictures.at(t).image) for t in between]
    return float(np.mean(keys)), float(np.mean(inserted)), float(rig.row_time_us.value)


def test_pictures_of_a_rolling_shutter_are_as_good_as_of_a_global_one(capsys: pytest.CaptureFixture[str]) -> None:
    lost = []
    for kind, seed, readout in RECORDINGS:
        keys, inserted, _ = figures(record(kind, seed, 0.0), 0.0)
        rolling = record(kind, seed, readout)
        rolling_keys, rolling_inserted, row_time = figures(rolling, None)
        true = rolling.camera.row_time_us
        # of the clip's pictures one in FACTOR is a key
        clip = ((keys - rolling_keys) + (FACTOR - 1) * (inserted - rolling_inserted)) / FACTOR
        lost.append(clip)
        with capsys.disabled():
            print(
                f"\n{kind:8} readout {readout:5.0%}, row time {row_time:8.2f} us (true {true:.2f}); keys {keys:.2f} -> "
                f"{rolling_keys:.2f}, inserted {inserted:.2f} -> {rolling_inserted:.2f} dB, clip lost {clip:.2f}"
            )
        assert abs(row_time / true - 1) < 0.05
    with capsys.disabled():
        print(f"\nlost in the mean {np.mean(lost):.2f} dB, at the most {max(lost):.2f} dB")
    assert max(lost) <= TARGET_DB
