"""rig.toml: written, read back, and refused with the reason."""

import re
import tomllib

import numpy as np
import pytest

from enhance.calibrate import read_rig, rig_text
from enhance.errors import CalibrationError
from enhance.rig import Quantity, Rig

SIZE = (346, 260)
FULL = Rig(
    offset_us=Quantity(-6_712, 41.5, "correlation", 'over 12 "pairs"; a \\ and a\nnew line'),
    drift_ppm=Quantity(-12.25, None, "given"),
    contrast_positive=Quantity(0.2013, 0.002, "regression", "π ≈ 3 \U0001f600 \x7f"),
    contrast_negative=Quantity(np.float64(0.31), np.float32(0.5), "regression"),
    ramp_us=Quantity(1_410),
    hot_pixels=Quantity([[0, 0], [345, 259]]),
    frame_noise=Quantity([0.00135, 4.68e-05]),
    sensor_size=SIZE,
)


def write(tmp_path, text):
    path = tmp_path / "rig.toml"
    path.write_text(text, encoding="utf-8")
    return path


def test_every_value_and_uncertainty_survives_the_round_trip(tmp_path):
    rig = read_rig(write(tmp_path, rig_text(FULL)), SIZE)
    for name in (
        "offset_us",
        "drift_ppm",
        "contrast_positive",
        "contrast_negative",
        "ramp_us",
        "hot_pixels",
        "frame_noise",
    ):
        assert np.allclose(getattr(rig, name).value, getattr(FULL, name).value, rtol=1e-6, atol=1e-9), name
        assert getattr(rig, name).uncertainty == pytest.approx(getattr(FULL, name).uncertainty), name
        assert getattr(rig, name).method == "rig file"
        assert getattr(rig, name).evidence == f"rig.toml: {getattr(FULL, name).method}"
    assert isinstance(rig.offset_us.value, int)
    assert rig.sensor_size == SIZE


def test_the_sections_are_those_of_the_contract():
    document = tomllib.loads(rig_text(FULL))
    assert document["clock"]["offset_us"] == {
        "value": -6_712,
        "uncertainty": 41.5,
        "method": "correlation",
        "evidence": FULL.offset_us.evidence,
    }
    assert document["contrast"]["positive"]["evidence"] == FULL.contrast_positive.evidence
    assert document["sensor"]["size"] == [346, 260]


def test_an_epoch_sized_offset_stays_exact(tmp_path):
    rig = Rig(Quantity(-1_589_163_147_364_965), *[Quantity(0.2)] * 3, sensor_size=SIZE)
    assert read_rig(write(tmp_path, rig_text(rig)), SIZE).offset_us.value == -1_589_163_147_364_965


def test_a_rig_of_plain_defaults_can_be_written(tmp_path):
    rig = read_rig(write(tmp_path, rig_text(Rig(Quantity(0), *[Quantity(0.2)] * 3, sensor_size=SIZE))), SIZE)
    assert rig.hot_pixels.value == []
    assert rig.frame_noise.value == [0.002, 5e-5]


def test_an_unknown_is_left_out_with_its_reason(tmp_path):
    rig = Rig(Quantity(None, None, "estimate", "too little motion"), *[Quantity(0.2)] * 3, sensor_size=SIZE)
    text = rig_text(rig)
    assert "value" not in tomllib.loads(text)["clock"]["offset_us"]
    assert tomllib.loads(text)["clock"]["offset_us"]["evidence"] == "too little motion"
    assert read_rig(write(tmp_path, text), SIZE).offset_us.value is None


def test_what_the_file_lacks_is_unknown_with_the_reason(tmp_path):
    rig = read_rig(write(tmp_path, "[sensor]\nsize = [346, 260]\n[contrast.positive]\nvalue = 0.2\n"), SIZE)
    assert rig.contrast_positive.value == 0.2
    assert rig.contrast_positive.evidence == "rig.toml: method not stated"
    assert (rig.offset_us.value, rig.offset_us.evidence) == (None, "rig.toml does not tell")


def test_a_missing_file_is_named(tmp_path):
    with pytest.raises(CalibrationError, match=r"gone.toml: this rig file cannot be read .*; measure the rig anew"):
        read_rig(tmp_path / "gone.toml", SIZE)


@pytest.mark.parametrize("content", [b"[sensor", b"\xff\xfe", b'a = "\\ud83d"'])
def test_a_damaged_file_is_named(tmp_path, content):
    path = tmp_path / "rig.toml"
    path.write_bytes(content)
    with pytest.raises(CalibrationError, match=r"rig.toml: this rig file cannot be read .*; measure the rig anew"):
        read_rig(path, SIZE)


@pytest.mark.parametrize(
    ("text", "found"),
    [("[sensor]\nsize = [640, 480]\n", "[640, 480]"), ("", "None"), ("sensor = 3\n", "None")],
)
def test_a_file_of_another_sensor_is_refused(tmp_path, text, found):
    message = f"rig.toml: this rig file is for a sensor of {found}, the events are of [346, 260] (width, height)"
    with pytest.raises(CalibrationError, match=re.escape(message)):
        read_rig(write(tmp_path, text), SIZE)


@pytest.mark.parametrize(
    ("section", "value", "expected"),
    [
        ("clock.offset_us", "1.5", "expected whole microseconds"),
        ("clock.offset_us", "true", "expected whole microseconds"),
        ("clock.drift_ppm", "2000", "expected a number between -1000 and 1000"),
        ("clock.drift_ppm", "nan", "expected a number between -1000 and 1000"),
        ("contrast.positive", "0.0", "expected a number between 0.01 and 2"),
        ("contrast.negative", "-0.2", "expected a number between 0.01 and 2"),
        ("contrast.negative", '"0.2"', "expected a number between 0.01 and 2"),
        ("contrast.ramp_us", "-1", "expected microseconds, 0 or more"),
        ("pixels.hot", "3", r"expected a list of \[x, y\]"),
        ("pixels.hot", "[[1, 2, 3]]", r"expected a list of \[x, y\]"),
        ("pixels.hot", "[[-1, 2]]", r"expected a list of \[x, y\]"),
        ("frames.noise", "[0.1]", "expected two numbers from 0 to 1: floor and shot"),
        ("frames.noise", "[inf, 0.1]", "expected two numbers from 0 to 1: floor and shot"),
    ],
)
def test_values_that_cannot_be_are_refused(tmp_path, section, value, expected):
    path = write(tmp_path, f"[sensor]\nsize = [346, 260]\n[{section}]\nvalue = {value}\n")
    with pytest.raises(CalibrationError, match=rf"rig.toml, \[{section}\]: value .* cannot be; {expected}; mend the"):
        read_rig(path, SIZE)


@pytest.mark.parametrize("pixel", [[346, 0], [0, 260]])
def test_hot_pixels_outside_the_sensor_are_refused(tmp_path, pixel):
    path = write(tmp_path, f"[sensor]\nsize = [346, 260]\n[pixels.hot]\nvalue = [[1, 1], {pixel}]\n")
    message = rf"\[pixels.hot\]: pixel \[{pixel[0]}, {pixel[1]}\] lies outside the sensor of \[346, 260\]; expected"
    with pytest.raises(CalibrationError, match=message):
        read_rig(path, SIZE)
