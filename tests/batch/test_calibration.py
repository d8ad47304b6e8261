from collections.abc import Callable
from pathlib import Path

import pytest

from enhance.batch import Outcome, calibrate_shelf
from enhance.batch.calibration import rig_lines
from enhance.errors import CalibrationError
from enhance.rig import Quantity, Rig
from enhance.settings import ClipSettings

RIG = Rig(
    offset_us=Quantity(-7300, 12.4, "event onset", "14 frames"),
    drift_ppm=Quantity(0.0, None, "assumed"),
    contrast_positive=Quantity(0.2, 0.003, "log difference", "9000 pixels"),
    contrast_negative=Quantity(None, None, "log difference", "too few events"),
    hot_pixels=Quantity([[3, 4], [5, 6]], None, "rate"),
)


def run(paths: list[Path]) -> tuple[list, int]:
    told: list = []
    report = calibrate_shelf(paths, told.append, lambda path, done, total, what: None)
    return told, report.exit_code


@pytest.fixture
def calibrate(clip, monkeypatch: pytest.MonkeyPatch) -> Callable[[Exception | None], None]:
    """Replace the calibration of one recording by one that gives `RIG`, or fails."""

    def replace(error: Exception | None = None) -> None:
        def work(settings: ClipSettings, progress: Callable) -> Rig:
            progress(1, 1, "clock")
            if error:
                raise error
            return RIG

        monkeypatch.setattr("enhance.clip.calibrate", work, raising=False)

    return replace


def test_a_rig_is_told_with_uncertainty_method_and_evidence() -> None:
    assert list(rig_lines(RIG)) == [
        "clock offset: -7300 us +/- 12 (event onset; 14 frames)",
        "clock drift: 0 ppm (assumed)",
        "positive threshold: 0.2 +/- 0.003 (log difference; 9000 pixels)",
        "negative threshold: cannot be told (log difference; too few events)",
        "hot pixels: 2 (rate)",
    ]


def test_a_measured_rig_is_the_jobs_facts(write_job, calibrate) -> None:
    calibrate()
    (told,), code = run([write_job()])
    assert (told.outcome, code) == (Outcome.DONE, 0)
    assert told.facts == tuple(rig_lines(RIG))


def test_a_clock_that_cannot_be_told_fails_its_job(write_job, calibrate) -> None:
    calibrate(CalibrationError("the clock cannot be told: nothing moves"))
    (told,), code = run([write_job()])
    assert (told.outcome, told.reasons, code) == (Outcome.FAILED, ("the clock cannot be told: nothing moves",), 1)
    calibrate(IndexError("7"))
    (told,), code = run([write_job()])
    assert told.reasons == ("unforeseen IndexError: 7. Run it again with --debug to see where",)


def test_a_wrong_job_is_refused_and_the_others_are_measured(write_job, calibrate) -> None:
    calibrate()
    wrong, right = write_job({"frames.exposure": "1"}, name="a.toml"), write_job(name="b.toml")
    told, code = run([wrong, right])
    assert [each.outcome for each in told] == [Outcome.REFUSED, Outcome.DONE]
    assert code == 1
    assert run([wrong])[1] == 2


def test_two_jobs_never_write_their_rigs_into_one_folder(write_job, calibrate) -> None:
    calibrate()
    told, code = run([write_job(name="a.toml"), write_job(name="b.toml")])
    assert [each.outcome for each in told] == [Outcome.REFUSED, Outcome.REFUSED]
    assert code == 2
