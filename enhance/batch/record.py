"""record.json: what went in, what was asked, what ran, how it ended and which files it left; and their removal."""

from __future__ import annotations

import hashlib
import importlib.metadata
import json
import os
import platform
import re
import sys
from collections.abc import Iterable, Iterator, Mapping
from pathlib import Path
from typing import Any

from enhance.errors import JobError, ReadError, WriteError
from enhance.settings import ClipSettings

RECORD = "record.json"
#: Raised when the record's fields change meaning.
RECORD_VERSION = 1

#: Packages whose version can change a result.
_PACKAGES = ("enhance", "numpy", "opencv-python-headless", "torch", "numba", "av", "h5py", "safetensors")
_BLOCK = 1 << 20


def input_digests(settings: ClipSettings) -> dict[str, dict[str, Any]]:
    """Measure and digest every input of a job.

    Parameters
    ----------
    settings : ClipSettings

    Returns
    -------
    dict
        Key of the job file to path (relative to the output folder), size in bytes and SHA-256. A folder has one
        digest over the lines ``name size digest`` of its files in natural order, and their count.

    Raises
    ------
    ReadError
        If an input cannot be read.
    """
    inputs = {
        "frames.source": settings.frames.source,
        "frames.times": settings.frames.times,
        "frames.dark": settings.frames.dark,
        "events.source": settings.events.source,
        "rig.file": settings.rig.file,
        "rig.clock.triggers": settings.rig.triggers,
        "rig.registration.frame_lens": settings.rig.frame_lens,
        "rig.registration.event_lens": settings.rig.event_lens,
    }
    found: dict[str, dict[str, Any]] = {}
    for key, path in inputs.items():
        if path is None:
            continue
        try:
            measured = _folder(path) if path.is_dir() else _file(path)
        except OSError as error:
            raise ReadError(f"{path} ({key}) cannot be read: {error.strerror}; check that it is there") from error
        found[key] = {"path": relative(path, settings.output.folder), **measured}
    return found


def relative(path: Path, folder: Path) -> str:
    """Write a path as seen from a folder, with forward slashes; as it is where no such way exists (another drive)."""
    try:
        return Path(os.path.relpath(path, folder)).as_posix()
    except ValueError:
        return path.as_posix()


def natural(name: str) -> list[tuple[int, int, str]]:
    """Sort key that puts frame 9 before frame 10."""
    return [(0, int(part), "") if part.isdigit() else (1, 0, part) for part in re.split(r"([0-9]+)", name) if part]


def _file(path: Path) -> dict[str, Any]:
    digest = hashlib.sha256()
    size = 0
    with path.open("rb") as file:
        while block := file.read(_BLOCK):
            digest.update(block)
            size += len(block)
    return {"bytes": size, "sha256": digest.hexdigest()}


def _folder(path: Path) -> dict[str, Any]:
    digest = hashlib.sha256()
    size = count = 0
    names = [each.name for each in path.iterdir() if each.is_file() and not each.name.startswith(".")]
    for name in sorted(names, key=natural):
        one = _file(path / name)
        digest.update(f"{name} {one['bytes']} {one['sha256']}\n".encode())
        size += one["bytes"]
        count += 1
    return {"bytes": size, "files": count, "sha256": digest.hexdigest()}


def versions() -> dict[str, str]:
    """Versions of the packages that can change a result, without importing them."""
    found = {"python": platform.python_version()}
    for package in _PACKAGES:
        try:
            found[package] = importlib.metadata.version(package)
        except importlib.metadata.PackageNotFoundError:
            found[package] = "not installed"
    return found


def threads() -> dict[str, int | None]:
    """How many threads the machine has and each loaded library uses; None for a library that was not needed."""
    loaded = sys.modules
    return {
        "machine": os.cpu_count(),
        "torch": loaded["torch"].get_num_threads() if "torch" in loaded else None,
        "opencv": loaded["cv2"].getNumThreads() if "cv2" in loaded else None,
        "numba": loaded["numba"].get_num_threads() if "numba" in loaded else None,
    }


