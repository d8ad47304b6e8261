from pathlib import Path

import pytest

from enhance.batch import JobReport, Outcome, ShelfReport
from enhance.batch.outcome import duration_text

DONE, REFUSED, FAILED = Outcome.DONE, Outcome.REFUSED, Outcome.FAILED
STOPPED, WAITING = Outcome.INTERRUPTED, Outcome.NOT_STARTED


def shelf(*outcomes: Outcome, cautions: tuple[str, ...] = ()) -> ShelfReport:
    jobs = [
        JobReport(Path(f"{i}.toml"), "title", outcome, Path(f"out/{i}"), cautions=cautions)
        for i, outcome in enumerate(outcomes)
    ]
    return ShelfReport(tuple(jobs))


# the project's contract for exit codes
@pytest.mark.parametrize(
    ("outcomes", "code"),
    [
        ([DONE], 0),
        ([DONE, DONE], 0),
        ([DONE, REFUSED], 1),
        ([DONE, FAILED], 1),
        ([FAILED], 1),
        ([FAILED, REFUSED], 1),
        ([REFUSED], 2),
        ([REFUSED, REFUSED], 2),
        ([], 2),
        ([DONE, STOPPED], 130),
        ([REFUSED, STOPPED, WAITING], 130),
    ],
)
def test_the_exit_code_follows_from_how_the_jobs_ended(outcomes: list[Outcome], code: int) -> None:
    assert shelf(*outcomes).exit_code == code


def test_the_last_line_counts_outcomes_and_says_where_to_look() -> None:
    line = shelf(DONE, FAILED, REFUSED, DONE, cautions=("a", "b")).closing_line
    assert line.startswith("4 jobs: 2 done, 1 refused, 1 failed; 8 cautions above, kept in each record.json; ")
    assert "look in out/0, out/3: quality.json" in line


@pytest.mark.parametrize(
    ("counts", "told"),
    [
        ([2, 1], "2 jobs: 2 done; 3 pictures below measure.least_psnr, marked in pictures.csv; look in "),
        ([0, 1], "2 jobs: 2 done; 1 picture below measure.least_psnr, marked in pictures.csv; look in "),
        ([0, 0], "2 jobs: 2 done; look in "),
    ],
)
def test_the_last_line_counts_pictures_below_what_was_asked_for(counts: list[int], told: str) -> None:
    jobs = [
        JobReport(Path("a.toml"), "t", DONE, Path("out"), counts={"inserted": 9, "below measure.least_psnr": count})
        for count in counts
    ]
    assert ShelfReport(tuple(jobs)).closing_line.startswith(told)
    assert (f", {counts[0]} below measure.least_psnr -> " in jobs[0].text()) == bool(counts[0])


def test_the_last_line_of_a_command_that_started_nothing_says_so() -> None:
    assert shelf(REFUSED).closing_line == "1 job: 1 refused; nothing was started; mend what is named above."


def test_a_job_is_told_in_one_line_with_reasons_and_cautions_below() -> None:
    report = JobReport(
        Path("a.toml"), "t", DONE, Path("out"), facts=("15 frames",), cautions=("careful",),
        counts={"captured": 2, "inserted": 0}, seconds=75.0,
    )  # fmt: skip
    assert report.text() == "a.toml: done in 1 min 15 s: 2 captured -> out\n  caution: careful"
    assert "\n  15 frames\n" in report.text(with_facts=True)
    failed = JobReport(Path("a.toml"), "t", FAILED, Path("out"), reasons=("the disk is full",), seconds=0.2)
    assert failed.text() == "a.toml: failed in under 1 s\n  - the disk is full"


def test_a_check_says_would_run_or_would_fail() -> None:
    good = JobReport(Path("a.toml"), "t", WAITING, Path("out"), facts=("15 frames",), seconds=12.0)
    assert good.check_text == "a.toml: would run, in about 12 s -> out\n  15 frames"
    bad = JobReport(Path("a.toml"), "t", REFUSED, reasons=("no events",))
    assert bad.check_text == "a.toml: would fail\n  - no events"


@pytest.mark.parametrize(
    ("seconds", "text"),
    [(0.4, "under 1 s"), (59.4, "59 s"), (60, "1 min 0 s"), (3599.6, "1 h 0 min"), (7322, "2 h 2 min")],
)
def test_lengths_of_time_are_written_in_two_units(seconds: float, text: str) -> None:
    assert duration_text(seconds) == text
