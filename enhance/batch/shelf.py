"""A shelf of jobs: all are checked first, then the right ones run one after another; a failed one stops no other."""

from __future__ import annotations

import datetime
import logging
import time
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from enhance.batch import record
from enhance.batch.job import Job, load_job
from enhance.batch.outcome import JobReport, Outcome, ShelfReport
from enhance.errors import EnhanceError, JobError

if TYPE_CHECKING:
    from enhance.clip import ClipResult

logger = logging.getLogger(__name__)

#: Called as work goes on: job file, done, total, what.
Progress = Callable[[Path, int, int, str], None]
#: Called once a job, as soon as its outcome is known.
Announce = Callable[[JobReport], None]


@dataclass(frozen=True)
class Checked:
    """One job after its check: the report says whether it may start; the job is None where its file is wrong."""

    report: JobReport
    job: Job | None = None

    @property
    def may_start(self) -> bool:
        """Whether no mistake was found."""
        return self.job is not None and self.report.outcome is not Outcome.REFUSED


def job_files(paths: Iterable[Path | str]) -> list[Path]:
    """List the job files that are meant, each once: a folder stands for every .toml file directly in it.

    Parameters
    ----------
    paths : iterable of Path or str

    Returns
    -------
    list of Path
        In the order given, a folder's in natural order. A path that is not there stays in the list.

    Raises
    ------
    JobError
        If a folder holds no job file.
    """
    found: dict[Path, Path] = {}
    for path in map(Path, paths):
        files = sorted(path.glob("*.toml"), key=lambda each: record.natural(each.name)) if path.is_dir() else [path]
        if not files:
            raise JobError(
                f"{path}: there is no .toml file in this folder; name job files, or a folder that holds some"
            )
        for file in files:
            found.setdefault(file.resolve(), file)
    return list(found.values())


def check_shelf(paths: Iterable[Path | str]) -> list[Checked]:
    """Check every job completely, without writing anything.

    Parameters
    ----------
    paths : iterable of Path or str
        Job files, or folders of them.

    Returns
    -------
    list of Checked
        One a job file: ``NOT_STARTED`` where it may start, ``REFUSED`` with the reasons where not.

    Raises
    ------
    JobError
        If a folder holds no job file.
    """
    return _apart([_check(path) for path in job_files(paths)])


def run_shelf(
    paths: Iterable[Path | str],
    announce: Announce = lambda report: None,
    progress: Progress = lambda path, done, total, what: None,
) -> ShelfReport:
    """Run a shelf of jobs.

    All are checked first and the wrong ones refused; the others run one after another. Ctrl-C leaves what is finished.

    Parameters
    ----------
    paths : iterable of Path or str
        Job files, or folders of them.
    announce : callable
        Called with each job's report as soon as it is known.
    progress : callable
        Called with the job file, done, total and what is being done.

    Returns
    -------
    ShelfReport

    Raises
    ------
    JobError
        If a folder holds no job file.
    """
    checked = check_shelf(paths)
    reports = {each.report.path: each.report for each in checked}
    for each in checked:
        if not each.may_start:
            announce(each.report)
    for each in checked:
        if each.job is None or not each.may_start:
            continue
        report = _run(each.job, each.report, progress)
        reports[report.path] = report
        announce(report)
        if report.outcome is Outcome.INTERRUPTED:
            break
    return ShelfReport(tuple(reports.values()))


def reason_for(path: Path, error: Exception) -> str:
    """Say why a job failed: our own errors speak for themselves; any other is named, and shown whole by --debug."""
    logger.debug("%s failed", path, exc_info=error)
    if isinstance(error, EnhanceError):
        return str(error)
    return f"unforeseen {type(error).__name__}: {error}. Run it again with --debug to see where"


def _check(path: Path) -> Checked:
    try:
        job = load_job(path)
    except JobError as error:
        # the error's first line names the file, which the report does as well
        reasons = error.mistakes or (str(error).removeprefix(f"{path}: "),)
        return Checked(JobReport(path, path.stem, Outcome.REFUSED, reasons=reasons))
    report = JobReport(path, job.settings.title, Outcome.NOT_STARTED, job.settings.output.folder)
    return Checked(_inspect(job, report), job)


