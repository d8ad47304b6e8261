"""rig.toml: what was measured of a rig, with uncertainty, method and evidence, to be read by people and fed back in."""

from __future__ import annotations

import json
import tomllib
from dataclasses import replace
from numbers import Integral
from pathlib import Path
from typing import Any

import numpy as np

from enhance.calibrate.lens_file import COEFFICIENTS
from enhance.errors import CalibrationError
from enhance.rig import Quantity, Rig

#: Decimals of a value in the file: far finer than anything is measured.
DIGITS = 9
#: Section of the file for each quantity of a rig.
SECTIONS = {
    "offset_us": "clock.offset_us",
    "drift_ppm": "clock.drift_ppm",
    "contrast_positive": "contrast.positive",
    "contrast_negative": "contrast.negative",
    "ramp_us": "contrast.ramp_us",
    "hot_pixels": "pixels.hot",
    "frame_noise": "frames.noise",
    "row_time_us": "frames.row_time_us",
    "registration": "registration.matrix",
    "frame_lens": "registration.frame_lens",
    "event_lens": "registration.event_lens",
    "dead_pixels": "pixels.dead",
    "flicker_hz": "flicker.frequency_hz",
    "flicker_depth": "flicker.depth",
    "flicker_phase": "flicker.phase",
    "flicker_in_frames": "flicker.in_frames",
}
#: Sections that are written for people and not read back: they are of one recording, and are found anew in each.
OWN = {"stripes": "frames.stripes", "brightness": "frames.brightness"}


def rig_text(rig: Rig) -> str:
    """Write a rig as TOML.

    Parameters
    ----------
    rig : Rig

    Returns
    -------
    str
        One table a quantity; a value that cannot be told is left out, its evidence says why.
    """
    width, height = rig.sensor_size
    lines = [
        "# How the event sensor and the frame camera relate: t_frame = t_event + offset + 1e-6 * drift * elapsed.",
        "# Thresholds are in natural log units. Feed it back with rig.file.",
        "",
        "[sensor]",
        f"size = [{width}, {height}]",
    ]
    for name, section in (SECTIONS | OWN).items():
        quantity: Quantity = getattr(rig, name)
        lines += ["", f"[{section}]"]
        if quantity.value is not None:
            lines.append(f"value = {_number(quantity.value)}")
        if quantity.uncertainty is not None:
            lines.append(f"uncertainty = {_number(quantity.uncertainty)}")
        lines += [f"method = {_text(quantity.method)}", f"evidence = {_text(quantity.evidence)}"]
    return "\n".join(lines) + "\n"


def as_written(rig: Rig) -> Rig:
    """Round a rig as its file does, so that one that is fed back in gives the same pictures to the byte."""
    changes: dict[str, Any] = {}
    for name in SECTIONS:
        quantity: Quantity = getattr(rig, name)
        if isinstance(quantity.value, float):
            changes[name] = replace(quantity, value=round(quantity.value, DIGITS))
        elif name in ("frame_noise", "registration", "frame_lens", "event_lens") and quantity.value is not None:
            changes[name] = replace(quantity, value=_rounded(quantity.value))
    return replace(rig, **changes)


def _rounded(value: Any) -> Any:
    return [_rounded(each) for each in value] if isinstance(value, (list, tuple)) else round(float(value), DIGITS)


