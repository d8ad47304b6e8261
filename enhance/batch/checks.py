"""Mistakes that need two keys, or the disk, to be seen: settled before anything is written.

They are read from the file as it stands, not from the validated settings, so that one wrong value does not hide the
next mistake. A value of the wrong kind is passed over here; the schema reports it.
"""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from enhance.batch.lines import KeyPath
from enhance.batch.mistakes import nearest
from enhance.batch.schema import duration

Mistake = tuple[KeyPath, str]
Document = Mapping[str, Any]

#: Keys that name an input.
INPUTS: tuple[tuple[str, str], ...] = (
    ("frames", "source"),
    ("frames", "times"),
    ("frames", "dark"),
    ("events", "source"),
    ("rig", "file"),
    ("rig", "clock.triggers"),
    ("rig", "registration.frame_lens"),
    ("rig", "registration.event_lens"),
)


def mistakes_of_keys(document: Document) -> list[Mistake]:
    """Find keys that contradict each other.

    Parameters
    ----------
    document : mapping
        The job file as parsed.

    Returns
    -------
    list of (key path, message)
    """
    return [
        each
        for check in (_light, _shutter, _cover, _grid, _windows, _hold_out, _trust, _triggers)
        for each in check(document)
    ]


def mistakes_of_files(document: Document, job: Path) -> list[Mistake]:
    """Find inputs that are not there and an output folder that must not be written to.

    Parameters
    ----------
    document : mapping
        The job file as parsed.
    job : Path
        The job file; paths are relative to its folder.

    Returns
    -------
    list of (key path, message)
    """
    return [*_inputs(document, job.parent), *_images(document, job.parent), *_output(document, job)]


def _get(document: Document, table: str, key: str, kind: type | tuple[type, ...]) -> Any:
    """Return a value, or None where it is missing or of another kind."""
    value: Any = document.get(table)
    for name in key.split("."):
        value = value.get(name) if isinstance(value, Mapping) else None
    return value if isinstance(value, kind) and not isinstance(value, bool) else None


def _path(document: Document, table: str, key: str, folder: Path) -> Path | None:
    """Return where a key's path leads; None where there is none, or no path could be written so."""
    given = _get(document, table, key, str)
    return folder / given if given and "\0" not in given else None


def _light(document: Document) -> Iterator[Mistake]:
    black, white = (_get(document, "frames", key, (int, float)) for key in ("black", "white"))
    if white is not None and not white > (black or 0):
        yield (
            ("frames", "white"),
            f"found {white}; full scale must be above black, which is {black or 0}. Write 255 for 8 bit frames, "
            f"65535 for 16 bit",
        )


def _shutter(document: Document) -> Iterator[Mistake]:
    frames = document.get("frames")
    if isinstance(frames, Mapping) and "row_time" in frames and frames.get("shutter", "global") == "global":
        yield (
            ("frames", "row_time"),
            f"found {frames['row_time']!r}, but the shutter is global, whose rows are exposed together; write "
            f'shutter = "rolling", or leave row_time out',
        )
    rig = document.get("rig")
    elsewhere = isinstance(rig, Mapping) and rig.get("registration", "shared") != "shared"
    if isinstance(frames, Mapping) and frames.get("shutter") == "rolling" and elsewhere:
        yield (
            ("rig", "registration"),
            "another view than the frames' own does not go with a rolling shutter yet: rows of the sensor are not "
            'rows of the frames. Bring the events onto the pixels of the frames first and write "shared"',
        )


def _cover(document: Document) -> Iterator[Mistake]:
    cover = _get(document, "events", "cover", list)
    times = _times(cover) if cover else None
    if times and len(times) == 2 and times[0] >= times[1]:
        yield ("events", "cover"), f"found {cover}; the end must be after the start"


def _grid(document: Document) -> Iterator[Mistake]:
    table = document.get("slow_motion")
    if not isinstance(table, Mapping) or "scene_rate" not in table:
        return
    if "factor" in table:
        yield (
            ("slow_motion", "scene_rate"),
            "factor and scene_rate both say how many pictures are made; keep one and leave the other out",
        )
    for i, window in enumerate(_get(document, "slow_motion", "windows", list) or []):
        if isinstance(window, Mapping) and "factor" in window:
            yield (
                ("slow_motion", "windows", i, "factor"),
                "a window's own factor does not go with scene_rate; leave one of them out",
            )


