"""What a pass leaves in the output folder, written as it comes."""

from __future__ import annotations

from collections.abc import Mapping
from contextlib import ExitStack
from pathlib import Path
from types import TracebackType
from typing import Any

import numpy as np
from numpy.typing import NDArray

from enhance.clip.held_out import COLUMNS, Judged
from enhance.clip.plan import Plan, Planned
from enhance.clip.quality import Expected
from enhance.clock import middle_us
from enhance.light import Light
from enhance.recording import FrameSource, Kind, Picture
from enhance.settings import ClipSettings
from enhance.write import (
    ClipWriter,
    caption_line,
    cautions,
    write_json,
    write_overlap,
    write_still,
    write_table,
    write_text,
    write_trust,
)

#: Name of the clip for each codec.
CLIPS = {"h264": "slow-motion.mp4", "ffv1": "slow-motion.mkv"}
_HEADER = ("time_us", "pts_us", "kind", "by", "expected_psnr", "still", "below_least")
_BELOW = {True: "yes", False: "no", None: None}


class Outputs:
    """Writes pictures, the clip, tables and records of one job; what was written stands in `files`.

    Parameters
    ----------
    settings : ClipSettings
    frames : FrameSource
        For the pictures' shape and curve.
    plan : Plan
    """

    def __init__(self, settings: ClipSettings, frames: FrameSource, plan: Plan) -> None:
        self.folder = settings.output.folder
        self.files: list[str] = []
        self._settings, self._light, self._plan = settings, frames.light, plan
        self._first_us = middle_us(int(frames.start_us[0]), int(frames.end_us[0]))
        self.expected: list[Expected] = []
        self._rows: list[tuple[Any, ...]] = []
        self._asked = {self._first_us + t for t in settings.output.times_us}
        self._stack = ExitStack()
        self._clip = self._open_clip(frames.shape)

    def __enter__(self) -> Outputs:
        self._stack.__enter__()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._stack.__exit__(kind, error, trace)
        if kind is None:
            self.table("pictures.csv", _HEADER, self._rows)

    def add(self, planned: Planned, picture: Picture) -> None:
        """Write one picture wherever it belongs: clip, still, trust map, table."""
        expected = Expected(picture.time_us, picture.kind, picture.expected_psnr)
        below = expected.below(self._settings.least_psnr)
        if self._clip is not None and planned.pts_us is not None:
            caption = caption_line(picture.time_us - self._first_us, picture.kind, expected.psnr, below is True)
            self._clip.add(picture.image, planned.pts_us, caption)
        still = self._still(picture) if self._wants_still(picture) else None
        psnr = None if expected.psnr is None else f"{expected.psnr:.2f}"
        self.expected.append(expected)
        self._rows.append(
            (picture.time_us, planned.pts_us, str(picture.kind), str(picture.by), psnr, still, _BELOW[below])
        )

    def held_out(self, judged: list[Judged]) -> None:
        """Write the figures of the second pass; its pictures are written as they come (`held_out_picture`)."""
        self.table("held-out.csv", COLUMNS, [tuple(j.figures[name] for name in COLUMNS) for j in judged])

    def held_out_picture(self, judged: Judged) -> None:
        """Write the picture made in place of a held-out frame."""
        self._write_still(f"held-out/{judged.picture.time_us:016d}.png", judged.picture)

    def overlap(self, seen: NDArray[np.bool_] | None) -> None:
        """Write which part of the pictures the events tell of, where it is not all."""
        if seen is not None:
            write_overlap(self.folder / "overlap.png", seen)
            self.files.append("overlap.png")

    def table(self, name: str, header: tuple[str, ...], rows: list[tuple[Any, ...]]) -> None:
        """Write a table."""
        write_table(self.folder / name, header, rows)
        self.files.append(name)

    def text(self, name: str, text: str) -> None:
        """Write a text file."""
        write_text(self.folder / name, text)
        self.files.append(name)

    def record(self, name: str, content: Mapping[str, Any]) -> None:
        """Write a JSON file."""
        write_json(self.folder / name, content)
        self.files.append(name)

    def _open_clip(self, shape: tuple[int, ...]) -> ClipWriter | None:
        wanted = self._settings.output.video
        if wanted == "none" or self._plan.playback_rate is None:
            return None
        name = CLIPS[wanted]
        writer = ClipWriter(
            self.folder / name,
            wanted,
            shape,
            self._light,
            self._plan.playback_rate,
            {"title": self._settings.title, "comment": cautions.SHORT},
            self._settings.output.strip,
        )
        self.files.append(name)
        return self._stack.enter_context(writer)

    def _wants_still(self, picture: Picture) -> bool:
        stills = self._settings.output.stills
        return (
            picture.time_us in self._asked
            or stills == "all"
            or (stills == "deblurred" and picture.kind is not Kind.INSERTED)
        )

    def _still(self, picture: Picture) -> str:
        name = f"stills/{picture.time_us:016d}.png"
        self._write_still(name, picture)
        if self._settings.output.trust and picture.error is not None:
            beside = f"trust/{picture.time_us:016d}.png"
            write_trust(self.folder / beside, picture.error, self._text(picture))
            self.files.append(beside)
        return name

    def _write_still(self, name: str, picture: Picture) -> None:
        write_still(self.folder / name, picture.image, self._light, self._text(picture))
        self.files.append(name)

    def _text(self, picture: Picture) -> dict[str, str]:
        return still_text(picture, self._first_us, self._settings.least_psnr)


def still_text(picture: Picture, first_us: int, least_psnr: float | None = None) -> dict[str, str]:
    """Say what a picture is, for its PNG text.

    Parameters
    ----------
    picture : Picture
    first_us : int
        Time of the recording's first frame.
    least_psnr : float, optional
        What the job asks for.

    Returns
    -------
    dict of str to str
    """
    expected = "not known" if picture.expected_psnr is None else f"{picture.expected_psnr:.2f}"
    below = Expected(picture.time_us, picture.kind, picture.expected_psnr).below(least_psnr)
    asked = {} if below is None else {f"Below {least_psnr:g} dB": "yes" if below else "no"}
    return {
        "Kind": str(picture.kind),
        "Made by": str(picture.by),
        "Scene time (us)": str(picture.time_us),
        "From the first frame (s)": f"{(picture.time_us - first_us) / 1e6:.6f}",
        "Expected PSNR (dB)": expected,
        **asked,
        "Caution": cautions.OF_KIND[picture.kind],
    }


def write_one(path: Path, picture: Picture, light: Light, first_us: int) -> Path:
    """Write one picture outside a job's outputs, for the preview."""
    write_still(path, picture.image, light, still_text(picture, first_us))
    return path
