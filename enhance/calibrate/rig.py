"""The rig of one recording: what is given, else what a rig file says, else what the recording itself tells."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from enhance.calibrate.clock import METHOD, MODEL_ERROR, coarse_offset, refine_offset
from enhance.calibrate.contrast import START, estimate_contrast
from enhance.calibrate.drift import (
    LONG_US,
    STRETCHES,
    drift_quantity,
    find_stretch,
    fit_line,
    span_us,
    stretches,
    too_short,
    track,
)
from enhance.calibrate.even_light import lamp_told
from enhance.calibrate.evidence import Pair, gather_pairs
from enhance.calibrate.frame_noise import estimate_frame_noise
from enhance.calibrate.hot_pixels import find_dead_pixels, find_hot_pixels
from enhance.calibrate.known_view import known_view
from enhance.calibrate.lost import find_lost
from enhance.calibrate.ramp import estimate_ramp
from enhance.calibrate.rig_file import as_written, read_rig
from enhance.calibrate.rolling import in_known_row_time, known_row_time
from enhance.calibrate.steady import flicker_of, in_steady_light
from enhance.calibrate.time_marks import check_clock, edge_of_offset
from enhance.calibrate.triggers import clock_from_triggers
from enhance.errors import CalibrationError
from enhance.recording import Contrast, Recording
from enhance.rig import Quantity, Rig, RiggedEvents
from enhance.rows import FrameEvents, events_in_row_time
from enhance.settings import RigSettings

#: How far the offset is sought around the one before, each time with better thresholds.
REACHES_US = (8_000, 2_000, 1_000)

UNKNOWN = Quantity(None, None, "not measured", "")


def calibrate(recording: Recording, keys: Sequence[int], settings: RigSettings) -> Rig:
    """Work out how the two sensors of a recording relate whose pixels lie on each other.

    Parameters, result and errors are those of `enhance.calibrate.registered.calibrate`, which brings the two there.
    """
    rig = known_rig(recording, settings)
    if rig.flicker_hz.value is None:
        rig = replace(rig, flicker_hz=flicker_of(recording.events))
    # of this very recording, whatever a rig file says
    rig = replace(rig, lost=find_lost(recording.events))
    recording = replace(recording, events=in_steady_light(recording.events, rig))
    if rig.dead_pixels.value is None:
        rig = replace(rig, dead_pixels=find_dead_pixels(recording.events))
    if rig.hot_pixels.value is None:
        rig = replace(rig, hot_pixels=find_hot_pixels(recording.events))
    rig, recording = in_known_row_time(rig, recording, keys, settings, _events, _first_guess(recording)[0])
    if rig.row_time_us.value is None:
        return as_written(_without_clock(rig))
    pairs = _covered(gather_pairs(recording.frames, keys), recording, rig)
    given = rig.offset_us.value is not None
    rig = _with_clock(rig, recording, pairs, keys, settings)
    if rig.offset_us.value is None:
        return _without_clock(rig)
    if rig.contrast_positive.value is None or rig.contrast_negative.value is None:
        rig = _with_contrast(rig, recording, pairs)
    if given:
        rig = replace(rig, clock_check=check_clock(pairs, _events(recording, rig), rig.contrast))
    if rig.frame_noise.value is None:
        # Where the sensor did not record, a pixel without events need not be quiet.
        told = estimate_frame_noise(_covered(pairs, recording, rig), _events(recording, rig))
        rig = replace(rig, frame_noise=told)
    return as_written(lamp_told(rig, recording.frames, keys, _placed(recording, rig)))


def known_rig(recording: Recording, settings: RigSettings) -> Rig:
    """Gather what is known before anything is measured: given values first, then the rig file's.

    Parameters
    ----------
    recording : Recording
    settings : RigSettings

    Returns
    -------
    Rig
        Values that must be estimated are None.

    Raises
    ------
    CalibrationError
        If the rig file cannot be read or does not fit.
    """
    size = recording.events.size
    rig = Rig(UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN, size, dead_pixels=UNKNOWN)
    if settings.file is not None:
        rig = read_rig(settings.file, size)
    if settings.contrast is not None:
        rig = replace(
            rig, contrast_positive=Quantity(settings.contrast[0]), contrast_negative=Quantity(settings.contrast[1])
        )
    if recording.triggers is not None:
        offset, drift = clock_from_triggers(recording.triggers, recording.frames, recording.events.first_us)
        rig = replace(rig, offset_us=offset, drift_ppm=drift)
    if settings.offset_us is not None:
        rig = replace(rig, offset_us=Quantity(settings.offset_us))
    if settings.drift_ppm is not None:
        rig = replace(rig, drift_ppm=Quantity(settings.drift_ppm))
    if rig.drift_ppm.value is None:
        rig = replace(rig, drift_ppm=Quantity(0.0, None, "assumed", "not looked for: the offset is given without it"))
    return known_row_time(known_view(rig, recording, settings), recording, settings)


def _events(recording: Recording, rig: Rig) -> FrameEvents:
    return events_in_row_time(_placed(recording, rig), rig.row_time_us.value, recording.frames.shape[0])


def _placed(recording: Recording, rig: Rig) -> RiggedEvents:
    frames = recording.frames
    height, width = frames.shape[:2]
    events = in_steady_light(recording.events, rig)
    return RiggedEvents(events, rig, (width, height), frames.crop_origin, frames.full_size)


def _covered(pairs: list[Pair], recording: Recording, rig: Rig) -> list[Pair]:
    """Keep the pairs during which the sensor was recording, where the clock is known; all of them where it is not."""
    if rig.offset_us.value is None:
        return pairs
    events = _events(recording, rig)
    return [pair for pair in pairs if events.covers(pair.first.start_us, pair.second.end_us)]


def _with_clock(rig: Rig, recording: Recording, pairs: list[Pair], keys: Sequence[int], settings: RigSettings) -> Rig:
    if rig.offset_us.value is not None:
        return _with_ramp(rig, recording, pairs)
    guess, how = _first_guess(recording)
    events = _events(recording, replace(rig, offset_us=Quantity(guess)))
    drifts = rig.drift_ppm.method == "assumed"
    try:
        if drifts and span_us(recording.frames, keys) >= LONG_US:
            parts, number, pairs, peak = find_stretch(recording.frames, keys, events)
        else:
            peak, parts = coarse_offset(pairs, events), []
    except CalibrationError as error:
        unknown = Quantity(None, None, METHOD, str(error))
        # One frame makes no clip; as it was captured it is still worth a picture.
        if settings.unknown == "frames" or len(recording.frames) == 1:
            return replace(rig, offset_us=unknown)
        raise CalibrationError(
            f"{recording.title}: the clock of the events cannot be told: {error}. Give rig.clock "
            f'(an offset, or "shared"), or set rig.unknown = "frames" to go on with the frames alone'
        ) from error
    rig = _refined(rig, recording, pairs, guess + peak.offset_us, how + peak.remark)
    if not drifts:
        return rig
    span = span_us(recording.frames, keys)
    short = too_short(span)
    if short is not None:
        return replace(rig, drift_ppm=short)
    if not parts:
        parts, number = list(stretches(recording.frames, keys)), STRETCHES // 2
    return _with_drift(rig, recording, parts, number, _contrast(rig, recording, pairs))


def _with_drift(rig: Rig, recording: Recording, parts: list[Sequence[int]], number: int, contrast: Contrast) -> Rig:
    """Find the drift, and with it the offset at the first event; neither is touched where no drift shows."""
    frames = recording.frames
    span = span_us(frames, [key for part in parts for key in part])

    def events_at(offset_us: int) -> FrameEvents:
        return _events(recording, replace(rig, offset_us=Quantity(offset_us)))

    marks = track(frames, parts, (number, int(rig.offset_us.value)), events_at, contrast)
    line = fit_line(marks, recording.events.first_us)
    drift = drift_quantity(line, span)
    rig = replace(rig, drift_ppm=drift)
    if line is None or (drift.value == 0.0 and span < LONG_US):
        return rig
    # Of a long recording one stretch alone was looked at so far: all of them together say more, drift or none.
    offset = line.at_first_us if drift.value else line.middle_us
    uncertainty = float(np.hypot(line.sigma_us, MODEL_ERROR * contrast.ramp_us))
    evidence = f"{rig.offset_us.evidence}; {drift.evidence}; the uncertainty is that at the worse end"
    return replace(rig, offset_us=Quantity(round(offset), uncertainty, METHOD, evidence))


def _with_ramp(rig: Rig, recording: Recording, pairs: list[Pair]) -> Rig:
    if rig.ramp_us.value is not None:
        return rig
    return replace(rig, ramp_us=estimate_ramp(pairs, _events(recording, rig)))


def _refined(rig: Rig, recording: Recording, pairs: list[Pair], first_us: int, remark: str) -> Rig:
    """Bring clock, thresholds and ramp to agree, each with the best of the others so far."""
    rig = replace(rig, offset_us=Quantity(first_us))
    # A pair that the sensor did not see all of would pull the offset towards where it did.
    pairs = _covered(pairs, recording, rig) or pairs
    rig = _with_ramp(rig, recording, pairs)
    contrast = Contrast(*START, int(rig.ramp_us.value))
    found: tuple[int, float | None, float] = (0, None, 0.0)
    for reach in REACHES_US:
        found = refine_offset(pairs, _events(recording, rig), 0, reach, contrast)
        rig = replace(rig, offset_us=Quantity(rig.offset_us.value + found[0]))
        contrast = _contrast(rig, recording, pairs)
    _, uncertainty, correlation = found
    evidence = f"{remark}correlation {correlation:.3f} over {len(pairs)} pairs of keys"
    offset = Quantity(rig.offset_us.value, uncertainty, METHOD, evidence)
    edge = edge_of_offset(offset, int(np.median([pair.first.exposure_us for pair in pairs])))
    return replace(rig, offset_us=replace(offset, evidence=f"{evidence}; {edge}") if edge else offset)


def _contrast(rig: Rig, recording: Recording, pairs: list[Pair]) -> Contrast:
    """Thresholds as far as they are known or can be told with this clock, for the search of the clock itself."""
    ramp_us = int(rig.ramp_us.value)
    found = [value and value / rig.parts for value in (rig.contrast_positive.value, rig.contrast_negative.value)]
    if None in found:
        told = estimate_contrast(_covered(pairs, recording, rig), _events(recording, rig), ramp_us)
        found = [known or q.value or s for known, q, s in zip(found, told, START, strict=True)]
    return Contrast(float(found[0]), float(found[1]), ramp_us)


def _first_guess(recording: Recording) -> tuple[int, str]:
    """Offset to search around: 0, or the one that matches the starts where the two clocks do not meet at all."""
    frames, events = recording.frames, recording.events
    first, last = int(frames.start_us[0]), int(frames.end_us[-1])
    if events.cover_start_us < last and first < events.cover_end_us:
        return 0, ""
    guess = first - events.cover_start_us
    return guess, f"the clocks' epochs do not overlap: starts matched first ({guess} us), searched around that; "


def _with_contrast(rig: Rig, recording: Recording, pairs: list[Pair]) -> Rig:
    pairs = _covered(pairs, recording, rig)
    positive, negative = estimate_contrast(pairs, _events(recording, rig), int(rig.ramp_us.value or 0))
    found = {"contrast_positive": positive, "contrast_negative": negative}
    for name, quantity in found.items():
        if getattr(rig, name).value is not None:
            continue
        quantity = _of_whole_thresholds(quantity, rig.parts)
        if quantity.value is None:
            quantity = Quantity(
                START[0], None, "assumed", f"cannot be told ({quantity.evidence}); a common value was taken"
            )
        rig = _with(rig, name, quantity)
    return rig


def _of_whole_thresholds(quantity: Quantity, parts: int) -> Quantity:
    if parts == 1 or quantity.value is None:
        return quantity
    uncertainty = None if quantity.uncertainty is None else parts * quantity.uncertainty
    return replace(quantity, value=parts * quantity.value, uncertainty=uncertainty)


def _without_clock(rig: Rig) -> Rig:
    reason = Quantity(None, None, "not measured", "the clock of the events is not known")
    for name in ("contrast_positive", "contrast_negative", "ramp_us", "frame_noise"):
        if getattr(rig, name).value is None:
            rig = _with(rig, name, reason)
    return rig


def _with(rig: Rig, name: str, quantity: Quantity) -> Rig:
    changes: dict[str, Any] = {name: quantity}
    return replace(rig, **changes)
