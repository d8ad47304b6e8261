import io
import logging
import os
import subprocess
import sys
from pathlib import Path
from types import ModuleType, SimpleNamespace

import pytest

import enhance
import enhance.batch
from enhance import cli
from enhance.batch import JobReport, Outcome, ShelfReport
from enhance.errors import JobError, WriteError


def report(*outcomes: Outcome) -> ShelfReport:
    return ShelfReport(tuple(JobReport(Path(f"{i}.toml"), "t", each, Path("out")) for i, each in enumerate(outcomes)))


@pytest.fixture
def shelf(monkeypatch: pytest.MonkeyPatch):
    """Replace the running of jobs: `shelf(work)` is called in its place."""

    def replace(work) -> None:
        monkeypatch.setattr(enhance.batch, "run_shelf", work)

    return replace


def exit_code_of(*argv: str) -> int:
    try:
        return cli.main(argv)
    except SystemExit as leaving:  # argparse leaves by itself
        return int(leaving.code or 0)


@pytest.mark.parametrize("command", ["", "demo", "check", "run", "calibrate", "simulate", "train"])
def test_every_command_explains_itself(command: str, capsys) -> None:
    assert exit_code_of(*command.split(), "--help") == 0
    said = capsys.readouterr().out
    assert said.startswith("usage: enhance")
    assert "--debug" in said


def test_help_names_every_command_and_the_exit_codes(capsys) -> None:
    exit_code_of("--help")
    said = capsys.readouterr().out
    for word in ("demo", "check", "run", "calibrate", "simulate", "train", "130 interrupted"):
        assert word in said


def test_no_command_shows_the_help_and_is_wrong(capsys) -> None:
    assert exit_code_of() == 2
    assert "commands:" in capsys.readouterr().out


def test_the_version_is_the_packages(capsys) -> None:
    assert exit_code_of("--version") == 0
    assert capsys.readouterr().out == f"enhance {enhance.__version__}\n"


@pytest.mark.parametrize(
    ("argv", "message"),
    [
        (["rnu", "a.toml"], "invalid choice: 'rnu'"),
        (["run"], "the following arguments are required: JOB"),
        (["run", "a.toml", "--deb"], "unrecognized arguments: --deb"),
        (["simulate", "cars", "x"], "invalid choice: 'cars'"),
        (["simulate", "fan", "x", "--size", "3x"], "'3x' is not a size; write width x height, such as 346x260"),
        (["simulate", "fan", "x", "--seed", "-1"], "is not a whole number of 0 or more"),
        (["train", "x", "--minutes", "0"], "'0' is not a number above 0"),
        (["train", "x", "--minutes", "soon"], "'soon' is not a number above 0"),
    ],
)
def test_a_wrong_command_says_what_is_wrong_and_exits_2(argv: list[str], message: str, capsys) -> None:
    assert exit_code_of(*argv) == 2
    assert message in capsys.readouterr().err


@pytest.mark.parametrize(
    ("outcomes", "code"),
    [
        ([Outcome.DONE], 0),
        ([Outcome.DONE, Outcome.FAILED], 1),
        ([Outcome.REFUSED], 2),
        ([Outcome.DONE, Outcome.INTERRUPTED, Outcome.NOT_STARTED], 130),
    ],
)
def test_run_exits_as_its_jobs_ended_and_closes_with_their_count(outcomes, code: int, shelf, capsys) -> None:
    shelf(lambda jobs, announce, progress: report(*outcomes))
    assert exit_code_of("run", "a.toml") == code
    assert report(*outcomes).closing_line in capsys.readouterr().out


def test_a_finished_run_closes_with_the_caution(shelf, capsys) -> None:
    shelf(lambda jobs, announce, progress: report(Outcome.DONE))
    exit_code_of("run", "a.toml")
    assert "Never accept or release a machine on them alone." in capsys.readouterr().out.splitlines()[-1]


def test_done_jobs_are_told_on_stdout_and_the_others_on_stderr(shelf, capsys) -> None:
    def work(jobs, announce, progress) -> ShelfReport:
        announce(JobReport(Path("a.toml"), "t", Outcome.DONE, Path("out/a")))
        announce(JobReport(Path("b.toml"), "t", Outcome.FAILED, Path("out/b"), reasons=("the disk is full",)))
        return report(Outcome.DONE, Outcome.FAILED)

    shelf(work)
    exit_code_of("run", "a.toml", "b.toml")
    said = capsys.readouterr()
    assert "a.toml: done -> out/a" in said.out
    assert "b.toml: failed\n  - the disk is full" in said.err


