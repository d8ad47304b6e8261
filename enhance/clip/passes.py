"""One recording from files to pictures, clip and figures."""

from __future__ import annotations

import time
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from enhance.calibrate import calibrate as calibrate_recording
from enhance.calibrate import rig_picture, rig_text
from enhance.clip.held_out import Judged, judge
from enhance.clip.keys import Keys
from enhance.clip.level import levelled
from enhance.clip.outputs import Outputs
from enhance.clip.pictures import Pictures
from enhance.clip.plan import Plan, make_plan
from enhance.clip.quality import below_count, expected_notes, expected_summary, held_out_summary, sharpness_summary
from enhance.clip.remarks import lost_figures, rig_remarks
from enhance.clip.source import events_on_frames, light_remarks, opened
from enhance.errors import CalibrationError
from enhance.interpolate.trust import TrustModel, load_trust
from enhance.measure import sharpness
from enhance.recording import By, Kind, Recording
from enhance.rig import Rig
from enhance.settings import BELOW_LEAST, ClipSettings
from enhance.shipped import shipped_folder
from enhance.write import cautions, write_drawing, write_text

if TYPE_CHECKING:
    from enhance.interpolate.network import FusionNetwork

#: Done, total, what.
Progress = Callable[[int, int, str], None]
WEIGHTS, TRUST = "fusion.safetensors", "trust.json"


@dataclass(frozen=True)
class ClipResult:
    """What a run made.

    Parameters
    ----------
    files : tuple of str
        Written, relative to the output folder.
    counts : dict
        Pictures by kind, and what else is counted.
    notes : tuple of str
        Corrections and cautions the user should read.
    figures : dict
        The content of quality.json.
    timings : dict
        Seconds of each stage.
    """

    files: tuple[str, ...]
    counts: dict[str, int]
    notes: tuple[str, ...]
    figures: dict[str, Any]
    timings: dict[str, float]


@dataclass
class _Progress:
    """How far a run is: its stages' times, what is to be reported, and what is to be counted."""

    report: Progress
    total: int = 1
    done: int = 0
    timings: dict[str, float] = field(default_factory=dict)

    def step(self, what: str) -> None:
        self.done += 1
        self.report(self.done, self.total, what)

    @contextmanager
    def stage(self, name: str) -> Iterator[None]:
        started = time.monotonic()
        try:
            yield
        finally:
            self.timings[name] = round(time.monotonic() - started, 3)


def run(settings: ClipSettings, progress: Progress) -> ClipResult:
    """Run one recording's job.

    Parameters
    ----------
    settings : ClipSettings
    progress : callable
        Called with done, total and what is being done.

    Returns
    -------
    ClipResult

    Raises
    ------
    EnhanceError
        If an input cannot be used, the rig cannot be told, the weights cannot be read or an output not be written.
    """
    state = _Progress(progress)
    with ExitStack() as stack:
        with state.stage("open"):
            progress(0, 1, "reading the recording")
            recording = stack.enter_context(opened(settings))
        return _run(recording, settings, state)


def calibrate(settings: ClipSettings, progress: Progress) -> Rig:
    """Measure the rig of one recording; write rig.toml, and rig.png with the evidence, into its output folder.

    Parameters
    ----------
    settings : ClipSettings
    progress : callable

    Returns
    -------
    Rig
    """
    progress(0, 1, "measuring the rig")
    with opened(settings) as recording:
        rig = levelled(recording, range(len(recording.frames)), settings, measured_rig).rig
        picture = rig_picture(recording, range(len(recording.frames)), rig)
    write_text(settings.output.folder / "rig.toml", rig_text(rig))
    if picture is not None:
        write_drawing(settings.output.folder / "rig.png", picture)
    progress(1, 1, "measuring the rig")
    return rig


def measured_rig(recording: Recording, keys: range, settings: ClipSettings) -> Rig:
    """Calibrate on some keys, and see that events and frames meet at all.

    Parameters
    ----------
    recording : Recording
    keys : range
        Frames that may be looked at.
    settings : ClipSettings

    Returns
    -------
    Rig

    Raises
    ------
    CalibrationError
        If the rig cannot be told, or no event lies near the frames.
    """
    rig = calibrate_recording(recording, keys, settings.rig)
    events = events_on_frames(recording, rig)
    if events is not None:
        first, last = int(recording.frames.start_us[0]), int(recording.frames.end_us[-1])
        if events.cover_end_us <= first or last <= events.cover_start_us:
            raise CalibrationError(
                f"{settings.title}: events and frames do not overlap: with an offset of {rig.offset_us.value} us the "
                f"events run from {events.cover_start_us} to {events.cover_end_us} us, the frames from {first} to "
                f'{last} us. Check events.time_unit and frames.times, or set rig.clock = "estimate"'
            )
    return rig


def load_shipped_trust() -> TrustModel:
    """Load what the expected errors rest on."""
    return load_trust(shipped_folder("models") / TRUST)


def load_fusion(settings: ClipSettings) -> FusionNetwork | None:
    """Load the fusion network a job asks for; None where it is off."""
    if settings.network == "off":
        return None
    from enhance.interpolate.network import load_network

    return load_network(shipped_folder("models") / WEIGHTS)


