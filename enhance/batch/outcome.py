"""How a job ended and how a shelf of jobs ended: the last line and the exit code are told here and nowhere else."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from pathlib import Path

from enhance.settings import BELOW_LEAST


class Outcome(StrEnum):
    """How one job ended."""

    DONE = "done"
    REFUSED = "refused"
    FAILED = "failed"
    INTERRUPTED = "interrupted"
    NOT_STARTED = "not started"


#: Exit codes of every command that works through jobs.
ALL_DONE, SOME_NOT, NONE_STARTED, INTERRUPTED = 0, 1, 2, 130


@dataclass(frozen=True)
class JobReport:
    """What is to be said of one job.

    Parameters
    ----------
    path : Path
        The job file.
    title : str
    outcome : Outcome
    folder : Path or None
        Where its results stand; None where the job file did not get so far.
    reasons : tuple of str
        Why it was refused or failed.
    facts : tuple of str
        What the check found out.
    cautions : tuple of str
        What to know before the results are trusted.
    counts : mapping
        Pictures by kind and the like.
    seconds : float
        How long it took; as predicted where it was only checked.
    """

    path: Path
    title: str
    outcome: Outcome
    folder: Path | None = None
    reasons: tuple[str, ...] = ()
    facts: tuple[str, ...] = ()
    cautions: tuple[str, ...] = ()
    counts: Mapping[str, int] = field(default_factory=dict)
    seconds: float = 0.0

    def text(self, with_facts: bool = False) -> str:
        """How the job ended: one line, and below it facts where wanted, reasons and cautions."""
        done = self.outcome is Outcome.DONE
        took = f" in {duration_text(self.seconds)}" if self.seconds and self.outcome is not Outcome.REFUSED else ""
        counted = ", ".join(f"{count} {what}" for what, count in self.counts.items() if count)
        where = f" -> {self.folder}" if self.folder and done else ""
        line = f"{self.path}: {self.outcome}{took}{': ' + counted if counted else ''}{where}"
        return "\n".join([line, *self._below(with_facts)])

    @property
    def check_text(self) -> str:
        """What the check found: one line, and below it facts, reasons and cautions."""
        if self.outcome is Outcome.REFUSED:
            line = f"{self.path}: would fail"
        else:
            line = f"{self.path}: would run, in about {duration_text(self.seconds)} -> {self.folder}"
        return "\n".join([line, *self._below(with_facts=True)])

    def _below(self, with_facts: bool) -> Iterator[str]:
        if with_facts:
            yield from (f"  {fact}" for fact in self.facts)
        yield from (f"  - {reason}" for reason in self.reasons)
        yield from (f"  caution: {caution}" for caution in self.cautions)


@dataclass(frozen=True)
class ShelfReport:
    """How all jobs of one command ended.

    Parameters
    ----------
    jobs : tuple of JobReport
    """

    jobs: tuple[JobReport, ...]

    @property
    def exit_code(self) -> int:
        """0 all done; 1 some failed or were refused; 2 none could start; 130 interrupted."""
        outcomes = {job.outcome for job in self.jobs}
        if outcomes & {Outcome.INTERRUPTED, Outcome.NOT_STARTED}:
            return INTERRUPTED
        if outcomes <= {Outcome.REFUSED}:
            return NONE_STARTED
        return ALL_DONE if outcomes == {Outcome.DONE} else SOME_NOT

    @property
    def closing_line(self) -> str:
        """Counts of each outcome, pictures below what was asked for, cautions, and where to look."""
        counts = Counter(job.outcome for job in self.jobs)
        jobs = "1 job" if len(self.jobs) == 1 else f"{len(self.jobs)} jobs"
        told = [f"{jobs}: " + ", ".join(f"{counts[each]} {each}" for each in Outcome if counts[each])]
        below = sum(job.counts.get(BELOW_LEAST, 0) for job in self.jobs)
        if below:
            told.append(f"{below} picture{'' if below == 1 else 's'} {BELOW_LEAST}, marked in pictures.csv")
        cautions = sum(len(job.cautions) for job in self.jobs)
        if cautions:
            told.append(f"{cautions} caution{'' if cautions == 1 else 's'} above, kept in each record.json")
        folders = [str(job.folder) for job in self.jobs if job.outcome is Outcome.DONE and job.folder]
        if folders:
            told.append(f"look in {', '.join(folders)}: quality.json says how far the pictures can be trusted")
        elif self.exit_code == NONE_STARTED:
            told.append("nothing was started; mend what is named above")
        return "; ".join(told) + "."


def duration_text(seconds: float) -> str:
    """Write a length of time in the two units a person would use.

    Examples
    --------
    >>> duration_text(0.4), duration_text(75), duration_text(7322)
    ('under 1 s', '1 min 15 s', '2 h 2 min')
    """
    whole = round(seconds)
    if whole < 1:
        return "under 1 s"
    if whole < 60:
        return f"{whole} s"
    if whole < 3600:
        return f"{whole // 60} min {whole % 60} s"
    return f"{whole // 3600} h {whole % 3600 // 60} min"
