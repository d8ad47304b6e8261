"""Job files made from a right one, and a stand-in for the work on one recording."""

import sys
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from types import ModuleType, SimpleNamespace

import pytest

import enhance
from enhance.settings import ClipSettings

#: The least an image recording's job says; every test changes one thing.
RIGHT = {
    "frames.source": '"frames"',
    "frames.times": '"frames.csv"',
    "frames.light_curve": '"srgb"',
    "events.source": '"events.h5"',
    "output.folder": '"out"',
}

WriteJob = Callable[..., Path]


def job_text(changes: dict[str, str | None]) -> str:
    keys = {key: value for key, value in {**RIGHT, **changes}.items() if value is not None}
    lines = [f"{key} = {value}" for key, value in keys.items() if "." not in key]
    for table in dict.fromkeys(key.split(".")[0] for key in keys if "." in key):
        lines.append(f"[{table}]")
        lines += [f"{key.partition('.')[2]} = {value}" for key, value in keys.items() if key.startswith(f"{table}.")]
    return "\n".join([*lines, ""])


def lay_down_inputs(folder: Path) -> None:
    (folder / "frames").mkdir(parents=True, exist_ok=True)
    (folder / "frames" / "0.png").write_bytes(b"zero")
    (folder / "frames.csv").write_text("frame,start_us,end_us\n0,0,1\n")
    (folder / "events.h5").write_bytes(b"events")


@pytest.fixture
def write_job(tmp_path: Path) -> WriteJob:
    """Write a right job with some keys changed (None: left out) and its inputs beside it."""

    def write(changes: dict[str, str | None] | None = None, name: str = "job.toml", text: str | None = None) -> Path:
        lay_down_inputs(tmp_path)
        path = tmp_path / name
        path.write_text(job_text(changes or {}) if text is None else text)
        return path

    return write


@dataclass
class FakeClip:
    """What the stand-in does: exceptions to raise by title, findings to give, and what it was called with."""

    errors: dict[str, BaseException] = field(default_factory=dict)
    check_errors: dict[str, BaseException] = field(default_factory=dict)
    mistakes: dict[str, tuple[str, ...]] = field(default_factory=dict)
    bytes: int = 1000
    ran: list[str] = field(default_factory=list)
    notes: tuple[str, ...] = ("2 frames were not covered",)

    def check(self, settings: ClipSettings) -> SimpleNamespace:
        if settings.title in self.check_errors:
            raise self.check_errors[settings.title]
        return SimpleNamespace(
            facts=("15 frames",),
            warnings=("the clock is guessed",),
            mistakes=self.mistakes.get(settings.title, ()),
            pictures=3,
            seconds=12.0,
            bytes=self.bytes,
        )

    def run(self, settings: ClipSettings, progress: Callable[[int, int, str], None]) -> SimpleNamespace:
        self.ran.append(settings.title)
        folder = settings.output.folder
        (folder / "stills").mkdir(parents=True, exist_ok=True)
        progress(1, 2, "pictures")
        (folder / "stills" / "0000000000000007.png").write_bytes(b"still")
        if settings.title in self.errors:
            raise self.errors[settings.title]
        (folder / "pictures.csv").write_text("time_us\n")
        return SimpleNamespace(
            files=("pictures.csv", "stills/0000000000000007.png"),
            counts={"captured": 1, "deblurred": 2, "inserted": 0},
            notes=self.notes,
            figures={},
            timings={"deblur": 0.5},
        )


@pytest.fixture
def clip(monkeypatch: pytest.MonkeyPatch) -> FakeClip:
    """Replace the work on one recording."""
    fake = FakeClip()
    module = ModuleType("enhance.clip")
    module.check, module.run = fake.check, fake.run  # type: ignore[attr-defined]
    monkeypatch.setitem(sys.modules, "enhance.clip", module)
    monkeypatch.setattr(enhance, "clip", module, raising=False)
    return fake
