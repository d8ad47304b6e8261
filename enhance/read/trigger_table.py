"""Trigger pulses: when, in the event clock, each frame's exposure was started."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from enhance.errors import FramesError
from enhance.recording import FrameSource, Triggers

#: A pulse this soon after another, in the shortest frame interval, is an echo of it.
ECHO = 0.2
#: Two pulses whose distance is off by this part of the frames' are not those two frames'.
STRANGE = 0.3
_NAMES = ("time_us", "trigger_us", "t_us")


def read_triggers(path: Path, frames: FrameSource) -> Triggers:
    """Read the table of trigger pulses and match it with the frames.

    Parameters
    ----------
    path : Path
        Header ``frame,time_us`` (a file name or an index from 0) or ``time_us`` alone, in the frames' order; whole
        microseconds of the event clock.
    frames : FrameSource

    Returns
    -------
    Triggers
        One pulse a frame.

    Raises
    ------
    FramesError
        If the table cannot be read, a pulse is missing or doubled, or the pulses do not follow each other as the frames
        do.
    """
    columns, rows = _rows(path)
    time = next(name for name in _NAMES if name in columns)
    numbers = [number for number, _ in rows]
    times = np.array([_whole(path, number, row[time], time) for number, row in rows], dtype=np.int64)
    remarks: tuple[str, ...] = ()
    if "frame" in columns:
        order = _in_frame_order(path, [(number, row["frame"]) for number, row in rows], frames)
        numbers, times = [numbers[k] for k in order], times[order]
        _check_rising(path, numbers, times)
    else:
        _check_rising(path, numbers, times)
        numbers, times, remarks = _without_echoes(path, numbers, times, frames)
    _check_spacing(path, numbers, times, frames)
    return Triggers(times, remarks)


def _rows(path: Path) -> tuple[list[str], list[tuple[int, dict[str, str]]]]:
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            reader = csv.reader(file)
            columns = [name.strip() for name in next(reader, [])]
            cells = [(reader.line_num, [cell.strip() for cell in row]) for row in reader if any(c.strip() for c in row)]
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise FramesError(
            f"{path} cannot be read as a table of triggers: {error}. Check rig.clock.triggers."
        ) from error
    if sum(name in columns for name in _NAMES) != 1 or len(set(columns)) != len(columns):
        raise FramesError(
            f"{path}, row 1: columns {','.join(columns) or '(none)'}. Expected the header frame,time_us, or time_us "
            "alone with one row a frame in the frames' order; times in microseconds of the event clock."
        )
    for number, row in cells:
        if len(row) != len(columns):
            raise FramesError(
                f"{path}, row {number}: {len(row)} cells, expected {len(columns)} ({','.join(columns)}). Mend the row."
            )
    return columns, [(number, dict(zip(columns, row, strict=True))) for number, row in cells]


def _whole(path: Path, number: int, text: str, column: str) -> int:
    try:
        value = int(text)
    except ValueError:
        raise FramesError(
            f"{path}, row {number}: {column} is {text!r}, expected whole microseconds. Mend the row."
        ) from None
    # Beyond this there is no room left for an offset in 64 bits.
    if abs(value) >= 2**62:
        raise FramesError(f"{path}, row {number}: {column} is {text}, too large for microseconds. Mend the row.")
    return value


def _in_frame_order(path: Path, given: list[tuple[int, str]], frames: FrameSource) -> list[int]:
    """Positions of the rows, one for each frame."""
    names = {name: k for k, name in enumerate(frames.names)}
    found: dict[int, int] = {}
    for position, (number, key) in enumerate(given):
        index = names.get(key, int(key) if key.isdecimal() else -1)
        if not 0 <= index < len(frames):
            raise FramesError(
                f"{path}, row {number}: frame {key!r} is neither a file name nor an index from 0 to {len(frames) - 1} "
                f"of the {len(frames)} frames. Mend or remove the row."
            )
        if index in found:
            raise FramesError(
                f"{path}, row {number}: a doubled pulse: frame {key!r} stands in row {given[found[index]][0]} already. "
                "Each frame must have exactly one; remove the wrong one."
            )
        found[index] = position
    missing = [frames.names[k] for k in range(len(frames)) if k not in found]
    if missing:
        raise FramesError(
            f"{path}: {len(given)} pulses for {len(frames)} frames; missing is the pulse of frame {missing[0]}"
            f"{f' and of {len(missing) - 1} more' if len(missing) > 1 else ''}. Add the rows, or remove those frames "
            'from frames.times and frames.source; without a whole table write rig.clock = "estimate".'
        )
    return [found[k] for k in range(len(frames))]


def _check_rising(path: Path, numbers: list[int], times: NDArray[np.int64]) -> None:
    falling = np.flatnonzero(np.diff(times) <= 0)
    if len(falling):
        k = int(falling[0])
        raise FramesError(
            f"{path}, row {numbers[k + 1]}: the pulse at {times[k + 1]} us does not come after that at {times[k]} us "
            f"(row {numbers[k]}). Pulses must rise from frame to frame; mend the table."
        )


def _without_echoes(
    path: Path, numbers: list[int], times: NDArray[np.int64], frames: FrameSource
) -> tuple[list[int], NDArray[np.int64], tuple[str, ...]]:
    """Leave out pulses right behind another where exactly one a frame is left by it."""
    count = len(frames)
    usual = np.diff(frames.start_us)
    if len(times) > count > 1:
        echo = np.concatenate([[False], np.diff(times) < ECHO * usual.min()])
        left = times[~echo]
        if len(left) == count:
            at = ", ".join(str(numbers[k]) for k in np.flatnonzero(echo)[:5])
            remark = f"{int(echo.sum())} doubled trigger pulses right behind another were left out (row {at})"
            return [n for n, e in zip(numbers, echo, strict=True) if not e], left, (remark,)
    if len(times) != count:
        what = "missing" if len(times) < count else "doubled or foreign"
        raise FramesError(
            f"{path}: {len(times)} pulses for {count} frames, so {abs(len(times) - count)} are {what}"
            f"{_where(numbers, times, usual)}. Give exactly one a frame, or a column frame that says which is whose; "
            'without a whole table write rig.clock = "estimate".'
        )
    return numbers, times, ()


def _where(numbers: list[int], times: NDArray[np.int64], usual: NDArray[np.int64]) -> str:
    """Point at the first place where pulses and frames part."""
    gaps = np.diff(times)
    shared = min(len(gaps), len(usual))
    off = np.flatnonzero(np.abs(gaps[:shared] - usual[:shared]) > STRANGE * usual[:shared])
    if not len(off):
        return ", at the end"
    k = int(off[0])
    return f"; the first odd distance is {gaps[k]} us before row {numbers[k + 1]}, where the frames' is {usual[k]} us"


def _check_spacing(path: Path, numbers: list[int], times: NDArray[np.int64], frames: FrameSource) -> None:
    gaps, expected = np.diff(times), np.diff(frames.start_us)
    off = np.flatnonzero(np.abs(gaps - expected) > STRANGE * expected)
    if len(off):
        k = int(off[0])
        raise FramesError(
            f"{path}, row {numbers[k + 1]}: this pulse comes {gaps[k]} us after the one before, but its frame "
            f"({frames.names[k + 1]}) {expected[k]} us. A pulse is missing or doubled, the rows are not the frames' "
            "or the times are not microseconds; mend the table."
        )
