"""The command line: parses, prints and exits; the only file that does any of the three, or configures logging.

Nothing heavy is imported here: every command imports what it needs when it is called, so that help is instant.
"""

from __future__ import annotations

import argparse
import logging
import os
import sys
import time
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from enhance import __version__
from enhance.errors import EnhanceError, JobError

if TYPE_CHECKING:
    from enhance.batch import JobReport, ShelfReport

#: Plain progress lines come at most this often, in seconds: a night's log stays readable.
LINE_EVERY_S = 5.0
#: Kinds of invented scene; stated here so that help needs no import, and held against `simulate` by a test.
KINDS = ("texture", "parts", "fan", "drops", "label", "thin", "zoom", "cloth", "text", "fluid", "glass", "specks")

WRONG_COMMAND, FAILED, INTERRUPTED = 2, 1, 130

_DESCRIPTION = """\
Sharp stills and slow motion from blurred frames and the events seen beside them,
with figures that say how far each picture can be trusted.

Begin with `enhance demo`: it renders an invented recording, runs the whole job on
it and says where to look. Then write a job file for your own recording (the folder
jobs/ holds commented examples), and

  enhance check my-job.toml      what would be done, how long it takes, what is wrong
  enhance run my-job.toml        do it
  enhance run shelf-of-jobs/     every job file in a folder, one after another
"""

_EPILOG = """\
exit codes: 0 all jobs done; 1 some job failed or was refused, the others are done;
2 the command is wrong, or no job could start; 130 interrupted.
"""


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command.

    Parameters
    ----------
    argv : sequence of str, optional
        Arguments without the program's name; the process's own if left out.

    Returns
    -------
    int
        The exit code.
    """
    parser = _parser()
    arguments = parser.parse_args(argv)
    _configure_logging(getattr(arguments, "debug", False))
    if arguments.command is None:
        _say(parser.format_help())
        return WRONG_COMMAND
    try:
        return int(arguments.work(arguments))
    except KeyboardInterrupt:
        _complain("enhance: interrupted; what was finished stays")
        return INTERRUPTED
    except EnhanceError as error:
        logging.getLogger("enhance.cli").debug("stopped by", exc_info=True)
        _complain(f"enhance: {error}")
        return WRONG_COMMAND if isinstance(error, JobError) else FAILED
    except Exception as error:
        logging.getLogger("enhance.cli").debug("stopped by", exc_info=True)
        _complain(f"enhance: unforeseen {type(error).__name__}: {error}. Run it again with --debug to see where")
        return FAILED


def _configure_logging(debug: bool) -> None:
    """Send this package's own messages to stderr; those of other libraries stay as they are."""
    handler = logging.StreamHandler(sys.stderr)
    handler.setFormatter(logging.Formatter("%(levelname)s %(name)s: %(message)s"))
    ours = logging.getLogger("enhance")
    ours.handlers[:] = [handler]
    ours.setLevel(logging.DEBUG if debug else logging.WARNING)


def _parser() -> argparse.ArgumentParser:
    everywhere = argparse.ArgumentParser(add_help=False, allow_abbrev=False)
    everywhere.add_argument(
        "--debug", action="store_true", default=argparse.SUPPRESS, help="show where in the program an error arose"
    )
    parser = argparse.ArgumentParser(
        prog="enhance",
        description=_DESCRIPTION,
        epilog=_EPILOG,
        formatter_class=argparse.RawDescriptionHelpFormatter,
        allow_abbrev=False,
        parents=[everywhere],
    )
    parser.add_argument("--version", action="version", version=f"enhance {__version__}")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", title="commands")

    def command(name: str, work: Any, summary: str, description: str) -> argparse.ArgumentParser:
        one = commands.add_parser(
            name,
            help=summary,
            description=description,
            formatter_class=argparse.RawDescriptionHelpFormatter,
            allow_abbrev=False,
            parents=[everywhere],
        )
        one.set_defaults(work=work)
        return one

    demo = command("demo", _demo, "render an invented recording and run the whole job on it", _DEMO)
    demo.add_argument("--folder", type=Path, default=Path("enhance-demo"), help="where (default: ./enhance-demo)")
    check = command("check", _check, "say what jobs would do, and what is wrong with them", _CHECK)
    _add_jobs(check)
    check.add_argument(
        "--preview", action="store_true", help="write a few pictures beside each output folder, in FOLDER-preview"
    )
    _add_jobs(command("run", _run, "run jobs, one after another", _RUN))
    _add_jobs(command("calibrate", _calibrate, "measure how the two sensors relate, and nothing else", _CALIBRATE))
    _add_simulate(command("simulate", _simulate, "render an invented recording whose truth is known", _SIMULATE))
    _add_train(command("train", _train, "fit the fusion network on invented recordings", _TRAIN))
    return parser