def _run(recording: Recording, settings: ClipSettings, state: _Progress) -> ClipResult:
    count = len(recording.frames)
    state.report(0, 1, "measuring the rig")
    with state.stage("calibrate"):
        level = levelled(recording, range(count), settings, measured_rig)
        rig = level.rig
    network, trust = load_fusion(settings), load_shipped_trust()
    keys = Keys(level.recording.frames, range(count), events_on_frames(recording, rig), rig, network, trust)
    plan = make_plan(settings, keys.times_us)
    every = settings.hold_out if settings.hold_out and count > settings.hold_out else 0
    held = [i for i in range(count) if every and i % every and i < every * ((count - 1) // every)]
    state.total = len(plan.pictures) + len(held)
    with Outputs(settings, keys.frames, plan) as outputs:
        outputs.text("rig.toml", rig_text(rig))
        outputs.overlap(keys.seen)
        with state.stage("pictures"):
            counts, sharp = _deliver(Pictures(keys), plan, outputs, state)
    if settings.least_psnr is not None:
        counts[BELOW_LEAST] = below_count(outputs.expected, settings.least_psnr)
    figures: dict[str, Any] = {
        "title": settings.title,
        "pictures": dict(counts),
        "deblurring": sharp,
        "lost_events": lost_figures(rig),
        "clipped": level.figures,
        "expected_psnr": expected_summary(outputs.expected, settings.least_psnr),
        "cautions": cautions.LONG,
    }
    with state.stage("held_out"):
        if held:
            figures["held_out"] = _judge_all(recording, settings, (network, trust), every, held, outputs, state)
        else:
            figures["held_out"] = None
    outputs.record("quality.json", figures)
    notes = (
        *_notes(recording, rig, plan, counts),
        *level.notes,
        *_overlap_notes(keys),
        *_trust_notes(settings, outputs),
    )
    return ClipResult(tuple(outputs.files), dict(counts), notes, figures, state.timings)


def _overlap_notes(keys: Keys) -> list[str]:
    if keys.seen is None:
        return []
    return [
        f"the event sensor looks at {keys.seen.mean():.1%} of the picture (overlap.png): elsewhere keys stay as "
        f"captured and inserted pictures are made from the frames alone"
    ]


def _trust_notes(settings: ClipSettings, outputs: Outputs) -> list[str]:
    notes = expected_notes(outputs.expected, settings.least_psnr)
    if settings.output.trust and not any(name.startswith("trust/") for name in outputs.files):
        notes.append("output.trust: no map was written, since the expected error of no still is known")
    return notes


def _deliver(pictures: Pictures, plan: Plan, outputs: Outputs, state: _Progress) -> tuple[Counter[str], dict[str, Any]]:
    """Make and write the pictures of the plan."""
    counts: Counter[str] = Counter()
    sharp = []
    frames = pictures.keys.frames
    index = {t: i for i, t in enumerate(pictures.keys.times_us)}
    for planned in plan.pictures:
        picture = pictures.at(planned.time_us)
        outputs.add(planned, picture)
        counts[str(picture.kind)] += 1
        if picture.kind is Kind.INSERTED and picture.by is By.FRAMES:
            counts["inserted from frames alone"] += 1
        if picture.kind is Kind.DEBLURRED:
            captured = frames.frame(index[planned.time_us]).image
            sharp.append((_sharpness(captured, frames.light), _sharpness(picture.image, frames.light)))
        state.step(f"{picture.kind} picture")
    return counts, sharpness_summary(sharp)


def _sharpness(image: np.ndarray, light: Any) -> float | None:
    return sharpness(np.clip(light.to_codes(image), 0, light.full_scale), light.full_scale)


def _judge_all(
    recording: Recording,
    settings: ClipSettings,
    models: tuple[FusionNetwork | None, TrustModel],
    every: int,
    held: list[int],
    outputs: Outputs,
    state: _Progress,
) -> dict[str, Any]:
    """Run the second pass; nothing in it has seen a held-out frame."""
    count = len(recording.frames)
    keys = range(0, count, every)
    try:
        level = levelled(recording, keys, settings, measured_rig)
    except CalibrationError as error:
        return {"keys": f"every {every}. frame", "pictures": 0, "reason": f"the second pass cannot be made: {error}"}
    events = events_on_frames(recording, level.rig)
    pictures = Pictures(Keys(level.recording.frames, keys, events, level.rig, *models))
    judged: list[Judged] = []
    for index in held:
        one = judge(pictures, index)
        outputs.held_out_picture(one)
        judged.append(Judged(one.picture, one.figures))
        state.step("held-out frame")
    outputs.held_out(judged)
    return held_out_summary(judged, every)


def _notes(recording: Recording, rig: Rig, plan: Plan, counts: Counter[str]) -> tuple[str, ...]:
    notes = [*recording.frames.notes, *light_remarks(recording.frames), *recording.events.notes, *plan.remarks]
    notes += rig_remarks(rig)
    if rig.offset_us.value is None:
        notes.append(f"the clock of the events cannot be told ({rig.offset_us.evidence}): every picture is from frames")
    elif counts[Kind.CAPTURED]:
        notes.append(f"keys that stay as captured (sharp already, or not covered by events): {counts[Kind.CAPTURED]}")
    if rig.clock_check.value is not None and rig.clock_check.evidence:
        notes.append(rig.clock_check.evidence)
    if counts["inserted from frames alone"]:
        notes.append(f"pictures inserted from frames alone, without events: {counts['inserted from frames alone']}")
    if rig.row_time_us.value:
        row_time = rig.row_time_us
        how = f" ({row_time.method}: {row_time.evidence})" if row_time.evidence else ""
        notes.append(f"rolling shutter, {row_time.value:.3f} us from row to row{how}: pictures are of one instant")
    for name in ("contrast_positive", "contrast_negative"):
        quantity = getattr(rig, name)
        if quantity.method == "assumed":
            notes.append(f"{name.replace('_', ' threshold, ')}: {quantity.evidence}")
    if len(recording.frames) == 1:
        notes.append("one frame only: no clip is made")
    return tuple(notes)
