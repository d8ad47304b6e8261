"""Whole jobs on frames of changing gain, with clipped light, and on raw mosaics."""

import json
import tomllib
from dataclasses import replace

import numpy as np
import pytest

from enhance.clip import run
from enhance.settings import ClipSettings, EventsSettings, FramesSettings, OutputSettings, RigSettings
from enhance.simulate import Camera, EventSensor, make_scene, simulate, write_recording

SIZE = (112, 96)


def job(tmp_path, color=False, **camera):
    scene = make_scene("parts", SIZE, np.random.default_rng(5), 500.0, color=color)
    camera = Camera(rate_hz=40.0, exposure_us=12_000, start_us=9_000, **camera)
    simulated = simulate(scene, camera, EventSensor(0.2, 0.23, mismatch=0.03, noise_hz=0.5), 0.2, 5)
    write_recording(simulated, tmp_path)
    frames = FramesSettings(tmp_path / "frames", tmp_path / "frames.csv", light_curve="linear", mosaic=camera.mosaic)
    events = EventsSettings(tmp_path / "events.h5", size=SIZE, cover_us=(0, 200_000))
    rig = RigSettings(contrast=(0.2, 0.23), offset_us=0, drift_ppm=0.0)
    return ClipSettings("Small", frames, events, OutputSettings(tmp_path / "out"), rig=rig, network="off"), simulated


def finished(settings):
    result = run(settings, lambda *_: None)
    folder = settings.output.folder
    return result, tomllib.loads((folder / "rig.toml").read_text()), json.loads((folder / "quality.json").read_text())


def stills(settings):
    import cv2

    paths = sorted((settings.output.folder / "stills").glob("*.png"))
    return np.stack([cv2.imread(str(path), cv2.IMREAD_UNCHANGED) for path in paths]) / 65535


def test_a_gain_in_the_table_is_taken_out_and_said(tmp_path):
    settings, _ = job(tmp_path, gains=(1.0, 0.7))
    result, rig, _ = finished(settings)
    assert any("gains from 0.7 to 1: all frames are brought to the light of gain" in note for note in result.notes)
    assert rig["frames"]["brightness"]["value"] == []
    level = np.median(stills(settings), axis=(1, 2))
    assert np.ptp(level) < 0.03 * level.mean()


def test_a_gain_that_no_table_tells_is_found_unless_the_level_is_given(tmp_path):
    settings, _ = job(tmp_path, gains=(1.0, 0.7))
    table = tmp_path / "frames.csv"
    table.write_text("\n".join(line.rpartition(",")[0] for line in table.read_text().splitlines()) + "\n")
    result, rig, _ = finished(settings)
    assert any("the frames' brightness steps without any event: 0.6999" in note for note in result.notes)
    factors = [factor for _, factor in rig["frames"]["brightness"]["value"]]
    assert factors == pytest.approx([0.7, 1 / 0.7] * 3 + [0.7] * (len(factors) % 2), rel=0.01)
    level = np.median(stills(settings), axis=(1, 2))
    assert np.ptp(level) < 0.03 * level.mean()
    given = replace(settings, frames=replace(settings.frames, level="given"))
    result, rig, _ = finished(replace(given, output=OutputSettings(tmp_path / "given")))
    assert not any("brightness" in note for note in result.notes)
    assert "value" not in rig["frames"]["brightness"]


def test_clipped_light_is_counted_and_told(tmp_path):
    settings, simulated = job(tmp_path, gains=(4.0,))
    settings = replace(settings, frames=replace(settings.frames, level="given"))
    result, _, quality = finished(settings)
    codes = simulated.recording.frames.codes
    assert quality["clipped"]["ceiling"] == pytest.approx(np.mean(codes >= 254))
    assert quality["clipped"]["keys"] == len(codes)
    assert any("of the keys' pixels are clipped at full scale" in note for note in result.notes)


def test_a_mosaic_comes_out_in_colour(tmp_path):
    settings, simulated = job(tmp_path, color=True, mosaic="GBRG")
    finished(settings)
    frames = simulated.recording.frames
    for still, start, end in zip(stills(settings), frames.start_us, frames.end_us, strict=True):
        truth = simulated.truth((start + end) // 2)
        # red for blue
        assert np.mean((still[..., ::-1] - truth) ** 2) < 0.7 * np.mean((still - truth) ** 2)
