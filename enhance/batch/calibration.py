"""The rig of each job's recording alone, one after another."""

from __future__ import annotations

import logging
import time
from collections.abc import Iterable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from enhance.batch.job import load_job
from enhance.batch.outcome import JobReport, Outcome, ShelfReport
from enhance.batch.shelf import Announce, Progress, job_files, refused
from enhance.errors import EnhanceError, JobError

if TYPE_CHECKING:
    from enhance.rig import Quantity, Rig

logger = logging.getLogger(__name__)


def calibrate_shelf(paths: Iterable[Path | str], announce: Announce, progress: Progress) -> ShelfReport:
    """Measure the rig of every job's recording and leave it as rig.toml in the job's output folder.

    Parameters
    ----------
    paths : iterable of Path or str
        Job files, or folders of them.
    announce, progress : callable
        As in `run_shelf`.

    Returns
    -------
    ShelfReport
        Each report's facts are the rig in words.

    Raises
    ------
    JobError
        If a folder holds no job file.
    """
    reports = []
    for path in job_files(paths):
        report = _calibrate(path, progress)
        announce(report)
        reports.append(report)
    return ShelfReport(tuple(reports))


def _calibrate(path: Path, progress: Progress) -> JobReport:
    from enhance import clip

    try:
        settings = load_job(path).settings
    except JobError as error:
        return refused(path, error)
    started = time.monotonic()
    report = JobReport(path, settings.title, Outcome.FAILED, settings.output.folder)
    try:
        rig = clip.calibrate(settings, lambda done, total, what: progress(path, done, total, what))
    except EnhanceError as error:
        logger.debug("%s failed", path, exc_info=True)
        return replace(report, reasons=(str(error),))
    return replace(report, outcome=Outcome.DONE, facts=tuple(rig_lines(rig)), seconds=time.monotonic() - started)


def rig_lines(rig: Rig) -> Iterator[str]:
    """Write every quantity of a rig as a line: value, uncertainty, method, evidence.

    Parameters
    ----------
    rig : Rig

    Yields
    ------
    str
    """
    yield _line("clock offset", rig.offset_us, "us")
    yield _line("clock drift", rig.drift_ppm, "ppm")
    yield _line("positive threshold", rig.contrast_positive)
    yield _line("negative threshold", rig.contrast_negative)
    yield _line("hot pixels", replace(rig.hot_pixels, value=len(rig.hot_pixels.value or [])))


def _line(name: str, quantity: Quantity, unit: str = "") -> str:
    value = "cannot be told" if quantity.value is None else f"{quantity.value:g} {unit}".rstrip()
    doubt = f" +/- {quantity.uncertainty:.2g}" if quantity.uncertainty is not None else ""
    evidence = f"; {quantity.evidence}" if quantity.evidence else ""
    return f"{name}: {value}{doubt} ({quantity.method}{evidence})"
