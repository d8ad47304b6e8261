import tomllib
from pathlib import Path

import pytest

from enhance.batch.lines import key_lines, line_of
from enhance.shipped import shipped_folder

TRICKY = '''\
title = "a ] } # not a comment"  # and [this] is one, = too
long = """
[not.a.table]
key = 3 \\""" still inside
"""
raw = \'\'\'
x = 1\'\'\'
[a."b.c"]
'd e' = 1
f.g = [ # comment ] inside a list
  "x", [1,
  2],
]
[a.h]
inline = { p = 1, q = { r = "}" } }
[[list]]
one = 1
[[list]]
one = 2
[list.below]
two = 2026-01-01T00:00:00Z
'''


@pytest.mark.parametrize(
    ("path", "line"),
    [
        (("title",), 1),
        (("long",), 2),
        (("raw",), 6),
        (("a", "b.c"), 8),
        (("a", "b.c", "d e"), 9),
        (("a", "b.c", "f"), 10),
        (("a", "b.c", "f", "g"), 10),
        (("a", "b.c", "f", "g", 0), 11),
        (("a", "b.c", "f", "g", 1, 1), 12),
        (("a", "h", "inline", "q", "r"), 15),
        (("list", 0), 16),
        (("list", 0, "one"), 17),
        (("list", 1, "one"), 19),
        (("list", 1, "below", "two"), 21),
    ],
)
def test_every_form_of_key_is_found_on_its_line(path: tuple, line: int) -> None:
    tomllib.loads(TRICKY)  # it is TOML
    assert key_lines(TRICKY)[path] == line


def test_what_looks_like_a_key_inside_text_is_none() -> None:
    lines = key_lines(TRICKY)
    assert not [path for path in lines if path[0] in ("not", "key", "x")]


def leaves(value: object, path: tuple = ()) -> list[tuple]:
    if isinstance(value, dict):
        return [leaf for key, inner in value.items() for leaf in leaves(inner, (*path, key))]
    if isinstance(value, list):
        return [leaf for i, inner in enumerate(value) for leaf in leaves(inner, (*path, i))]
    return [path]


@pytest.mark.parametrize("job", sorted(shipped_folder("jobs").glob("*.toml")), ids=lambda path: path.name)
def test_every_key_of_the_shipped_jobs_is_found_where_its_name_stands(job: Path) -> None:
    text = job.read_text()
    lines = key_lines(text)
    for leaf in leaves(tomllib.loads(text)):
        named = [part for part in leaf if isinstance(part, str)][-1]
        assert named in text.splitlines()[lines[leaf] - 1] or isinstance(leaf[-1], int)


def test_a_missing_key_gets_the_line_of_its_table_and_a_missing_table_none() -> None:
    lines = key_lines("title = 'x'\n[frames]\n")
    assert line_of(lines, ("frames", "source")) == 2
    assert line_of(lines, ("events", "source")) is None
