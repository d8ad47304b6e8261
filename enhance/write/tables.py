"""Tables (CSV), records (JSON) and plain text."""

from __future__ import annotations

import csv
import io
import json
import math
from collections.abc import Iterable, Mapping, Sequence
from enum import Enum
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np

from enhance.errors import WriteError
from enhance.write.whole import whole_file


def write_table(path: Path, header: Sequence[str], rows: Iterable[Sequence[Any]]) -> None:
    r"""Write a table as CSV: UTF-8, ``\n``, one header row.

    Parameters
    ----------
    path : Path
    header : sequence of str
    rows : iterable of sequence
        None and NaN become empty cells, floats four decimals, infinity ``inf``, truth values ``true`` and ``false``.

    Raises
    ------
    WriteError
        If a row has another number of cells than the header, or the file cannot be written.
    """
    text = io.StringIO()
    table = csv.writer(text, lineterminator="\n")
    table.writerow(header)
    for number, row in enumerate(rows):
        if len(row) != len(header):
            raise WriteError(f"{path}, row {number}: {len(row)} cells, expected {len(header)} ({', '.join(header)}).")
        table.writerow([_cell(value) for value in row])
    write_text(path, text.getvalue())


def write_json(path: Path, obj: Any) -> None:
    """Write a record as JSON: sorted keys, two spaces, UTF-8; the same record gives the same bytes.

    Parameters
    ----------
    path : Path
    obj : mapping, sequence or plain value
        Infinity becomes the text ``inf``, NaN null; NumPy scalars and arrays, paths, fractions and enums their plain
        value.

    Raises
    ------
    WriteError
        If a value has no plain form, with its place; or the file cannot be written.
    """
    plain = _plain(path, obj, "")
    write_text(path, json.dumps(plain, indent=2, sort_keys=True, ensure_ascii=False, allow_nan=False) + "\n")


def write_text(path: Path, text: str) -> None:
    """Write text as UTF-8, line ends as they are.

    Parameters
    ----------
    path : Path
    text : str

    Raises
    ------
    WriteError
        If the file cannot be written.
    """
    with whole_file(path) as partial:
        partial.write_bytes(text.encode("utf-8"))


def _cell(value: Any) -> str:
    if isinstance(value, np.generic):
        value = value.item()
    if value is None or (isinstance(value, float) and math.isnan(value)):
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        # a figure that rounds to nothing must not read as minus nothing
        return f"{round(value, 4) + 0.0:.4f}"
    return str(value.value) if isinstance(value, Enum) else str(value)


def _plain(path: Path, value: Any, place: str) -> Any:
    if isinstance(value, (np.generic, np.ndarray)):
        value = value.tolist()
    if isinstance(value, Enum):
        value = value.value
    if isinstance(value, Mapping):
        return {
            str(_plain(path, k, place)): _plain(path, v, f"{place}.{k}" if place else str(k)) for k, v in value.items()
        }
    if isinstance(value, (list, tuple)):
        return [_plain(path, v, f"{place}[{i}]") for i, v in enumerate(value)]
    if isinstance(value, float) and not math.isfinite(value):
        return None if math.isnan(value) else str(value)
    if value is None or isinstance(value, (bool, int, float, str)):
        return value
    if isinstance(value, Path):
        return value.as_posix()
    if isinstance(value, Fraction):
        return str(value)
    raise WriteError(f"{path}: {place or 'the record'} is a {type(value).__name__}, which has no plain form in JSON.")
