"""Events from text: comma, semicolon, tab or blanks between the columns, with or without a header."""

from __future__ import annotations

import warnings
from collections.abc import Iterator, Mapping
from itertools import islice
from pathlib import Path
from typing import TextIO

import numpy as np
from numpy.typing import NDArray

from enhance.errors import EventsError
from enhance.read.event_columns import NAMES, Raw, match_names, pick_columns

# Lines parsed at a time: some 20 MB of text.
_BLOCK = 200_000

# Between one and the next event no line of a text file is this long; a binary file soon has one.
_LONGEST_LINE = 10_000


class TextEvents:
    """Lines of numbers.

    Parameters
    ----------
    path : Path
    columns : mapping, optional
        For any of t, x, y, p a name in the header.

    Raises
    ------
    EventsError
        If the columns cannot be told.
    """

    def __init__(self, path: Path, columns: Mapping[str, str] | None) -> None:
        self.path = path
        try:
            with self._open() as file:
                self._skip, names, first = _look(file, path)
        except UnicodeDecodeError as error:
            raise self._not_text() from error
        except EventsError:
            raise
        except OSError as error:
            raise EventsError(f"{path} cannot be read: {error.strerror}. Check events.source.") from error
        self._delimiter = _delimiter(first)
        fields = [field.strip() for field in first.split(self._delimiter)]
        if names is None:
            names = self._without_header(fields, columns)
        chosen = pick_columns(names, columns, path)
        self._use = [names.index(chosen[key]) for key in NAMES]
        # Whole numbers are read as such: a float would blur nanoseconds since 1970.
        t_kind = np.int64 if _is_whole(fields, self._use[0]) else np.float64
        self._dtype = np.dtype([("t", t_kind), ("x", np.float64), ("y", np.float64), ("p", np.float64)])

    def blocks(self) -> Iterator[Raw]:
        """Stream all rows, in file order.

        Raises
        ------
        EventsError
            If a line is not an event.
        """
        try:
            with self._open() as file:
                for _ in islice(file, self._skip):
                    pass
                line = self._skip
                while lines := list(islice(file, _BLOCK)):
                    yield self._parse(lines, line)
                    line += len(lines)
        except UnicodeDecodeError as error:
            raise self._not_text() from error

    def _open(self) -> TextIO:
        return self.path.open(encoding="utf-8-sig")

    def _parse(self, lines: list[str], before: int) -> Raw:
        try:
            rows = self._numbers(lines, self._dtype)
        except (ValueError, DeprecationWarning, OverflowError):
            rows = self._second_try(lines, before)
        return Raw(rows["t"], rows["x"], rows["y"], rows["p"])

    def _second_try(self, lines: list[str], before: int) -> NDArray:
        # Decimal times after whole ones, and polarities in words, are rare: only a block that fails pays for them.
        words = [
            line.replace("True", "1").replace("False", "0").replace("true", "1").replace("false", "0") for line in lines
        ]
        decimal = np.dtype([("t", np.float64), *((n, np.float64) for n in "xyp")])
        for dtype in (self._dtype, decimal):
            try:
                return self._numbers(words, dtype)
            except (ValueError, DeprecationWarning, OverflowError):
                continue
        for number, line in enumerate(words, start=before + 1):
            try:
                self._numbers([line], decimal)
            except (ValueError, DeprecationWarning, OverflowError) as error:
                raise EventsError(
                    f"{self.path}, line {number}: {lines[number - before - 1].strip()[:80]!r} is not an event. "
                    f"Expected numbers t, x, y, p{self._separated()}; mend or remove the line."
                ) from error
        raise EventsError(f"{self.path}: lines {before + 1} to {before + len(lines)} are not events; export it anew.")

    def _numbers(self, lines: list[str], dtype: np.dtype) -> NDArray:
        with warnings.catch_warnings():
            warnings.simplefilter("error", DeprecationWarning)
            warnings.filterwarnings("ignore", message=".*input contained no data", category=UserWarning)
            return np.loadtxt(lines, dtype=dtype, delimiter=self._delimiter, usecols=self._use, ndmin=1)

    def _separated(self) -> str:
        return {",": " with commas", ";": " with semicolons", "\t": " with tabs", None: ""}[self._delimiter]

    def _without_header(self, fields: list[str], columns: Mapping[str, str] | None) -> list[str]:
        if columns:
            raise EventsError(
                f"{self.path} has no header, so events.columns has no names to map: its columns are t, x, y, p. "
                "Leave out events.columns, or give the file a header line."
            )
        if len(fields) != len(NAMES):
            raise EventsError(
                f"{self.path}, line {self._skip + 1}: {len(fields)} columns and no header. A file without header must "
                "have exactly t, x, y, p; give it a header line with the columns' names."
            )
        return list(NAMES)

    def _not_text(self) -> EventsError:
        return EventsError(
            f"{self.path} is not a text file. Expected lines of numbers t, x, y, p; was it compressed or misnamed?"
        )


def _look(file: TextIO, path: Path) -> tuple[int, list[str] | None, str]:
    """Find the first line of numbers: lines before it, names of a header above it if there is one, and the line."""
    names: list[str] | None = None
    comment = ""
    skip = 0
    while line := file.readline(_LONGEST_LINE):
        text = line.strip()
        if text.startswith("#"):
            comment = text.lstrip("# ")
        elif text and names is None and not _is_number(text.split(_delimiter(text))[0]):
            names = [field.strip().strip('"') for field in text.split(_delimiter(text))]
        elif text:
            return skip, names or _named_in(comment), text
        skip += 1
    raise EventsError(f"{path} holds no events. Check that it is the right file and was written to its end.")


def _named_in(comment: str) -> list[str] | None:
    """Column names of a header that was written as a comment."""
    names = [name.strip() for name in comment.split(_delimiter(comment))]
    return names if all(len(found) == 1 for found in match_names(names, None).values()) else None


def _delimiter(line: str) -> str | None:
    return next((mark for mark in (",", ";", "\t") if mark in line), None)


def _is_number(field: str) -> bool:
    try:
        float(field)
    except ValueError:
        return False
    return True


def _is_whole(fields: list[str], index: int) -> bool:
    return index < len(fields) and fields[index].lstrip("+-").isdigit()