def _windows(document: Document) -> Iterator[Mistake]:
    windows = _get(document, "slow_motion", "windows", list) or []
    good: list[tuple[int, int, int]] = []
    for i, window in enumerate(windows):
        times = _times([window.get("from"), window.get("to")]) if isinstance(window, Mapping) else None
        if times is None:
            continue
        if times[0] >= times[1]:
            yield (
                ("slow_motion", "windows", i),
                f'from "{window["from"]}" to "{window["to"]}" has no length; to must be after from',
            )
        else:
            good.append((times[0], times[1], i))
    good.sort()
    for (_, end, first), (start, _, second) in zip(good, good[1:], strict=False):
        if start < end:
            yield (
                ("slow_motion", "windows", second),
                f'starts at "{windows[second]["from"]}", before the window that ends at "{windows[first]["to"]}" is '
                f"over; windows must not overlap",
            )


def _triggers(document: Document) -> Iterator[Mistake]:
    rig, clock = document.get("rig"), _get(document, "rig", "clock", Mapping)
    if clock and "triggers" in clock and len(clock) > 1:
        others = " and ".join(sorted(set(clock) - {"triggers"}))
        yield (
            ("rig", "clock"),
            f"{others} beside triggers: the trigger table tells the whole clock; keep one and leave the other out",
        )
    if isinstance(rig, Mapping) and "triggers" in rig:
        given = f'clock = "{rig["clock"]}"' if isinstance(rig.get("clock"), str) else "no clock"
        yield (
            ("rig", "triggers"),
            f"a trigger table stands inside rig.clock, and goes with no other clock; found {given} beside it. Write "
            'clock = { triggers = "triggers.csv" } alone, or leave the table out',
        )


def _hold_out(document: Document) -> Iterator[Mistake]:
    if _get(document, "measure", "hold_out", int) == 1:
        yield (
            ("measure", "hold_out"),
            "found 1; every frame would be used and none be left to compare with. Write 2 or more, or 0 for none",
        )


def _trust(document: Document) -> Iterator[Mistake]:
    output = document.get("output")
    if not isinstance(output, Mapping) or output.get("trust") is not True:
        return
    if output.get("stills") == "none" and not output.get("times"):
        yield (
            ("output", "trust"),
            'found true, but a trust map stands beside a still, and none is written: stills is "none" and times '
            'names no instant. Write stills = "all" or "deblurred", name times, or leave trust out',
        )


def _times(values: list[Any]) -> list[int] | None:
    try:
        return [duration(value) for value in values]
    except ValueError:
        return None  # the schema reports it


def _inputs(document: Document, folder: Path) -> Iterator[Mistake]:
    for table, key in INPUTS:
        path, at = _path(document, table, key, folder), (table, *key.split("."))
        # os.path, for it answers with no where a path cannot be (a name too long for the disk)
        if path is None or os.path.isfile(path):
            continue
        if not os.path.isdir(path):
            yield at, f"{path} does not exist; paths are relative to the job file's folder{_neighbour(path)}"
        elif (table, key) != ("frames", "source"):
            yield at, f"{path} is a folder; expected a file"


def _neighbour(path: Path) -> str:
    """Name the entry of the same folder that was probably meant, or the first folder on the way that is missing."""
    if not os.path.isdir(path.parent):
        return f". Nor does the folder {path.parent}"
    close = nearest(path.name, sorted(os.listdir(path.parent))[:10_000])
    return f". Did you mean {close}?" if close else ""


def _images(document: Document, folder: Path) -> Iterator[Mistake]:
    """Find what a folder of images cannot say by itself: when they were taken, what their code values mean."""
    path = _path(document, "frames", "source", folder)
    if path is None or not os.path.isdir(path):
        return
    table = document["frames"]
    if "times" not in table:
        yield ("frames", "times"), "is missing; images do not say when they were taken: name a table of their times"
    if "light_curve" not in table:
        yield (
            ("frames", "light_curve"),
            'is missing; images do not say what their code values mean: write "linear", "srgb", "bt709" or "gamma 2.2"',
        )


def _output(document: Document, job: Path) -> Iterator[Mistake]:
    key = ("output", "folder")
    given = _path(document, *key, job.parent)
    if given is None:
        return
    output = given.resolve()
    if os.path.exists(output) and not os.path.isdir(output):
        yield key, f"{given} is a file; expected a folder, which need not exist"
        return
    above = next(path for path in (output, *output.parents) if os.path.exists(path))
    if not os.access(above, os.W_OK):
        yield key, f"{given} cannot be written to; choose another folder"
    held = [name for name, path in _held(document, job) if path == output or output in path.parents]
    source = _path(document, "frames", "source", job.parent)
    if held:
        yield (
            key,
            f"{given} holds inputs ({', '.join(held)}); results must not mix with them: choose a folder of their own",
        )
    elif source and os.path.isdir(source) and source.resolve() in output.parents:
        yield key, f"{given} lies inside frames.source; choose a folder outside it"


def _held(document: Document, job: Path) -> Iterator[tuple[str, Path]]:
    yield "the job file", job.resolve()
    for table, key in INPUTS:
        path = _path(document, table, key, job.parent)
        if path:
            yield f"{table}.{key}", path.resolve()
