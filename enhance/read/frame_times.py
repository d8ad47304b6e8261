"""When each frame was exposed: the times table, or one time a frame and the exposure."""

from __future__ import annotations

import csv
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from enhance.errors import FramesError, JobError
from enhance.settings import FramesSettings


@dataclass(frozen=True)
class Exposures:
    """Row 0's exposure of every frame.

    Parameters
    ----------
    start_us, end_us : ndarray of int64, shape (K,)
    gain : ndarray of float64, shape (K,)
    notes : tuple of str
    """

    start_us: NDArray[np.int64]
    end_us: NDArray[np.int64]
    gain: NDArray[np.float64]
    notes: tuple[str, ...] = ()


@dataclass(frozen=True)
class _Row:
    """One row of the table, with its number in the file (the header is row 1)."""

    number: int
    values: dict[str, str]


def read_table(settings: FramesSettings, names: Sequence[str]) -> Exposures:
    """Read the times table and match it with the frames.

    Parameters
    ----------
    settings : FramesSettings
        `times` is the table; `exposure_us` and `time_marks` count where it has one time a frame.
    names : sequence of str
        The frames' names, in order.

    Returns
    -------
    Exposures

    Raises
    ------
    FramesError
        If the table does not give each frame one possible exposure.
    JobError
        If the exposure is missing.
    """
    if settings.times is None:
        raise JobError(
            "frames.times is missing: images carry no times of their own. "
            "Give a table with the columns frame,start_us,end_us or frame,time_us."
        )
    path = settings.times
    columns, rows = _read_rows(path)
    ordered = _in_frame_order(path, rows, names)
    notes = []
    unused = [column for column in columns if column not in ("frame", "start_us", "end_us", "time_us", "gain")]
    if unused:
        notes.append(f"{path}: columns {', '.join(unused)} are not used")
    if "time_us" in columns:
        time_us = np.array([_whole(path, row, "time_us") for row in ordered], dtype=np.int64)
        start_us, end_us = around(time_us, settings)
    else:
        start_us = np.array([_whole(path, row, "start_us") for row in ordered], dtype=np.int64)
        end_us = np.array([_whole(path, row, "end_us") for row in ordered], dtype=np.int64)
        if settings.exposure_us is not None and np.any(end_us - start_us != settings.exposure_us):
            notes.append(f"frames.exposure is not used: {path} gives the end of each exposure")
    _check_order(start_us, end_us, [f"{path}, row {row.number}" for row in ordered], "mend the table")
    return Exposures(start_us, end_us, _gain(path, ordered, columns), tuple(notes))


def from_stamps(settings: FramesSettings, stamps_us: NDArray[np.int64]) -> Exposures:
    """Turn a video's own time stamps into exposures.

    Parameters
    ----------
    settings : FramesSettings
    stamps_us : ndarray of int64, shape (K,)

    Returns
    -------
    Exposures

    Raises
    ------
    FramesError
        If the exposures overlap.
    JobError
        If the exposure is missing.
    """
    start_us, end_us = around(stamps_us, settings)
    where = [f"{settings.source}, frame {i}" for i in range(len(stamps_us))]
    _check_order(start_us, end_us, where, "give the true times in a table: frames.times")
    return Exposures(start_us, end_us, np.ones(len(stamps_us)))


