"""The job file: TOML to settings, with every mistake of the file reported at once."""

from __future__ import annotations

import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from enhance.batch.checks import Mistake, mistakes_of_files, mistakes_of_keys
from enhance.batch.lines import key_lines, line_of
from enhance.batch.mistakes import sentence, validation_mistakes
from enhance.batch.schema import FramesTable, JobTables, OutputTable, RigTable, SlowMotionTable
from enhance.errors import JobError
from enhance.settings import (
    ClipSettings,
    EventsSettings,
    FramesSettings,
    OutputSettings,
    RigSettings,
    SlowMotionSettings,
    Window,
)

#: Where slow motion is asked for and neither a factor nor a scene rate is given.
DEFAULT_FACTOR = 8


@dataclass(frozen=True)
class Job:
    """One job file that was found right.

    Parameters
    ----------
    path : Path
    document : dict
        The file as parsed: what the record keeps as "settings as given".
    settings : ClipSettings
    """

    path: Path
    document: dict[str, Any]
    settings: ClipSettings


def read_job(path: Path | str) -> ClipSettings:
    """Read a job file.

    Parameters
    ----------
    path : Path or str
        A TOML file; the paths in it are relative to its folder.

    Returns
    -------
    ClipSettings

    Raises
    ------
    JobError
        With every mistake found: key, line where it can be told, what was found and what was expected.
    """
    return load_job(path).settings


def load_job(path: Path | str) -> Job:
    """Read a job file and keep it as parsed beside its settings; raises as `read_job`."""
    path = Path(path)
    text, document = _parse(path)
    tables, mistakes = _validate(document)
    mistakes += mistakes_of_keys(document) + mistakes_of_files(document, path)
    if tables is None or mistakes:
        lines = key_lines(text)
        mistakes = sorted(mistakes, key=lambda mistake: line_of(lines, mistake[0]) or 0)
        count = "1 mistake" if len(mistakes) == 1 else f"{len(mistakes)} mistakes"
        raise JobError(f"{path}: {count} in the job file", [sentence(where, what, lines) for where, what in mistakes])
    return Job(path, document, _settings(tables, path))


def _parse(path: Path) -> tuple[str, dict[str, Any]]:
    try:
        text = path.read_bytes().decode("utf-8-sig")  # some editors put a byte order mark first
    except FileNotFoundError as error:
        raise JobError(f"{path}: there is no such job file; check the name") from error
    except UnicodeDecodeError as error:
        raise JobError(f"{path}: is not UTF-8 text; a job file is a TOML file, saved as UTF-8") from error
    except OSError as error:
        raise JobError(f"{path}: cannot be read ({error.strerror}); expected a job file") from error
    text = text.replace("\r\n", "\n")
    try:
        return text, tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        hint = ". Write / for \\ in paths, or put the path in 'single quotation marks'" if "\\" in str(error) else ""
        raise JobError(f"{path}: is not valid TOML: {error}{hint}") from error


def _validate(document: dict[str, Any]) -> tuple[JobTables | None, list[Mistake]]:
    from pydantic import ValidationError

    # so that what is missing is named by its key even where its whole table is
    whole = {"frames": {}, "events": {}, "output": {}} | document
    try:
        return JobTables.model_validate(whole), []
    except ValidationError as error:
        return None, validation_mistakes(error)


def _settings(tables: JobTables, path: Path) -> ClipSettings:
    folder, events = path.parent, tables.events
    return ClipSettings(
        title=tables.title or path.stem,
        frames=_frames(tables.frames, folder),
        events=EventsSettings(
            source=folder / events.source,
            columns=events.columns.model_dump(exclude_none=True) if events.columns else None,
            time_unit=events.time_unit,
            size=(events.size[0], events.size[1]) if events.size else None,
            cover_us=(events.cover[0], events.cover[1]) if events.cover else None,
        ),
        output=_output(tables.output, folder),
        rig=_rig(tables.rig, tables.frames, folder),
        slow_motion=_slow_motion(tables.slow_motion) if tables.slow_motion else None,
        hold_out=tables.measure.hold_out,
        network=tables.network.use,
        least_psnr=tables.measure.least_psnr,
    )


def _frames(table: FramesTable, folder: Path) -> FramesSettings:
    return FramesSettings(
        source=folder / table.source,
        times=folder / table.times if table.times else None,
        exposure_us=table.exposure,
        time_marks=table.time_marks,
        light_curve=table.light_curve,
        black=table.black,
        white=table.white,
        crop=table.crop,
        mosaic=table.mosaic,
        dark=folder / table.dark if table.dark else None,
        level=table.level,
    )


def _rig(table: RigTable, frames: FramesTable, folder: Path) -> RigSettings:
    lenses = {
        name: folder / given
        for name in ("frame_lens", "event_lens")
        if (given := getattr(table.registration, name, None)) is not None
    }
    return RigSettings(
        file=folder / table.file if table.file else None,
        contrast=table.contrast,
        row_time_us=frames.row_time if frames.shutter == "rolling" else 0.0,
        offset_us=table.clock.offset if table.clock else None,
        drift_ppm=table.clock.drift_ppm if table.clock else None,
        unknown=table.unknown,
        registration=table.registration.matrix if table.registration else None,
        **lenses,
        triggers=folder / table.clock.triggers if table.clock and table.clock.triggers else None,
    )


def _slow_motion(table: SlowMotionTable) -> SlowMotionSettings:
    windows = sorted((Window(each.from_, each.to, each.factor) for each in table.windows), key=lambda w: w.from_us)
    neither = table.factor is None and table.scene_rate is None
    return SlowMotionSettings(
        factor=DEFAULT_FACTOR if neither else table.factor,
        scene_rate=table.scene_rate,
        playback_rate=table.playback_rate,
        windows=tuple(windows),
    )


def _output(table: OutputTable, folder: Path) -> OutputSettings:
    return OutputSettings(
        folder=folder / table.folder,
        video=table.video,
        stills=table.stills,
        times_us=tuple(sorted(set(table.times))),
        strip=table.strip,
        trust=table.trust,
    )
