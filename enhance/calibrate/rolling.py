"""A rolling shutter in calibration: its row time given, read or estimated, and all that follows done in row time."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np

from enhance.calibrate.clock import coarse_offset
from enhance.calibrate.contrast import START
from enhance.calibrate.evidence import gather_pairs
from enhance.calibrate.ramp import estimate_ramp
from enhance.calibrate.row_time import METHOD, estimate_row_time
from enhance.errors import CalibrationError
from enhance.recording import Contrast, EventSource, FrameSource, Recording
from enhance.rig import Quantity, Rig
from enhance.rows import frames_in_row_time
from enhance.settings import RigSettings

#: Times are rounded, and a frame rate is nominal: a readout may be longer than from a frame to the next by this part.
SLACK = 0.02


def known_row_time(rig: Rig, recording: Recording, settings: RigSettings) -> Rig:
    """Put the row time into a rig: what is given, else what the rig file says; None where it is to be estimated.

    Parameters
    ----------
    rig : Rig
        With the rig file's values.
    recording : Recording
    settings : RigSettings

    Returns
    -------
    Rig

    Raises
    ------
    CalibrationError
        If the readout takes longer than from a frame to the next.
    """
    if settings.row_time_us is not None:
        method = "given" if settings.row_time_us else "assumed"
        rig = replace(rig, row_time_us=Quantity(settings.row_time_us, None, method, _said(settings.row_time_us)))
    elif rig.row_time_us.method != "rig file":
        rig = replace(rig, row_time_us=Quantity(None, None, "not measured", ""))
    row_time = rig.row_time_us.value
    longest = _longest_us(recording.frames)
    readout = abs(row_time or 0.0) * (recording.frames.full_size[1] - 1)
    if longest is not None and readout > longest * (1 + SLACK):
        where = "rig.file" if rig.row_time_us.method == "rig file" else "frames.row_time"
        raise CalibrationError(
            f"{recording.title}: {where}: with {row_time:g} us from row to row, {recording.frames.full_size[1]} rows "
            f"take {readout / 1000:.1f} ms to read, longer than from a frame to the next ({longest / 1000:.1f} ms). "
            f'Check its unit, or measure it: frames.row_time = "estimate"'
        )
    return rig


def _said(row_time_us: float) -> str:
    return "" if row_time_us else "a global shutter"


def in_known_row_time(
    rig: Rig,
    recording: Recording,
    keys: Sequence[int],
    settings: RigSettings,
    events_by: Callable[[Recording, Rig], EventSource],
    guess_us: int,
) -> tuple[Rig, Recording]:
    """Estimate the row time where it is not known, and give the recording with its frames in row time.

    Parameters
    ----------
    rig : Rig
    recording : Recording
    keys : sequence of int
        Frames that may be looked at.
    settings : RigSettings
    events_by : callable
        Makes the events on the frames of a recording and a rig.
    guess_us : int
        Offset to search around where the clock is not known.

    Returns
    -------
    rig : Rig
        Where the row time cannot be told and ``settings.unknown`` is ``frames``, neither it nor the clock is known.
    recording : Recording

    Raises
    ------
    CalibrationError
        If the row time cannot be told.
    """
    if rig.row_time_us.value is None:
        told = _estimate(rig, recording, keys, events_by, guess_us)
        rig = replace(rig, row_time_us=told)
        if told.value is None:
            if settings.unknown != "frames" and len(recording.frames) > 1:
                raise CalibrationError(
                    f"{recording.title}: the row time of the rolling shutter cannot be told: {told.evidence}. Give "
                    f'frames.row_time, or set rig.unknown = "frames" to go on with the frames alone'
                )
            reason = f"the row time of the rolling shutter cannot be told: {told.evidence}"
            rig = replace(rig, offset_us=Quantity(None, None, METHOD, reason))
    return rig, replace(recording, frames=frames_in_row_time(recording.frames, rig.row_time_us.value))


def _estimate(
    rig: Rig,
    recording: Recording,
    keys: Sequence[int],
    events_by: Callable[[Recording, Rig], EventSource],
    guess_us: int,
) -> Quantity:
    pairs = gather_pairs(recording.frames, keys)
    longest = _longest_us(recording.frames)
    if longest is None:
        return Quantity(None, None, METHOD, "one frame alone shows no motion")
    if rig.offset_us.value is None:
        rig = replace(rig, offset_us=Quantity(guess_us))
        try:
            peak = coarse_offset(pairs, events_by(recording, rig))
        except CalibrationError as error:
            return Quantity(None, None, METHOD, str(error))
        rig = replace(rig, offset_us=Quantity(guess_us + peak.offset_us))
    events = events_by(recording, rig)
    ramp_us = estimate_ramp(pairs, events).value if rig.ramp_us.value is None else rig.ramp_us.value
    known = (rig.contrast_positive.value, rig.contrast_negative.value)
    positive, negative = (value or start for value, start in zip(known, START, strict=True))
    contrast = Contrast(float(positive), float(negative), int(ramp_us))
    return estimate_row_time(pairs, events, contrast, longest, recording.frames.full_size[1])


def _longest_us(frames: FrameSource) -> int | None:
    """Shortest time from a frame to the next: a readout is no longer; None for one frame."""
    return int(np.diff(frames.start_us).min()) if len(frames) > 1 else None