def read_record(folder: Path) -> Mapping[str, Any] | None:
    """Read the record of an earlier run.

    Parameters
    ----------
    folder : Path
        An output folder, which need not exist.

    Returns
    -------
    mapping or None
        None where there is no record.

    Raises
    ------
    JobError
        If a record.json stands there that is not one of ours: what belongs to it cannot be told.
    """
    path = folder / RECORD
    try:
        record = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        return None
    except (OSError, ValueError) as error:
        raise JobError(f"{path} cannot be read as the record of an earlier run ({error}); {_MOVE_AWAY}") from error
    if not isinstance(record, dict) or record.get("tool") != "enhance" or not isinstance(record.get("files"), list):
        raise JobError(f"{path} is not a record of this tool; {_MOVE_AWAY}")
    return record


_MOVE_AWAY = "move it away, or give output.folder another name"


def write_record(folder: Path, record: Mapping[str, Any]) -> None:
    """Write a record into its folder, with the fields that every record has; whole or not at all.

    Raises
    ------
    WriteError
        If it cannot be written.
    """
    from enhance.write import write_json

    constant = {"tool": "enhance", "record_version": RECORD_VERSION, "versions": versions(), "threads": threads()}
    write_json(folder / RECORD, {**constant, **record})


def remove_old(folder: Path) -> int:
    """Remove exactly the files that the old record lists, its emptied folders, and last the record.

    Parameters
    ----------
    folder : Path
        An output folder, which need not exist.

    Returns
    -------
    int
        How many listed files were removed.

    Raises
    ------
    JobError
        If the record is not one of ours.
    WriteError
        If a listed file cannot be removed.
    """
    record = read_record(folder)
    if record is None:
        return 0
    listed = list(_listed(folder, record["files"]))
    try:
        for path in listed:
            path.unlink(missing_ok=True)
        for parent in {path.parent for path in listed} - {folder}:
            if parent.is_dir() and not any(parent.iterdir()):
                parent.rmdir()
        # last: a removal that was cut short can be taken up again
        (folder / RECORD).unlink()
    except OSError as error:
        raise WriteError(
            f"{error.filename}: was left by an earlier run and cannot be removed ({error.strerror}); remove it, "
            f"or give output.folder another name"
        ) from error
    return len(listed)


def _listed(folder: Path, names: Iterable[Any]) -> Iterator[Path]:
    """Paths of listed files that really lie in the folder: neither ``..`` nor a linked folder may lead out of it."""
    home = folder.resolve()
    for name in names:
        path = folder / str(name)
        # the parent is resolved, not the file: a linked file is removed as the link it is
        if (home == path.parent.resolve() or home in path.parent.resolve().parents) and path.is_file():
            yield path


#: Names this tool gives: what a run that was cut short left is told from a person's own files by these.
_PRODUCT = re.compile(
    r"slow-motion\.(mp4|mkv)|frames\.csv|pictures\.csv|held-out\.csv|quality\.json|rig\.toml"
    r"|(stills|trust|held-out)/\d{16}\.png"
)


def left_over(folder: Path, before: Mapping[str, int]) -> list[str]:
    """List what belongs to a run that did not end: results it made, and those of an older run not yet removed.

    Parameters
    ----------
    folder : Path
    before : mapping
        `products` as they were when the run began.

    Returns
    -------
    list of str
        Relative to the folder.
    """
    made = {name for name, changed in products(folder).items() if before.get(name) != changed}
    old = read_record(folder)
    older = {path.relative_to(folder).as_posix() for path in _listed(folder, old["files"])} if old else set()
    return sorted(made | older)


def products(folder: Path) -> dict[str, int]:
    """Files that carry a result's name in an output folder.

    Returns
    -------
    dict
        Path relative to the folder, to the time of its last change in nanoseconds.
    """
    places = [folder, folder / "stills", folder / "trust", folder / "held-out"]
    files = [path for place in places if place.is_dir() for path in place.iterdir() if path.is_file()]
    named = {path.relative_to(folder).as_posix(): path.stat().st_mtime_ns for path in files}
    return {name: changed for name, changed in sorted(named.items()) if _PRODUCT.fullmatch(name)}