@pytest.mark.parametrize(
    ("error", "code", "said"),
    [
        (JobError("jobs: there is no .toml file in this folder"), 2, "enhance: jobs: there is no .toml file"),
        (WriteError("out cannot be written"), 1, "enhance: out cannot be written"),
        (IndexError("7"), 1, "enhance: unforeseen IndexError: 7. Run it again with --debug to see where"),
        (KeyboardInterrupt(), 130, "enhance: interrupted; what was finished stays"),
    ],
)
@pytest.mark.parametrize("debug", [False, True])
def test_an_error_is_one_sentence_and_a_traceback_only_with_debug(
    error: BaseException, code: int, said: str, debug: bool, shelf, capsys
) -> None:
    def work(jobs, announce, progress) -> ShelfReport:
        raise error

    shelf(work)
    assert exit_code_of("run", "jobs", *(["--debug"] if debug else [])) == code
    err = capsys.readouterr().err
    assert said in err
    assert ("Traceback" in err) == (debug and code != 130)


def test_debug_is_taken_before_and_after_the_command(shelf) -> None:
    shelf(lambda jobs, announce, progress: report(Outcome.DONE))
    for argv in (["--debug", "run", "a.toml"], ["run", "--debug", "a.toml"]):
        exit_code_of(*argv)
        assert logging.getLogger("enhance").level == logging.DEBUG
    exit_code_of("run", "a.toml")
    assert logging.getLogger("enhance").level == logging.WARNING


def test_away_from_a_terminal_progress_is_plain_lines_few_and_far_between(monkeypatch, capsys) -> None:
    clock = iter(float(t) for t in range(100, 200))
    now = [0.0]
    monkeypatch.setattr(cli.time, "monotonic", lambda: now[0])
    progress = cli._Progress()
    for done, now[0] in enumerate(clock):
        progress(Path("a.toml"), done, 100, "pictures")
    lines = capsys.readouterr().err.splitlines()
    assert lines[0] == "a.toml: pictures: 0 of 100"
    assert lines[1] == "a.toml: pictures: 5 of 100, 1 min 35 s left"
    assert len(lines) == 100 / cli.LINE_EVERY_S


def test_on_a_terminal_progress_is_a_bar_that_is_taken_away_again(monkeypatch) -> None:
    terminal = io.StringIO()
    terminal.isatty = lambda: True
    monkeypatch.setattr(sys, "stderr", terminal)
    progress = cli._Progress()
    progress(Path("night/a.toml"), 0, 4, "pictures")
    progress(Path("night/a.toml"), 4, 4, "figures")
    progress.close()
    assert "a.toml: pictures" in terminal.getvalue()
    assert "a.toml: figures" in terminal.getvalue()
    assert progress._bar is None


def test_a_reader_that_went_away_does_not_stop_the_jobs(tmp_path: Path) -> None:
    script = (
        "import enhance.batch, enhance.cli, sys\n"
        "from pathlib import Path\n"
        "from enhance.batch import JobReport, Outcome, ShelfReport\n"
        "def work(jobs, announce, progress):\n"
        "    done = JobReport(Path('a.toml'), 't', Outcome.DONE, Path('out'))\n"
        "    for _ in range(3): announce(done)\n"
        f"    Path({str(tmp_path / 'finished')!r}).touch()\n"
        "    return ShelfReport((done,))\n"
        "enhance.batch.run_shelf = work\n"
        "sys.exit(enhance.cli.main(['run', 'a.toml']))\n"
    )
    end, start = os.pipe()
    os.close(end)
    done = subprocess.run([sys.executable, "-c", script], stdout=start, stderr=subprocess.PIPE, text=True)
    os.close(start)
    assert (done.returncode, done.stderr) == (0, "")
    assert (tmp_path / "finished").exists()


def test_check_of_jobs_that_are_not_there_is_a_wrong_command(tmp_path: Path, capsys) -> None:
    assert exit_code_of("check", str(tmp_path / "none.toml")) == 2
    assert "would fail\n  - there is no such job file; check the name" in capsys.readouterr().out


def test_check_of_a_wrong_job_names_its_mistakes_and_exits_1(tmp_path: Path, capsys) -> None:
    (tmp_path / "a.toml").write_text("[frames]\nsource = 3\n")
    assert exit_code_of("check", str(tmp_path)) == 1
    said = capsys.readouterr().out
    assert "line 2: frames.source: found 3; expected text" in said
    assert "output.folder: is missing" in said


