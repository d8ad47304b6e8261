"""The job file's tables and keys, one model a table: what each value may be, and what is not built yet.

A value that stands in the contract but whose work is not built yet is refused by name, with what to do instead.
Mistakes of one value stand here; those that need two keys or a file stand in `checks`.
"""

from __future__ import annotations

import math
from fractions import Fraction
from typing import Annotated, Any, Literal, NoReturn

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field, PlainValidator

from enhance.clock import parse_duration, parse_exact
from enhance.light import check_curve

#: A factor beyond this asks for more pictures than events can tell apart, and is a slip of the hand.
HIGHEST_FACTOR = 1000
#: Colours of a raw picture's top left two by two pixels, row by row.
MOSAICS = ("none", "RGGB", "BGGR", "GRBG", "GBRG")
#: ln(7.4): no event sensor is set so coarse; a percentage written as a whole number is far above.
HIGHEST_CONTRAST = 2.0


def duration(value: Any) -> int:
    """Read a time with its unit as microseconds.

    Raises
    ------
    ValueError
        If it is no such text; a bare number is shown with a unit.
    """
    if isinstance(value, str):
        return parse_duration(value)
    if isinstance(value, int | float) and not isinstance(value, bool):
        raise ValueError(f'{value} has no unit; write for example "{value} ms" (s, ms, us or ns)')
    raise ValueError('expected a time with its unit, for example "20 ms" (s, ms, us or ns)')


def _not_before_zero(value: Any) -> int:
    time_us = duration(value)
    if time_us < 0:
        raise ValueError(f"found {value!r}; a time below 0 is not possible here")
    return time_us


def _number(value: Any) -> float | int:
    if isinstance(value, str):
        raise ValueError(f'found the text "{value}"; expected a number, without quotation marks')
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise ValueError("expected a number")
    if not math.isfinite(value):
        raise ValueError(f"found {value}; expected a finite number")
    return value


def _rate(value: Any) -> Fraction:
    number = _number(value)
    if number <= 0:
        raise ValueError(f"found {number}; a rate is above 0 pictures a second")
    return Fraction(str(number))  # 29.97 as written, not as the nearest binary number


def _least_psnr(value: Any) -> float:
    number = _number(value)
    if number < 0:
        raise ValueError(
            f"found {number}; pictures can be asked to reach 0 dB or more, such as 30. Leave the key out to mark none"
        )
    return float(number)


def _curve(value: Any) -> str:
    if not isinstance(value, str):
        raise ValueError('expected text, such as "srgb"')
    return check_curve(value)


def _crop(value: Any) -> tuple[int, int, int, int]:
    whole = isinstance(value, list) and all(isinstance(each, int) and not isinstance(each, bool) for each in value)
    if not whole or len(value) != 4:
        raise ValueError(f"found {value!r}; expected four whole numbers: [x, y, width, height]")
    x, y, width, height = value
    if min(x, y) < 0 or min(width, height) < 1:
        raise ValueError(f"found {value}; x and y start at 0, width and height are 1 or more")
    return x, y, width, height


def _contrast(value: Any) -> tuple[float, float] | None:
    if value == "estimate":
        return None
    if not isinstance(value, list) or len(value) != 2:
        raise ValueError('expected two thresholds, positive and negative, such as [0.20, 0.22], or "estimate"')
    positive, negative = (float(_number(each)) for each in value)
    if not all(0 < each <= HIGHEST_CONTRAST for each in (positive, negative)):
        raise ValueError(
            f"found {value}; a threshold is a difference of natural logarithms of light: above 0, at most "
            f"{HIGHEST_CONTRAST:g}, and 0.2 for about 20 %"
        )
    return positive, negative


def _clock(value: Any) -> Any:
    if value == "estimate":
        return None
    if value == "shared":
        return {"offset": "0 us", "drift_ppm": 0.0}
    if isinstance(value, dict) and value:
        return value
    raise ValueError(
        'expected { offset = "0 us", drift_ppm = 0.0 }, { triggers = "triggers.csv" }, "shared" or "estimate"'
    )


def _not_built(what: str, instead: str) -> NoReturn:
    raise ValueError(f"{what} is not built yet in this version; {instead}")


def _shutter(value: Any) -> str:
    if value not in ("global", "rolling"):
        raise ValueError(f'found {value!r}; expected "global" or "rolling"')
    return str(value)


def _row_time(value: Any) -> float | None:
    if value == "estimate":
        return None
    if not isinstance(value, str):
        unit = f"{value} us" if isinstance(value, int | float) and not isinstance(value, bool) else "14.8 us"
        raise ValueError(
            f'found {value!r}; expected the time from a row to the next with its unit, "{unit}", or "estimate"'
        )
    row_time = float(parse_exact(value))
    if row_time == 0:
        raise ValueError(
            f'found {value!r}; rows exposed at the same time are a global shutter: write shutter = "global"'
        )
    return row_time


def _mosaic(value: Any) -> str:
    if value not in MOSAICS:
        raise ValueError(f"found {value!r}; expected {', '.join(MOSAICS[:-1])} or {MOSAICS[-1]}")
    return str(value)


def _registration(value: Any) -> Any:
    if isinstance(value, dict) and value:
        return value
    return {"matrix": value}


