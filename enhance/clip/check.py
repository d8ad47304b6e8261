"""Everything that can be known of a job before work."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from enhance.calibrate import known_rig
from enhance.clip.keys import SLACK
from enhance.clip.plan import make_plan
from enhance.clip.source import events_on_frames, light_remarks, opened
from enhance.clock import middle_us
from enhance.errors import EnhanceError, JobError
from enhance.recording import Recording
from enhance.rig import Rig
from enhance.rows import frames_in_row_time
from enhance.settings import ClipSettings

#: Seconds for one pixel of one picture, fitted to the demo and to a sparse real recording on two cores: a key, an
#: inserted picture with the network and without it, and the comparison of a held-out frame.
KEY_S, FUSED_S, BLENDED_S, JUDGED_S = 3e-7, 9e-7, 4e-7, 2.2e-6
#: Pictures averaged for a held-out frame whose exposure is longer than `SHARP_US`, in the mean; else one.
EXPOSED, SHARP_US = 20, 2_000
#: Seconds of one calibration, and for each event between the pairs of keys it looks at.
CALIBRATION_S, EVENT_S, PAIRS = 3.0, 2.3e-6, 13
#: Bytes a pixel of a 16-bit still and of the clip.
STILL_BYTES, CLIP_BYTES = 2.0, {"h264": 0.15, "ffv1": 1.5, "none": 0.0}


@dataclass(frozen=True)
class Findings:
    """What a check found.

    Parameters
    ----------
    facts, warnings, mistakes : tuple of str
        What is there; what the user should know; what would make the job fail.
    pictures : int
        Planned.
    seconds : float
        Predicted duration.
    bytes : int
        Predicted size of the outputs.
    """

    facts: tuple[str, ...]
    warnings: tuple[str, ...]
    mistakes: tuple[str, ...]
    pictures: int
    seconds: float
    bytes: int


def check(settings: ClipSettings) -> Findings:
    """Look a job over without working on it or writing anything.

    Parameters
    ----------
    settings : ClipSettings

    Returns
    -------
    Findings
    """
    try:
        with opened(settings) as recording:
            return _look(recording, settings)
    except JobError as error:
        return Findings((), (), error.mistakes or (str(error),), 0, 0.0, 0)
    except EnhanceError as error:
        return Findings((), (), (str(error),), 0, 0.0, 0)


def _look(recording: Recording, settings: ClipSettings) -> Findings:
    frames = recording.frames
    rig = known_rig(recording, settings.rig)
    # a row time that is to be estimated moves all times alike
    timed = frames_in_row_time(frames, rig.row_time_us.value)
    times = [middle_us(start, end) for start, end in zip(timed.start_us, timed.end_us, strict=True)]
    plan = make_plan(settings, times)
    mistakes, warnings = _overlap(recording, rig)
    warnings += [*frames.notes, *light_remarks(frames), *recording.events.notes, *plan.remarks]
    if rig.row_time_us.value is None:
        warnings.append(
            "the row time of the rolling shutter will be estimated from what moves in several bands of rows"
        )
    if len(frames) == 1:
        warnings.append("one frame only: no clip is made")
    if settings.slow_motion is None and not settings.output.times_us and settings.output.stills == "none":
        warnings.append("no clip ([slow_motion] is left out) and no stills are asked for: only the tables are made")
    if settings.hold_out >= len(frames):
        warnings.append(f"measure.hold_out = {settings.hold_out} leaves no frame between keys: no figures are made")
    if not mistakes:
        from enhance.clip.passes import load_fusion, load_shipped_trust

        try:
            load_fusion(settings)
            load_shipped_trust()
        except EnhanceError as error:
            mistakes.append(str(error))
    pictures = len(plan.pictures)
    seconds, size = _cost(recording, settings, pictures)
    facts = [*_facts(recording), f"{pictures} pictures planned, about {max(size / 1e6, 0.1):.1f} MB of outputs"]
    return Findings(tuple(facts), tuple(warnings), tuple(mistakes), pictures, seconds, size)


def _facts(recording: Recording) -> Iterator[str]:
    frames, events = recording.frames, recording.events
    height, width = frames.shape[:2]
    colour = "colour" if len(frames.shape) == 3 else "grey"
    exposure = (frames.end_us - frames.start_us) / 1000
    low, high = float(exposure.min()), float(exposure.max())
    spread = f"{low:.3f} ms" if low == high else f"{low:.3f} to {high:.3f} ms"
    length = (int(frames.end_us[-1]) - int(frames.start_us[0])) / 1e6
    rate = f", {1e6 / float(np.median(np.diff(frames.start_us))):.3f} a second" if len(frames) > 1 else ""
    yield f"frames: {len(frames)} of {width} x {height}, {colour}{rate}, {length:.3f} s, exposure {spread}"
    seconds = (events.cover_end_us - events.cover_start_us) / 1e6
    yield (
        f"events: {events.count} of {events.size[0]} x {events.size[1]} in {seconds:.3f} s, "
        f"{events.count / max(seconds, 1e-6) / 1e6:.3f} million a second"
    )


def _overlap(recording: Recording, rig: Rig) -> tuple[list[str], list[str]]:
    """Say whether frames and events meet, where the clock is known; what will be searched, where it is not."""
    frames, raw = recording.frames, recording.events
    first, last = int(frames.start_us[0]), int(frames.end_us[-1])
    events = events_on_frames(recording, rig)
    if events is None:
        if raw.cover_start_us < last and first < raw.cover_end_us:
            return [], []
        return [], ["the clocks' epochs do not overlap: the starts will be matched first, then searched around"]
    if events.cover_end_us <= first or last <= events.cover_start_us:
        return [
            f"events and frames do not overlap: events run from {events.cover_start_us} to {events.cover_end_us} us, "
            f'frames from {first} to {last} us; check events.time_unit and frames.times, or set rig.clock = "estimate"'
        ], []
    # as `Keys.covered` does
    slack = (frames.end_us - frames.start_us) // SLACK
    inside = (frames.start_us + slack >= events.cover_start_us) & (frames.end_us - slack <= events.cover_end_us)
    left = int((~inside).sum())
    if left:
        return [], [f"events do not cover the whole exposure of {left} of {len(frames)} frames; these stay as captured"]
    return [], []


def _cost(recording: Recording, settings: ClipSettings, pictures: int) -> tuple[float, int]:
    """Predict seconds and bytes."""
    frames = recording.frames
    pixels = frames.shape[0] * frames.shape[1]
    colours = frames.shape[2] if len(frames.shape) == 3 else 1
    keys = len(frames)
    each = BLENDED_S if settings.network == "off" else FUSED_S
    looked_at = recording.events.count * min(1.0, PAIRS / max(keys - 1, 1))
    calibration = CALIBRATION_S + EVENT_S * looked_at
    seconds = calibration + pixels * (KEY_S * keys + each * max(pictures - keys, 0))
    if settings.hold_out:
        held = keys - len(range(0, keys, settings.hold_out))
        blurred = float(np.median(frames.end_us - frames.start_us)) > SHARP_US
        seconds += calibration + held * pixels * (JUDGED_S + each * (EXPOSED if blurred else 1))
    stills = {"none": 0, "deblurred": min(keys, pictures), "all": pictures}[settings.output.stills]
    per_pixel = colours * (stills * STILL_BYTES + pictures * CLIP_BYTES[settings.output.video])
    per_pixel += stills * STILL_BYTES * settings.output.trust
    return seconds, int(pixels * per_pixel) + 1_000_000
