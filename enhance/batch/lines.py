"""On which line of a TOML text each key stands: the standard parser does not say, and a mistake should.

The text is known to be valid when it gets here, so the scanner only has to find its way, not to judge.
"""

from __future__ import annotations

import re
from collections.abc import Mapping

KeyPath = tuple[str | int, ...]

_BLANK = re.compile(r"(?:\s|#[^\n]*)*")
_KEY = re.compile(r"""[ \t]*(?:"((?:[^"\\]|\\.)*)"|'([^']*)'|([A-Za-z0-9_-]+))[ \t]*""")
_TEXT = re.compile(
    r'"""(?:[^\\]|\\.)*?"{3,5}'  # several lines, escapes: may end in up to two quotes of its own
    r"|'''.*?'{3,5}"
    r'|"(?:[^"\\\n]|\\.)*"'
    r"|'[^'\n]*'",
    re.DOTALL,
)
_BARE = re.compile(r"[^,\]}#\n]*")


def key_lines(text: str) -> dict[KeyPath, int]:
    r"""Find the line of every table, key and array item.

    Parameters
    ----------
    text : str
        Valid TOML.

    Returns
    -------
    dict
        Key path, such as ``("slow_motion", "windows", 1, "from")``, to line number, counted from 1.

    Examples
    --------
    >>> key_lines("[frames]\nblack = 0")[("frames", "black")]
    2
    """
    scanner = _Scanner(text)
    scanner.document()
    return scanner.lines


def line_of(lines: Mapping[KeyPath, int], path: KeyPath) -> int | None:
    """Line of a key, else of the nearest table around it that stands in the file; None for the file as a whole."""
    for length in range(len(path), 0, -1):
        if path[:length] in lines:
            return lines[path[:length]]
    return None


class _Scanner:
    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0
        self.lines: dict[KeyPath, int] = {}
        self._array_tables: dict[KeyPath, int] = {}

    def document(self) -> None:
        """Walk through the whole text, table by table."""
        table: KeyPath = ()
        while self._skip_blank():
            if self.text[self.at] == "[":
                table = self._header()
            else:
                self._pair(table)

    def _skip_blank(self) -> bool:
        match = _BLANK.match(self.text, self.at)
        self.at = match.end() if match else self.at
        return self.at < len(self.text)

    def _mark(self, path: KeyPath, start: int) -> None:
        self.lines.setdefault(path, self.text.count("\n", 0, start) + 1)

    def _header(self) -> KeyPath:
        """``[a.b]`` or ``[[a.b]]``; the latter's entries are counted."""
        start = self.at
        double = self.text.startswith("[[", self.at)
        self.at += 2 if double else 1
        path = self._inside_arrays(self._key())
        self.at += 2 if double else 1
        self._mark(path, start)
        if double:
            entry = self._array_tables.get(path, -1) + 1
            self._array_tables[path] = entry
            path = (*path, entry)
            self._mark(path, start)
        return path

    def _inside_arrays(self, path: KeyPath) -> KeyPath:
        """Add entry numbers: a header below an array of tables means that array's latest entry."""
        whole: KeyPath = ()
        for i, part in enumerate(path):
            whole = (*whole, part)
            if whole in self._array_tables and i < len(path) - 1:
                whole = (*whole, self._array_tables[whole])
        return whole

    def _key(self) -> KeyPath:
        parts: list[str] = []
        while match := _KEY.match(self.text, self.at):
            parts.append(next(part for part in match.groups() if part is not None))
            self.at = match.end()
            if not self.text.startswith(".", self.at):
                break
            self.at += 1
        return tuple(parts)

    def _pair(self, table: KeyPath) -> None:
        start = self.at
        path = (*table, *self._key())
        if self.at == start:
            raise ValueError(f"no key at character {start}")  # never on valid TOML; better than standing still
        # a dotted key opens the tables on its way
        for length in range(len(table) + 1, len(path) + 1):
            self._mark(path[:length], start)
        self.at += 1  # the equals sign
        self._value(path)

    def _value(self, path: KeyPath) -> None:
        self._skip_blank()
        opening = self.text[self.at]
        if opening == "[":
            self._list(path)
        elif opening == "{":
            self._inline_table(path)
        else:
            match = _TEXT.match(self.text, self.at) or _BARE.match(self.text, self.at)
            self.at = match.end() if match else self.at

    def _list(self, path: KeyPath) -> None:
        self.at += 1
        entry = 0
        while self._skip_blank() and self.text[self.at] != "]":
            self._mark((*path, entry), self.at)
            self._value((*path, entry))
            entry += 1
            self._skip_comma()
        self.at += 1

    def _inline_table(self, path: KeyPath) -> None:
        self.at += 1
        while self._skip_blank() and self.text[self.at] != "}":
            self._pair(path)
            self._skip_comma()
        self.at += 1

    def _skip_comma(self) -> None:
        self._skip_blank()
        if self.text.startswith(",", self.at):
            self.at += 1
