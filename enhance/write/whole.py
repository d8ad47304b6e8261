"""Files appear whole or not at all: written under a temporary name beside their place, then moved there in one step."""

from __future__ import annotations

import contextlib
import errno
import os
import shutil
import uuid
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from enhance.errors import EnhanceError, WriteError

_REMEDIES: dict[int, str] = {
    errno.ENOSPC: "there is no space left on the disk; free some, or choose another output.folder",
    errno.EDQUOT: "the disk quota is used up; free some space, or choose another output.folder",
    errno.EACCES: "there is no permission to write there; change the folder's rights, or choose another output.folder",
    errno.EPERM: "there is no permission to write there; change the folder's rights, or choose another output.folder",
    errno.EROFS: "the disk is read-only; choose another output.folder",
    errno.ENOTDIR: "a part of the path is a file, expected a folder; choose another output.folder",
    errno.EEXIST: "a file stands where a folder is expected; move it, or choose another output.folder",
    errno.EISDIR: "a folder stands where the file should go; move it away",
    errno.ENAMETOOLONG: "the name is too long for this disk; choose a shorter output.folder",
}


def write_error(path: Path, error: BaseException) -> WriteError:
    """Turn a foreign exception into ours, with the file, the cause and what to do.

    Parameters
    ----------
    path : Path
        The file that was to appear.
    error : BaseException
        What stopped it.

    Returns
    -------
    WriteError
        To be raised ``from`` the foreign one.
    """
    number = getattr(error, "errno", None)
    cause = _REMEDIES.get(number or 0) or f"{error}; check the disk and run the job again"
    return WriteError(f"{path} cannot be written: {cause}.")


def partial_path(path: Path) -> Path:
    """Name a temporary file beside `path`, unlike any other, with the suffix kept so that encoders recognise it."""
    return path.with_name(f".{path.name}.{os.getpid()}-{uuid.uuid4().hex}.partial{path.suffix}")


def commit(partial: Path, path: Path) -> None:
    """Move a finished temporary file to its place, in one step and onto the disk.

    Parameters
    ----------
    partial, path : Path
        In the same folder.

    Raises
    ------
    OSError
        As the system reports it; the caller converts it.
    """
    with open(partial, "rb+") as file:
        os.fsync(file.fileno())
    os.replace(partial, path)
    # The new name itself is only safe once its folder is on the disk; some network disks cannot do that.
    with contextlib.suppress(OSError):
        folder = os.open(path.parent, os.O_RDONLY)
        try:
            os.fsync(folder)
        finally:
            os.close(folder)


def discard(partial: Path) -> None:
    """Remove a temporary file, if it is there."""
    with contextlib.suppress(OSError):
        partial.unlink()


@contextmanager
def whole_file(path: Path) -> Iterator[Path]:
    """Write a file so that it appears whole or not at all; its folder is made where it is missing.

    Parameters
    ----------
    path : Path
        Where the file is to stand.

    Yields
    ------
    Path
        Temporary name in the same folder; write there and close it before the block ends.

    Raises
    ------
    WriteError
        With the file, the cause and what to do.
    """
    path = Path(path)
    partial = partial_path(path)
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        yield partial
        commit(partial, path)
    except EnhanceError:
        raise
    except OSError as error:
        raise write_error(path, error) from error
    finally:
        discard(partial)


def probe_folder(folder: Path, needed_bytes: int = 0) -> None:
    """Check that files can be written to a folder, and leave nothing behind.

    A folder that is not there yet is checked at its nearest parent that is.

    Parameters
    ----------
    folder : Path
    needed_bytes : int
        Space the caller expects to use.

    Raises
    ------
    WriteError
        If a file cannot be made there, or the space does not suffice.
    """
    folder = Path(folder)
    there = folder
    while not there.exists() and there != there.parent:
        there = there.parent
    partial = partial_path(there / "probe")
    try:
        with open(partial, "xb") as file:
            file.write(b"\0")
        free = shutil.disk_usage(there).free
    except OSError as error:
        raise write_error(folder, error) from error
    finally:
        discard(partial)
    if free < needed_bytes:
        raise WriteError(
            f"{folder}: {free / 1e9:.1f} GB are free, about {needed_bytes / 1e9:.1f} GB are needed. "
            "Free some space, render fewer windows, or choose another output.folder."
        )
