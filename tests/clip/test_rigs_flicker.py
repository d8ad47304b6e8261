"""The same scenes under a flickering lamp, under steady light, and with lost events: what the pictures lose by it."""

from dataclasses import replace

import numpy as np
import pytest

from enhance.calibrate import calibrate
from enhance.clip.keys import Keys
from enhance.clip.pictures import Pictures
from enhance.clip.source import events_on_frames
from enhance.recording import By, Kind
from enhance.settings import RigSettings
from enhance.simulate import Camera, EventSensor, Simulated, make_scene, simulate
from enhance.simulate.lost import with_gap

pytestmark = pytest.mark.slow
SIZE = (112, 96)
KINDS = ("parts", "drops", "text", "texture")


def psnr(truth: np.ndarray, picture: np.ndarray) -> float:
    return float(-10 * np.log10(np.mean((truth.astype(np.float64) - np.clip(picture, 0, 1)) ** 2)))


def recorded(kind: str, depth: float) -> Simulated:
    scene = make_scene(kind, SIZE, np.random.default_rng(5), 600.0)
    camera = Camera(rate_hz=36.0, exposure_us=12_000, start_us=9_000)
    sensor = EventSensor(0.2, 0.23, mismatch=0.03, noise_hz=0.5, lamp_depth=depth)
    return simulate(scene, camera, sensor, 0.25, 5)


def pictures(simulated: Simulated) -> Pictures:
    recording = simulated.recording
    keys = range(len(recording.frames))
    rig = calibrate(recording, keys, RigSettings())
    return Pictures(Keys(recording.frames, keys, events_on_frames(recording, rig), rig))


def figures(simulated: Simulated) -> dict[str, float]:
    made = pictures(simulated)
    times, frames = made.keys.times_us, simulated.recording.frames
    inner = range(1, len(times) - 1)
    between = [times[k] + i * (times[k + 1] - times[k]) // 4 for k in inner for i in (1, 2, 3)]
    return {
        "captured": float(np.mean([psnr(simulated.truth(times[k]), frames.frame(k).image) for k in inner])),
        "keys": float(np.mean([psnr(simulated.truth(times[k]), made.at(times[k]).image) for k in inner])),
        "inserted": float(np.mean([psnr(simulated.truth(t), made.at(t).image) for t in between])),
    }


def test_pictures_under_a_lamp_are_near_those_under_steady_light(capsys: pytest.CaptureFixture[str]) -> None:
    lost: dict[str, list[float]] = {"keys": [], "inserted": []}
    for kind in KINDS:
        steady, lit = figures(recorded(kind, 0.0)), figures(recorded(kind, 0.2))
        with capsys.disabled():
            print(f"\n{kind:8}" + "".join(f"  {name}: steady {steady[name]:.2f} lamp {lit[name]:.2f}" for name in lit))
        assert lit["keys"] > lit["captured"]
        for name, values in lost.items():
            values.append(steady[name] - lit[name])
    with capsys.disabled():
        print("lost by the lamp, mean dB: " + ", ".join(f"{name} {np.mean(v):.2f}" for name, v in lost.items()))
    assert np.mean(lost["keys"]) <= 1.0
    assert np.mean(lost["inserted"]) <= 1.0


def test_a_span_that_lost_its_events_is_made_from_frames_and_the_others_as_before() -> None:
    whole = recorded("drops", 0.0)
    start = int(whole.recording.frames.end_us[3]) + 2_000
    broken = with_gap(whole, start, start + 8_000)
    usual, made = pictures(whole), pictures(broken)
    times = made.keys.times_us
    middle = [(times[k] + times[k + 1]) // 2 for k in range(len(times) - 1)]
    kinds = [made.at(t).by for t in middle]
    assert kinds[3] is By.FRAMES
    assert [by for k, by in enumerate(kinds) if k != 3] == [By.INTEGRAL] * (len(kinds) - 1)
    assert made.at(times[1]).kind is Kind.DEBLURRED
    assert (
        psnr(whole.truth(middle[1]), made.at(middle[1]).image)
        > psnr(whole.truth(middle[1]), usual.at(middle[1]).image) - 0.7
    )


def test_looking_for_bad_pixels_costs_nothing_on_clean_recordings(capsys: pytest.CaptureFixture[str]) -> None:
    for kind in ("parts", "drops", "text"):
        simulated = recorded(kind, 0.0)
        recording, keys = simulated.recording, range(len(simulated.recording.frames))
        rig = calibrate(recording, keys, RigSettings())
        none = replace(rig.hot_pixels, value=[])
        plain = replace(rig, hot_pixels=none, dead_pixels=none)
        values = []
        for one in (rig, plain):
            made = Pictures(Keys(recording.frames, keys, events_on_frames(recording, one), one))
            values.append(np.mean([psnr(simulated.truth(t), made.at(t).image) for t in made.keys.times_us]))
        with capsys.disabled():
            print(f"\n{kind}: cost of bad pixels {values[1] - values[0]:.3f} dB")
        assert values[1] - values[0] < 0.1
