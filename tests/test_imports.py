"""The shape of the program: who may import whom, what the map says, how long a file may be."""

import ast
import re
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

import enhance

ROOT = Path(__file__).resolve().parent.parent
PACKAGE = ROOT / "enhance"
FILES = sorted(PACKAGE.rglob("*.py"))

ROOMS = {"read", "calibrate", "deblur", "interpolate", "measure", "write", "simulate"}
#: Each part's level; a part imports only from lower levels, so that rooms are blind to each other.
LEVELS = [
    {"errors"},
    {"clock", "light", "shipped", "view"},
    {"recording", "settings"},
    {"rig", "rows", "kernels"},
    ROOMS,
    {"clip"},
    {"batch", "train"},
    {"cli"},
]
LEVEL = {part: level for level, parts in enumerate(LEVELS) for part in parts}

#: Packages that take long to import: they come in where they are used, never with the command line.
HEAVY = ("torch", "numba", "av", "h5py", "matplotlib", "cv2", "pyarrow", "skimage", "pydantic", "numpy")


def part_of(file: Path) -> str:
    return file.relative_to(PACKAGE).parts[0].removesuffix(".py")


def imported_parts(tree: ast.AST) -> Iterator[tuple[str, int]]:
    """Parts of this package that a file imports, anywhere in it, with the line."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.module == "enhance":
            names = [f"enhance.{alias.name}" for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"line {node.lineno}: a relative import hides where it leads"
            names = [node.module or ""]
        else:
            continue
        for name in names:
            if name.startswith("enhance.") and not name.startswith("enhance.__"):
                yield name.split(".")[1], node.lineno


@pytest.mark.parametrize("file", FILES, ids=lambda file: file.relative_to(PACKAGE).as_posix())
def test_imports_point_one_way(file: Path) -> None:
    own = part_of(file)
    if own == "__init__":
        assert not list(imported_parts(ast.parse(file.read_text())))
        return
    for part, line in imported_parts(ast.parse(file.read_text())):
        assert part == own or LEVEL[part] < LEVEL[own], f"line {line}: {own} must not import {part}"


def test_every_part_has_a_level() -> None:
    assert {part_of(file) for file in FILES} - {"__init__"} <= set(LEVEL)


def test_the_map_names_every_part_and_no_other() -> None:
    entries = re.findall(r"^    (\w+)(?:\.py)?  +\S", enhance.__doc__ or "", flags=re.MULTILINE)
    parts = {part_of(file) for file in FILES} - {"__init__"}
    assert sorted(entries) == sorted(parts)


def test_the_command_line_loads_nothing_heavy() -> None:
    code = f"import enhance.cli, sys; print([name for name in {HEAVY!r} if name in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_only_the_command_line_prints_exits_or_configures_logging() -> None:
    said = re.compile(r"\bprint\(|\bsys\.exit\(|\bexit\(|basicConfig|addHandler|StreamHandler")
    found = [file.relative_to(PACKAGE).as_posix() for file in FILES if said.search(file.read_text())]
    assert found == ["cli.py"]


def test_no_file_is_longer_than_four_hundred_lines() -> None:
    files = [*FILES, *sorted((ROOT / "tests").rglob("*.py"))]
    long = {file.name: len(file.read_text().splitlines()) for file in files}
    assert {name: count for name, count in long.items() if count > 400} == {}


def test_no_file_is_a_catch_all() -> None:
    assert not {file.stem for file in FILES} & {"utils", "util", "helpers", "helper", "common", "misc"}


def test_the_top_level_holds_what_was_agreed() -> None:
    tracked = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True)
    if tracked.returncode:
        pytest.skip("not a git checkout")
    top = {name.split("/")[0] for name in tracked.stdout.splitlines() if not name.startswith(".")}
    assert top == {"pyproject.toml", "README.md", "DEVELOPERS.md", "enhance", "models", "tests", "jobs"}


def test_tests_mirror_the_package() -> None:
    rooms = {folder.name for folder in PACKAGE.iterdir() if (folder / "__init__.py").exists()}
    assert {folder.name for folder in (ROOT / "tests").iterdir() if any(folder.glob("test_*.py"))} <= rooms
