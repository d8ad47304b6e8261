"""The rig of each job's recording alone, one after another."""

from __future__ import annotations

import time
from collections.abc import Iterable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from enhance.batch.job import Job
from enhance.batch.outcome import JobReport, Outcome, ShelfReport
from enhance.batch.shelf import Announce, Progress, check_shelf, reason_for

if TYPE_CHECKING:
    from enhance.rig import Quantity, Rig


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
    for each in check_shelf(paths):
        report = _calibrate(each.job, each.report, progress) if each.job and each.may_start else each.report
        announce(report)
        reports.append(report)
    return ShelfReport(tuple(reports))


def _calibrate(job: Job, report: JobReport, progress: Progress) -> JobReport:
    from enhance import clip

    started = time.monotonic()
    try:
        rig = clip.calibrate(job.settings, lambda done, total, what: progress(job.path, done, total, what))
    except Exception as error:  # as in a run: no job ends the work for the others
        return replace(report, outcome=Outcome.FAILED, reasons=(reason_for(job.path, error),))
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
    if rig.clock_check.value is not None and rig.clock_check.evidence:
        yield f"caution: {rig.clock_check.evidence}"
    yield _line("positive threshold", rig.contrast_positive)
    yield _line("negative threshold", rig.contrast_negative)
    if rig.registration.value is not None:
        (a, b, c), (d, e, f), _ = rig.registration.value
        shown = f"x = {a:.4f} x + {b:.4f} y + {c:.2f}, y = {d:.4f} x + {e:.4f} y + {f:.2f} (event to frame pixel)"
        yield _line("registration", replace(rig.registration, value=shown), "+/- in event pixels")
    yield _line("hot pixels", replace(rig.hot_pixels, value=len(rig.hot_pixels.value or [])))


def _line(name: str, quantity: Quantity, unit: str = "") -> str:
    told = quantity.value if isinstance(quantity.value, str | None) else f"{quantity.value:g}"
    value = "cannot be told" if told is None else f"{told} {unit}".rstrip()
    doubt = f" +/- {quantity.uncertainty:.2g}" if quantity.uncertainty is not None else ""
    evidence = f"; {quantity.evidence}" if quantity.evidence else ""
    return f"{name}: {value}{doubt} ({quantity.method}{evidence})"