_DEMO = """\
Render an invented recording of a labelling machine, run the whole job on it
(deblur, slow motion, held-out figures) and say where to look."""
_CHECK = """\
Check jobs completely, without doing them: every mistake of a job file with its
line, what the recording holds, how many pictures would be made and how long it
would take. Exit codes: 0 clean; 1 some job would fail; 2 the command is wrong."""
_RUN = """\
Run jobs, one after another. All are checked first; wrong ones are refused at once
and the others run. One that fails does not stop the rest. What an earlier run left
in a job's output folder, as listed in its record.json, is removed first."""
_CALIBRATE = """\
Measure how the event sensor relates to the frame camera (clock, contrast thresholds,
hot pixels) and leave it as rig.toml in each job's output folder. Other jobs of the
same rig can name that file."""
_SIMULATE = """\
Render an invented recording (frames, their times, events, a job file) whose truth
is known, to try settings on or to test with."""
_TRAIN = """\
Fit the fusion network on invented recordings, rendered as it goes. The folder keeps
the state after every round, so that training can be taken up again with --resume."""


def _add_jobs(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "jobs", nargs="+", type=Path, metavar="JOB", help="a job file, or a folder: every .toml file directly in it"
    )


def _add_simulate(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("kind", choices=KINDS, metavar="KIND", help=f"what is seen: {', '.join(KINDS)}")
    parser.add_argument("folder", type=Path, metavar="FOLDER", help="where to write; a new or an empty folder")
    parser.add_argument("--seed", type=_whole(0), default=1, help="another seed, another scene (default: 1)")
    parser.add_argument(
        "--size", type=_size, default=(346, 260), metavar="WxH", help="pixels of both sensors (default: 346x260)"
    )
    parser.add_argument("--seconds", type=_positive, default=1.0, help="length (default: 1)")
    parser.add_argument(
        "--speed", type=_positive, default=600.0, help="of the fastest part, pixels a second (default: 600)"
    )
    parser.add_argument("--rate", type=_positive, default=25.0, help="frames a second (default: 25)")
    parser.add_argument("--exposure", type=_positive, default=20.0, help="of each frame, milliseconds (default: 20)")
    parser.add_argument("--color", action="store_true", help="RGB frames instead of grey")


def _add_train(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("folder", type=Path, metavar="FOLDER", help="where the state and the weights go")
    parser.add_argument("--minutes", type=_positive, default=30.0, help="how long to train (default: 30)")
    parser.add_argument("--recordings", type=_whole(2), default=60, help="how many to render (default: 60)")
    parser.add_argument("--seed", type=_whole(0), default=1, help="of the recordings and the weights (default: 1)")
    parser.add_argument("--resume", action="store_true", help="take up the training that stands in FOLDER")
    parser.add_argument("--ablations", type=_positive, default=0.0, metavar="MINUTES",
                        help="also fit networks that lack something, for the card")  # fmt: skip
    parser.add_argument("--trust", type=_whole(1), default=0, metavar="RECORDINGS", help="also fit trust, on so many")


def _whole(least: int) -> Any:
    def whole(text: str) -> int:
        number = int(text) if text.isdecimal() else -1
        if number < least:
            raise argparse.ArgumentTypeError(f"{text!r} is not a whole number of {least} or more")
        return number

    return whole


def _positive(text: str) -> float:
    try:
        number = float(text)
    except ValueError:
        number = 0.0
    if not 0 < number < float("inf"):
        raise argparse.ArgumentTypeError(f"{text!r} is not a number above 0")
    return number


def _size(text: str) -> tuple[int, int]:
    width, _, height = text.lower().partition("x")
    if not (width.isdecimal() and height.isdecimal() and int(width) and int(height)):
        raise argparse.ArgumentTypeError(f"{text!r} is not a size; write width x height, such as 346x260")
    return int(width), int(height)


def _demo(arguments: argparse.Namespace) -> int:
    from enhance.simulate import demo_recording

    folder: Path = arguments.folder
    _say(f"Rendering the invented recording of a labelling machine into {folder} ...")
    demo_recording(folder)
    report = _shelf([folder / "job.toml"])
    if report.exit_code == 0:
        _say(
            f"Look at {folder / 'out' / 'slow-motion.mp4'} first, then compare {folder / 'frames'} with "
            f"{folder / 'out' / 'stills'}.\nThe job was {folder / 'job.toml'}: copy it for a recording of your own."
        )
    return report.exit_code


def _run(arguments: argparse.Namespace) -> int:
    _render_shipped_demo(arguments.jobs)
    return _shelf(arguments.jobs).exit_code


def _shelf(jobs: Sequence[Path]) -> ShelfReport:
    from enhance.batch import run_shelf

    progress = _Progress()
    report = run_shelf(jobs, lambda job: _announce(job, progress), progress)
    progress.close()
    _say(report.closing_line)
    if report.exit_code == 0:
        from enhance.write import cautions

        _say(cautions.SHORT)
    return report


def _check(arguments: argparse.Namespace) -> int:
    from enhance.batch import Outcome, check_shelf

    _render_shipped_demo(arguments.jobs)
    checked = check_shelf(arguments.jobs)
    for each in checked:
        _say(each.report.check_text)
        if arguments.preview and each.may_start and each.job:
            _preview(each.job.settings)
    if not any(each.report.path.exists() for each in checked):
        return WRONG_COMMAND
    return FAILED if any(each.report.outcome is Outcome.REFUSED for each in checked) else 0


def _preview(settings: Any) -> None:
    from enhance import clip

    folder = settings.output.folder
    for path in clip.preview(settings, folder.with_name(f"{folder.name}-preview")):
        _say(f"  preview: {path}")


def _calibrate(arguments: argparse.Namespace) -> int:
    from enhance.batch import calibrate_shelf

    _render_shipped_demo(arguments.jobs)
    progress = _Progress()
    report = calibrate_shelf(arguments.jobs, lambda job: _announce(job, progress, with_facts=True), progress)
    progress.close()
    return report.exit_code


def _render_shipped_demo(jobs: Sequence[Path]) -> None:
    """Render the recording of the shipped demo job where it is asked for and not there yet: it runs as it stands."""
    from enhance.shipped import shipped_folder

    demo = shipped_folder("jobs") / "demo.toml"
    folder = demo.parent.parent / "enhance-demo"
    if demo in [job.resolve() for job in jobs] and not (folder / "job.toml").exists():
        from enhance.simulate import demo_recording

        _say(f"Rendering the demo's invented recording into {folder} ...")
        demo_recording(folder)


def _simulate(arguments: argparse.Namespace) -> int:
    import numpy as np

    from enhance.simulate import Camera, EventSensor, make_scene, simulate, write_recording

    size, seed = arguments.size, arguments.seed
    try:
        scene = make_scene(arguments.kind, size, np.random.default_rng(seed), arguments.speed, arguments.color)
        camera = Camera(arguments.rate, round(1000 * arguments.exposure))
        sensor = EventSensor(0.20, 0.22, mismatch=0.03, noise_hz=1.0, hot_fraction=1e-4)
        recorded = simulate(scene, camera, sensor, arguments.seconds, seed)
    except ValueError as error:
        raise JobError(f"simulate: {error}") from error
    job = write_recording(recorded, arguments.folder)
    _say(f"{len(recorded.recording.frames)} frames and {recorded.recording.events.count} events stand in "
         f"{arguments.folder}, the truth in truth.toml. Try `enhance run {job}`.")  # fmt: skip
    return 0


def _train(arguments: argparse.Namespace) -> int:
    from enhance import train

    asked = {name: getattr(arguments, name) for name in train.OPTIONS}
    progress = _Progress()
    path = train.run(arguments.folder, progress=lambda *step: progress(arguments.folder, *step), **asked)
    progress.close()
    _say(f"The weights stand in {path}, what is known of them beside it.")
    return 0


def _announce(report: JobReport, progress: _Progress, with_facts: bool = False) -> None:
    from enhance.batch import Outcome

    progress.close()
    tell = _say if report.outcome is Outcome.DONE else _complain
    tell(report.text(with_facts))


class _Progress:
    """A bar on a terminal; elsewhere plain lines with the time left, at most one every few seconds."""

    def __init__(self) -> None:
        self._bar: Any = None
        self._phase: tuple[Path, int] | None = None
        self._began = self._told = 0.0
        self._done = 0

    def __call__(self, path: Path, done: int, total: int, what: str) -> None:
        if self._phase != (path, total) or done < self._done:
            self.close()
            self._phase, self._began = (path, total), time.monotonic()
        self._done = done
        if sys.stderr.isatty():
            self._show(done, total, f"{path.name}: {what}")
        else:
            self._print(path, done, total, what)

    def _show(self, done: int, total: int, text: str) -> None:
        from tqdm import tqdm

        if self._bar is None:
            self._bar = tqdm(total=total, desc=text, leave=False, dynamic_ncols=True, file=sys.stderr)
        self._bar.set_description(text)
        self._bar.update(done - self._bar.n)

    def _print(self, path: Path, done: int, total: int, what: str) -> None:
        from enhance.batch.outcome import duration_text

        now = time.monotonic()
        if now - self._told < LINE_EVERY_S:
            return
        self._told = now
        left = f", {duration_text((now - self._began) * (total - done) / done)} left" if done else ""
        _complain(f"{path}: {what}: {done} of {total}{left}")

    def close(self) -> None:
        """Take the bar off the terminal, so that a line can be printed."""
        if self._bar is not None:
            self._bar.close()
        self._bar = self._phase = None


def _say(text: str) -> None:
    _print_to(sys.stdout, text)


def _complain(text: str) -> None:
    _print_to(sys.stderr, text)


def _print_to(stream: Any, text: str) -> None:
    try:
        print(text, file=stream, flush=True)
    except BrokenPipeError:
        # whoever read along has gone; the jobs go on, and nothing more is said there
        nowhere = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, stream.fileno())
        os.close(nowhere)


if __name__ == "__main__":
    sys.exit(main())