def read_rig(path: Path, sensor_size: tuple[int, int]) -> Rig:
    """Read a rig file.

    Parameters
    ----------
    path : Path
    sensor_size : tuple of int
        Width, height of the sensor it must be for.

    Returns
    -------
    Rig
        Every quantity's method says that it comes from the file; what the file lacks has the value None.

    Raises
    ------
    CalibrationError
        If it cannot be read, is of another sensor size, or holds a value that cannot be.
    """
    try:
        document = tomllib.loads(path.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise CalibrationError(f"{path}: this rig file cannot be read ({error}); measure the rig anew") from error
    size = document.get("sensor", {}).get("size") if isinstance(document.get("sensor"), dict) else None
    if size != list(sensor_size):
        raise CalibrationError(
            f"{path}: this rig file is for a sensor of {size}, the events are of {list(sensor_size)} "
            f"(width, height); use the file measured on this sensor"
        )
    quantities = {name: _quantity(document, name, section, path) for name, section in SECTIONS.items()}
    bad = [(name, p) for name in ("hot_pixels", "dead_pixels") for p in quantities[name].value or []]
    outside = [(name, p) for name, p in bad if p[0] >= sensor_size[0] or p[1] >= sensor_size[1]]
    if outside:
        raise CalibrationError(
            f"{path}, [{SECTIONS[outside[0][0]]}]: pixel {outside[0][1]} lies outside the sensor of "
            f"{list(sensor_size)}; "
            f"expected 0 <= x < width and 0 <= y < height; mend the file or measure the rig anew"
        )
    return Rig(sensor_size=sensor_size, **quantities)


def _text(text: str) -> str:
    """Quote a text; a JSON string is a TOML string but for surrogates and the delete character."""
    return json.dumps(text.encode("utf-8", "replace").decode(), ensure_ascii=False).replace("\x7f", "\\u007f")


def _number(value: Any) -> str:
    if isinstance(value, (list, tuple)):
        return "[" + ", ".join(_number(v) for v in value) + "]"
    return str(int(value)) if isinstance(value, Integral) else repr(round(float(value), DIGITS))


def _quantity(document: dict[str, Any], name: str, section: str, path: Path) -> Quantity:
    table: Any = document
    for key in section.split("."):
        table = table.get(key) if isinstance(table, dict) else None
    if not isinstance(table, dict) or "value" not in table:
        return Quantity(None, None, "rig file", f"{path.name} does not tell")
    value = table["value"]
    if not _sound(name, value):
        raise CalibrationError(
            f"{path}, [{section}]: value {value!r} cannot be; expected {_EXPECTED[name]}; "
            f"mend the file or measure the rig anew"
        )
    evidence = f"{path.name}: {table.get('method', 'method not stated')}"
    uncertainty = table.get("uncertainty")
    return Quantity(value, float(uncertainty) if isinstance(uncertainty, (int, float)) else None, "rig file", evidence)


_EXPECTED = {
    "offset_us": "whole microseconds",
    "drift_ppm": "a number between -1000 and 1000",
    "contrast_positive": "a number between 0.01 and 2",
    "contrast_negative": "a number between 0.01 and 2",
    "ramp_us": "microseconds, 0 or more",
    "hot_pixels": "a list of [x, y]",
    "frame_noise": "two numbers from 0 to 1: floor and shot",
    "registration": "three rows of three numbers that are no singular matrix",
    "frame_lens": "fx, fy, cx, cy and 4, 5, 8, 12 or 14 coefficients",
    "event_lens": "fx, fy, cx, cy and 4, 5, 8, 12 or 14 coefficients",
    "dead_pixels": "a list of [x, y]",
    "row_time_us": "microseconds, -100000 to 100000",
    "flicker_hz": "hertz, 20 to 5000",
    "flicker_depth": "a number from 0 to 1",
    "flicker_phase": "radians, -7 to 7",
    "flicker_in_frames": "0 or 1",
}


#: Lowest and highest of what is one number.
_BOUNDS = {
    "drift_ppm": (-1000.0, 1000.0),
    "contrast_positive": (0.01, 2.0),
    "contrast_negative": (0.01, 2.0),
    "row_time_us": (-1e5, 1e5),
    "flicker_hz": (20.0, 5000.0),
    "flicker_depth": (0.0, 1.0),
    "flicker_phase": (-7.0, 7.0),
    "flicker_in_frames": (0.0, 1.0),
}


def _sound(name: str, value: Any) -> bool:
    number = isinstance(value, (int, float)) and not isinstance(value, bool)
    if name == "offset_us":
        return isinstance(value, int) and number
    if name in _BOUNDS:
        return number and _BOUNDS[name][0] <= value <= _BOUNDS[name][1]
    if name == "ramp_us":
        return isinstance(value, int) and number and value >= 0
    if not isinstance(value, list):
        return False
    if name == "registration":
        return _is_matrix(value)
    if name.endswith("_lens"):
        return len(value) - 4 in COEFFICIENTS and all(map(_is_number, value)) and min(value[:2]) > 0
    if name == "frame_noise":
        return len(value) == 2 and all(isinstance(v, (int, float)) and 0 <= v <= 1 for v in value)
    return all(isinstance(p, list) and len(p) == 2 and all(isinstance(v, int) and v >= 0 for v in p) for p in value)


def _is_number(value: Any) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and bool(np.isfinite(value))


def _is_matrix(value: list[Any]) -> bool:
    shaped = len(value) == 3 and all(isinstance(row, list) and len(row) == 3 for row in value)
    if not shaped or not all(_is_number(each) for row in value for each in row):
        return False
    return abs(float(np.linalg.det(value))) > 1e-9 * float(np.prod(np.linalg.norm(value, axis=1)))