def around(time_us: NDArray[np.int64], settings: FramesSettings) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Lay the exposure around one time a frame.

    Parameters
    ----------
    time_us : ndarray of int64, shape (K,)
    settings : FramesSettings

    Returns
    -------
    start_us, end_us : ndarray of int64, shape (K,)

    Raises
    ------
    JobError
        If the exposure is missing or negative, or what the time marks is unknown.
    """
    exposure = settings.exposure_us
    if exposure is None:
        raise JobError(
            "frames.exposure is missing: with one time a frame the length of the exposure must be given, "
            'for example exposure = "20 ms" (0 ms: the frames are sharp).'
        )
    if exposure < 0:
        raise JobError(f"frames.exposure is {exposure} us; it must not be negative.")
    # The middle is floor((start + end) / 2): half an odd exposure is floored here, so that it comes out again.
    before = {"start": 0, "middle": exposure // 2, "end": exposure}.get(settings.time_marks)
    if before is None:
        raise JobError(f'frames.time_marks is "{settings.time_marks}"; expected start, middle or end.')
    return time_us - before, time_us - before + exposure


def _read_rows(path: Path) -> tuple[list[str], list[_Row]]:
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            reader = csv.reader(file)
            columns = [name.strip() for name in next(reader, [])]
            _check_columns(path, columns)
            rows = []
            for cells in reader:
                if not any(cell.strip() for cell in cells):
                    continue
                if len(cells) != len(columns):
                    raise FramesError(
                        f"{path}, row {reader.line_num}: {len(cells)} cells, expected {len(columns)} "
                        f"({','.join(columns)}). Mend the row."
                    )
                values = dict(zip(columns, (cell.strip() for cell in cells), strict=True))
                rows.append(_Row(reader.line_num, values))
    except FramesError:
        raise
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise FramesError(f"{path} cannot be read as a table of times: {error}. Check frames.times.") from error
    return columns, rows


def _check_columns(path: Path, columns: list[str]) -> None:
    both = {"start_us", "end_us"} <= set(columns)
    one = "time_us" in columns
    if "frame" not in columns or both == one or len(set(columns)) != len(columns):
        raise FramesError(
            f"{path}, row 1: columns {','.join(columns) or '(none)'}. Expected the header frame,start_us,end_us "
            "(and gain, if it changes) or frame,time_us; write one of the two."
        )


def _in_frame_order(path: Path, rows: list[_Row], names: Sequence[str]) -> list[_Row]:
    by_name = {name: i for i, name in enumerate(names)}
    ordered: list[_Row | None] = [None] * len(names)
    for row in rows:
        key = row.values["frame"]
        index = by_name.get(key, int(key) if key.isdecimal() else -1)
        if not 0 <= index < len(names):
            raise FramesError(
                f"{path}, row {row.number}: frame {key!r} is neither a file name nor an index from 0 to "
                f"{len(names) - 1} of the {len(names)} frames. Mend or remove the row."
            )
        earlier = ordered[index]
        if earlier is not None:
            raise FramesError(
                f"{path}, row {row.number}: frame {key!r} stands in row {earlier.number} already. "
                "Each frame must stand exactly once; remove one of the two."
            )
        ordered[index] = row
    missing = [names[i] for i, row in enumerate(ordered) if row is None]
    if missing:
        raise FramesError(
            f"{path}: {len(rows)} rows for {len(names)} frames; no row for frame {missing[0]}"
            f"{f' and {len(missing) - 1} more' if len(missing) > 1 else ''}. Add the rows, or remove the frames."
        )
    return [row for row in ordered if row is not None]


def _whole(path: Path, row: _Row, column: str) -> int:
    text = row.values[column]
    try:
        value = int(text)
    except ValueError:
        raise FramesError(
            f"{path}, row {row.number}: {column} is {text!r}, expected whole microseconds. Mend the row."
        ) from None
    # Beyond this there is no room left for an offset in 64 bits.
    if abs(value) >= 2**62:
        raise FramesError(f"{path}, row {row.number}: {column} is {text}, too large for microseconds. Mend the row.")
    return value


def _gain(path: Path, rows: list[_Row], columns: list[str]) -> NDArray[np.float64]:
    gains = np.ones(len(rows))
    for i, row in enumerate(rows if "gain" in columns else ()):
        text = row.values["gain"]
        try:
            gains[i] = float(text)
        except ValueError:
            raise FramesError(f"{path}, row {row.number}: gain is {text!r}, expected a number. Mend the row.") from None
        if not 0 < gains[i] < np.inf:
            raise FramesError(
                f"{path}, row {row.number}: gain is {text}; expected a factor above 0 (6 dB are a factor of 2). "
                "Mend the row, or leave the column out."
            )
    return gains


def _check_order(start_us: NDArray[np.int64], end_us: NDArray[np.int64], where: list[str], remedy: str) -> None:
    backward = np.flatnonzero(end_us < start_us)
    if len(backward):
        i = int(backward[0])
        raise FramesError(
            f"{where[i]}: end_us {spaced(end_us[i])} is before start_us {spaced(start_us[i])}. Exposure must not be "
            "negative; mend the row, or give one time_us a frame and frames.exposure."
        )
    falling = np.flatnonzero(np.diff(start_us) <= 0)
    if len(falling):
        i = int(falling[0])
        raise FramesError(
            f"{where[i + 1]}: start {spaced(start_us[i + 1])} us does not come after {spaced(start_us[i])} us "
            f"({_place(where[i])}). Times must rise from frame to frame; {remedy}."
        )
    overlapping = np.flatnonzero(end_us[:-1] > start_us[1:])
    if len(overlapping):
        i = int(overlapping[0])
        raise FramesError(
            f"{where[i]}: the exposure ends at {spaced(end_us[i])} us, after the next one has started at "
            f"{spaced(start_us[i + 1])} us ({_place(where[i + 1])}). Exposures must not overlap; "
            f"check frames.exposure, or {remedy}."
        )


def _place(where: str) -> str:
    return where.rpartition(", ")[2]


def spaced(value: int | np.int64) -> str:
    """Write a large number in groups of three digits."""
    return f"{int(value):,}".replace(",", " ")