def test_a_clean_check_tells_the_findings_writes_previews_and_exits_0(tmp_path: Path, monkeypatch, capsys) -> None:
    job = tmp_path / "a.toml"
    job.touch()
    settings = SimpleNamespace(output=SimpleNamespace(folder=tmp_path / "out"))
    told = JobReport(job, "t", Outcome.NOT_STARTED, tmp_path / "out", facts=("15 frames",), seconds=3.0)
    checked = SimpleNamespace(report=told, job=SimpleNamespace(settings=settings), may_start=True)
    monkeypatch.setattr(enhance.batch, "check_shelf", lambda jobs: [checked])
    clip = ModuleType("enhance.clip")
    clip.preview = lambda settings, folder: [folder / "1.png"]
    monkeypatch.setitem(sys.modules, "enhance.clip", clip)
    monkeypatch.setattr(enhance, "clip", clip, raising=False)
    assert exit_code_of("check", str(job)) == 0
    assert "preview" not in capsys.readouterr().out
    assert exit_code_of("check", "--preview", str(job)) == 0
    said = capsys.readouterr().out
    assert f"{job}: would run, in about 3 s" in said
    assert "\n  15 frames\n" in said
    assert f"preview: {tmp_path / 'out-preview' / '1.png'}" in said


def test_calibrate_tells_the_rig(monkeypatch, capsys) -> None:
    def work(jobs, announce, progress) -> ShelfReport:
        done = JobReport(Path("a.toml"), "t", Outcome.DONE, Path("out"), facts=("clock offset: -7300 us",))
        announce(done)
        return ShelfReport((done,))

    monkeypatch.setattr(enhance.batch, "calibrate_shelf", work)
    assert exit_code_of("calibrate", "a.toml") == 0
    assert "  clock offset: -7300 us" in capsys.readouterr().out


def test_train_hands_its_arguments_on_and_tells_how_far_it_is(monkeypatch, capsys) -> None:
    asked = {}

    def run(folder, *, progress, **rest):
        asked.update(rest, folder=folder)
        progress(1, 3, "rendering recordings")
        return folder / "fusion.safetensors"

    monkeypatch.setattr("enhance.train.run", run)
    argv = ["--minutes", "1.5", "--recordings", "3", "--seed", "7", "--resume", "--ablations", "0.5", "--trust", "9"]
    assert exit_code_of("train", "weights", *argv) == 0
    numbers = {"minutes": 1.5, "recordings": 3, "seed": 7, "resume": True, "ablations": 0.5, "trust": 9}
    assert asked == {"folder": Path("weights"), **numbers}
    told = capsys.readouterr()
    assert "weights/fusion.safetensors" in told.out
    assert "rendering recordings: 1 of 3" in told.err


def test_the_kinds_of_scene_are_those_of_the_simulator() -> None:
    from enhance.simulate import KINDS

    assert set(cli.KINDS) == set(KINDS)


def test_simulate_lays_down_a_recording_that_a_job_can_name(tmp_path: Path, capsys) -> None:
    argv = ["simulate", "drops", str(tmp_path / "rec"), "--size", "32x24", "--seconds", "0.15", "--seed", "3"]
    assert exit_code_of(*argv) == 0
    assert "enhance run" in capsys.readouterr().out
    job = enhance.batch.read_job(tmp_path / "rec" / "job.toml")
    assert job.events.size == (32, 24)
    assert len(list((tmp_path / "rec" / "frames").glob("*.png"))) == 4


def test_simulate_says_why_a_setting_cannot_be(tmp_path: Path, capsys) -> None:
    assert exit_code_of("simulate", "fan", str(tmp_path / "rec"), "--exposure", "50") == 2
    assert "enhance: simulate: exposure_us is 50000; expected" in capsys.readouterr().err


def test_the_demo_renders_runs_and_says_where_to_look(tmp_path: Path, shelf, monkeypatch, capsys) -> None:
    ran = []
    monkeypatch.setattr("enhance.simulate.demo_recording", lambda folder: folder / "job.toml", raising=False)
    shelf(lambda jobs, announce, progress: ran.extend(jobs) or report(Outcome.DONE))
    assert exit_code_of("demo", "--folder", str(tmp_path / "demo")) == 0
    assert ran == [tmp_path / "demo" / "job.toml"]
    assert f"Look at {tmp_path / 'demo' / 'out' / 'slow-motion.mp4'} first" in capsys.readouterr().out


def test_the_shipped_demo_job_renders_its_recording_where_it_is_missing(tmp_path: Path, shelf, monkeypatch) -> None:
    rendered = []
    monkeypatch.setattr("enhance.shipped.shipped_folder", lambda name: tmp_path / name)
    monkeypatch.setattr("enhance.simulate.demo_recording", rendered.append, raising=False)
    shelf(lambda jobs, announce, progress: report(Outcome.DONE))
    exit_code_of("run", str(tmp_path / "other.toml"))
    assert rendered == []
    exit_code_of("run", str(tmp_path / "jobs" / "demo.toml"))
    assert rendered == [tmp_path / "enhance-demo"]
    (tmp_path / "enhance-demo").mkdir()
    (tmp_path / "enhance-demo" / "job.toml").touch()
    exit_code_of("run", str(tmp_path / "jobs" / "demo.toml"))
    assert len(rendered) == 1