def _matrix(value: Any) -> str | tuple[tuple[float, ...], ...]:
    if value in ("shared", "estimate"):
        return str(value)
    rows = value if isinstance(value, list) else []
    if len(rows) != 3 or not all(isinstance(row, list) and len(row) == 3 for row in rows):
        raise ValueError(
            'expected "shared", "estimate", a matrix of three rows such as [[4, 0, 1.5], [0, 4, 1.5], [0, 0, 1]], or '
            '{ matrix = ..., frame_lens = "frames.yml", event_lens = "events.yml" }'
        )
    matrix = tuple(tuple(float(_number(each)) for each in row) for row in rows)
    (a, b, c), (d, e, f), (g, h, i) = matrix
    # |det| <= |row 1| |row 2| |row 3| (Hadamard): a thousand millionth part of that is none
    size = math.prod(math.hypot(*row) for row in matrix)
    if abs(a * (e * i - f * h) - b * (d * i - f * g) + c * (d * h - e * g)) <= 1e-9 * size:
        raise ValueError(
            f"found {value}, which is singular: it maps the whole sensor onto a line or a point; expected the map from "
            f'event pixels to frame pixels. Write "estimate" to have it measured'
        )
    return matrix


def _writable(text: str) -> str:
    if "\0" in text:
        raise ValueError("holds a zero byte, which no name can; write the name anew")
    return text


Duration = Annotated[int, PlainValidator(duration)]
LaterDuration = Annotated[int, PlainValidator(_not_before_zero)]
Rate = Annotated[Fraction, PlainValidator(_rate)]
Number = Annotated[float, PlainValidator(_number)]
Name = Annotated[str, Field(min_length=1), AfterValidator(_writable)]
Factor = Annotated[int, Field(ge=1, le=HIGHEST_FACTOR)]


class _Table(BaseModel):
    model_config = ConfigDict(strict=True, extra="forbid", frozen=True, arbitrary_types_allowed=True)


class FramesTable(_Table):
    """``[frames]``."""

    source: Name
    times: Name | None = None
    exposure: LaterDuration | None = None
    time_marks: Literal["start", "middle", "end"] = "start"
    light_curve: Annotated[str, PlainValidator(_curve)] | None = None
    black: Number | None = None
    white: Number | None = None
    shutter: Annotated[str, PlainValidator(_shutter)] = "global"
    row_time: Annotated[float | None, PlainValidator(_row_time)] = None
    mosaic: Annotated[str, PlainValidator(_mosaic)] = "none"
    crop: Annotated[tuple[int, int, int, int], PlainValidator(_crop)] | None = None
    dark: Name | None = None
    level: Literal["estimate", "given"] = "estimate"


class ColumnsTable(_Table):
    """``events.columns``."""

    t: Name | None = None
    x: Name | None = None
    y: Name | None = None
    p: Name | None = None


class EventsTable(_Table):
    """``[events]``."""

    source: Name
    columns: ColumnsTable | None = None
    time_unit: Literal["s", "ms", "us", "ns"] = "us"
    size: Annotated[list[Annotated[int, Field(ge=1)]], Field(min_length=2, max_length=2)] | None = None
    cover: Annotated[list[Duration], Field(min_length=2, max_length=2)] | None = None


class ClockTable(_Table):
    """``rig.clock``."""

    offset: Duration | None = None
    drift_ppm: Number | None = None
    triggers: Name | None = None


class RegistrationTable(_Table):
    """``rig.registration``."""

    matrix: Annotated[str | tuple[tuple[float, ...], ...] | None, PlainValidator(_matrix)] = None
    frame_lens: Name | None = None
    event_lens: Name | None = None


class RigTable(_Table):
    """``[rig]``."""

    file: Name | None = None
    contrast: Annotated[tuple[float, float] | None, PlainValidator(_contrast)] = None
    clock: Annotated[ClockTable | None, BeforeValidator(_clock)] = None
    registration: Annotated[RegistrationTable | None, BeforeValidator(_registration)] = None
    unknown: Literal["stop", "frames"] = "stop"


class WindowTable(_Table):
    """One of ``slow_motion.windows``."""

    from_: Annotated[LaterDuration, Field(alias="from")]
    to: LaterDuration
    factor: Factor | None = None


class SlowMotionTable(_Table):
    """``[slow_motion]``."""

    factor: Factor | None = None
    scene_rate: Rate | None = None
    playback_rate: Rate = Fraction(30)
    windows: list[WindowTable] = []


class MeasureTable(_Table):
    """``[measure]``."""

    hold_out: Annotated[int, Field(ge=0)] = 0
    least_psnr: Annotated[float | None, PlainValidator(_least_psnr)] = None


class NetworkTable(_Table):
    """``[network]``."""

    use: Literal["fusion", "off"] = "fusion"


class OutputTable(_Table):
    """``[output]``."""

    folder: Name
    video: Literal["h264", "ffv1", "none"] = "h264"
    stills: Literal["none", "deblurred", "all"] = "all"
    times: list[LaterDuration] = []
    strip: bool = False
    trust: bool = False


class JobTables(_Table):
    """The whole file."""

    title: Name | None = None
    frames: FramesTable
    events: EventsTable
    output: OutputTable
    rig: RigTable = RigTable()
    slow_motion: SlowMotionTable | None = None
    measure: MeasureTable = MeasureTable()
    network: NetworkTable = NetworkTable()