def _inspect(job: Job, report: JobReport) -> JobReport:
    """Look into the recording, the output folder and the disk."""
    from enhance import clip
    from enhance.write import probe_folder

    try:
        record.read_record(job.settings.output.folder)
        findings = clip.check(job.settings)
        if not findings.mistakes:
            probe_folder(job.settings.output.folder, findings.bytes)
    except Exception as error:
        return replace(report, outcome=Outcome.REFUSED, reasons=(reason_for(job.path, error),))
    return replace(
        report,
        outcome=Outcome.REFUSED if findings.mistakes else report.outcome,
        reasons=tuple(findings.mistakes),
        facts=tuple(findings.facts),
        cautions=tuple(findings.warnings),
        seconds=float(findings.seconds),
    )


def _apart(checked: Sequence[Checked]) -> list[Checked]:
    """Refuse every job that would write where another one does, whatever else is wrong with it."""
    homes = {each.report.path: each.job.settings.output.folder.resolve() for each in checked if each.job}
    parted = []
    for each in checked:
        home = homes.get(each.report.path)
        others = [str(path) for path, other in homes.items() if other == home and path != each.report.path]
        if home and others:
            reason = (
                f"output.folder: {each.report.folder} is also that of {', '.join(others)}; "
                f"give every job a folder of its own"
            )
            report = replace(each.report, outcome=Outcome.REFUSED, reasons=(*each.report.reasons, reason))
            each = replace(each, report=report)
        parted.append(each)
    return parted


def _run(job: Job, report: JobReport, progress: Progress) -> JobReport:
    from enhance import clip

    started = time.monotonic()
    run = _Run(datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds"))
    outcome, reason = Outcome.DONE, ""
    try:
        progress(job.path, 0, 1, "checksums of the inputs")
        run.inputs = record.input_digests(job.settings)
        record.remove_old(job.settings.output.folder)
        run.before = record.products(job.settings.output.folder)
        run.result = clip.run(job.settings, lambda done, total, what: progress(job.path, done, total, what))
    except KeyboardInterrupt:
        outcome, reason = Outcome.INTERRUPTED, "stopped by Ctrl-C; run it again to begin anew"
    except Exception as error:  # one job that breaks, even in an unforeseen way, must not end the night for the others
        outcome, reason = Outcome.FAILED, reason_for(job.path, error)
    report = replace(report, outcome=outcome, reasons=(reason,) if reason else (), seconds=time.monotonic() - started)
    if run.result is not None:
        cautions = tuple(dict.fromkeys((*report.cautions, *run.result.notes)))
        report = replace(report, cautions=cautions, counts=dict(run.result.counts))
    return _recorded(job, report, run)


@dataclass
class _Run:
    """What a run has come to know so far, for its record."""

    started: str
    inputs: dict[str, dict[str, Any]] = field(default_factory=dict)
    before: dict[str, int] = field(default_factory=dict)
    result: ClipResult | None = None


def _recorded(job: Job, report: JobReport, run: _Run) -> JobReport:
    """Write the record last: it says which files belong to this run, a failed one's as well."""
    from enhance.write import cautions

    folder = job.settings.output.folder
    try:
        record.write_record(
            folder,
            {
                "title": report.title,
                "job": record.relative(job.path, folder),
                "settings": job.document,
                "started": run.started,
                "inputs": run.inputs,
                "outcome": report.outcome,
                "error": "\n".join(report.reasons) or None,
                "cautions": [cautions.LONG, *report.cautions],
                "counts": dict(report.counts),
                "timings": {**(run.result.timings if run.result else {}), "total": round(report.seconds, 3)},
                "files": sorted(run.result.files if run.result else record.left_over(folder, run.before)),
            },
        )
    except EnhanceError as error:
        return replace(report, outcome=Outcome.FAILED, reasons=(*report.reasons, str(error)))
    return report
