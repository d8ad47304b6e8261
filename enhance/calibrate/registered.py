"""The rig of two sensors that need not share one view: registration first, then the rest on the sensor's own pixels.

Clock, thresholds and all else are measured with the frames shown on the event sensor's pixels, where both saw the same
light. Registration and clock depend on each other: where neither is known, the first guess of the clock comes from the
activity in both, and the two are then brought to agree, the offset being the one at which the best map fits best.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from enhance.calibrate.evidence import gather_pairs
from enhance.calibrate.frame_noise import estimate_frame_noise
from enhance.calibrate.known_view import NO_LENS, keys_near, on_sensor, view_of
from enhance.calibrate.ramp import estimate_ramp
from enhance.calibrate.registration import METHOD, ChangeMaps, Found, register, register_near
from enhance.calibrate.registration_search import distance
from enhance.calibrate.rig import _events, known_rig
from enhance.calibrate.rig import calibrate as calibrate_matched
from enhance.calibrate.rig_file import as_written
from enhance.errors import CalibrationError
from enhance.light import luma
from enhance.recording import Contrast, Recording
from enhance.rig import Quantity, Rig
from enhance.settings import RigSettings
from enhance.view import Lens, View

#: Thresholds that maps begin with: their scale does not matter, and their ratio little.
START = (0.2, 0.2)
#: How far apart offsets are tried around the measured one when clock and registration are brought to agree.
APART_US = 1_500
#: What an offset that far off must add to the unexplained part, 1 - correlation^2, so that clock and map can be told
#: apart: where all moves one way, each makes up for the other.
LEAST_RISE = 0.05
#: The activity's search: its range, step, the keys looked at and how far they may reach, and when it tells anything.
RANGE_US, BIN_US, KEYS, REACH_US, LEAST_ACTIVITY = 2_000_000, 5_000, 48, 20_000_000, 0.5
#: A first map that fits as well as this needs no other offset.
ENOUGH = 0.7


def calibrate(recording: Recording, keys: Sequence[int], settings: RigSettings) -> Rig:
    """Work out how the two sensors of a recording relate.

    Parameters
    ----------
    recording : Recording
    keys : sequence of int
        Indices of the frames that may be looked at; held-out ones are not among them.
    settings : RigSettings
        What is given; the rest is read from its file or estimated.

    Returns
    -------
    Rig
        A clock that cannot be told has the value None where ``settings.unknown`` is ``frames``.

    Raises
    ------
    CalibrationError
        If the clock, the thresholds or where the sensor looks cannot be told, or the rig file does not fit.
    """
    rig, doubt_us = known_rig(recording, settings), 0
    if settings.registration == "estimate" and rig.registration.value is None:
        try:
            rig, doubt_us = _looked_for(rig, recording, keys, settings)
        except CalibrationError as error:
            return _unknown(rig, recording, settings, error)
    if view_of(rig, recording).shift is not None:
        matched = calibrate_matched(recording, keys, _matched(settings, rig))
        return as_written(_doubted(_with_view(matched, rig), doubt_us))
    seen = on_sensor(recording, view_of(rig, recording))
    measured = _with_view(calibrate_matched(seen, keys, _matched(settings)), rig)
    if measured.offset_us.value is not None and known_rig(recording, settings).frame_noise.value is None:
        measured = replace(measured, frame_noise=_frame_noise(measured, recording, keys))
    return as_written(_doubted(measured, doubt_us))


def _matched(settings: RigSettings, rig: Rig | None = None) -> RigSettings:
    """Give settings for frames that lie on the sensor's pixels already, or by whole pixels beside them."""
    matrix = np.eye(3).tolist() if rig is None else rig.registration.value
    given = "shared" if matrix is None else tuple(tuple(row) for row in matrix)
    return replace(settings, registration=given, frame_lens=None, event_lens=None)


def _doubted(rig: Rig, doubt_us: int) -> Rig:
    """Say of the offset what the map leaves open."""
    if not doubt_us or rig.offset_us.value is None:
        return rig
    uncertainty = float(np.hypot(rig.offset_us.uncertainty or 0.0, doubt_us))
    return replace(rig, offset_us=replace(rig.offset_us, uncertainty=uncertainty))


def _with_view(rig: Rig, known: Rig) -> Rig:
    return replace(rig, registration=known.registration, frame_lens=known.frame_lens, event_lens=known.event_lens)


def _frame_noise(rig: Rig, recording: Recording, keys: Sequence[int]) -> Quantity:
    """Find the frames' noise on their own pixels."""
    events = _events(recording, rig)
    pairs = [p for p in gather_pairs(recording.frames, keys) if events.covers(p.first.start_us, p.second.end_us)]
    frames = recording.frames
    size = (frames.shape[1], frames.shape[0])
    # where the sensor does not look, a pixel without events need not be quiet
    seen = view_of(rig, recording).lookup(recording.events.size, size, frames.crop_origin) >= 0
    pairs = [replace(p, usable=p.usable & seen) for p in pairs]
    return estimate_frame_noise(pairs, events)


def _unknown(rig: Rig, recording: Recording, settings: RigSettings, error: CalibrationError) -> Rig:
    if settings.unknown != "frames" and len(recording.frames) > 1:
        raise CalibrationError(
            f"{recording.title}: where the event sensor looks cannot be told: {error}. Give rig.registration (a matrix "
            f'from event pixels to frame pixels, or "shared"), or set rig.unknown = "frames" to go on with the frames '
            f"alone"
        ) from error
    reason = Quantity(None, None, METHOD, f"where the event sensor looks cannot be told: {error}")
    names = ("contrast_positive", "contrast_negative", "ramp_us", "frame_noise", "hot_pixels")
    left: dict[str, Any] = {name: reason for name in names if getattr(rig, name).value is None}
    return replace(rig, registration=reason, offset_us=reason, **left)


def _looked_for(rig: Rig, recording: Recording, keys: Sequence[int], settings: RigSettings) -> tuple[Rig, int]:
    """Estimate the registration, with the clock where that is not known either; and what it leaves open of that."""
    if rig.offset_us.value is not None:
        maps = _maps(rig, recording, keys, int(rig.offset_us.value))
        return _told(rig, recording, register(maps)), 0
    offsets = [_starts(recording), *_by_activity(recording, keys)]
    found, offset_us = _first(rig, recording, keys, offsets)
    rig = _told(rig, recording, found)
    # The first clock was a guess: both are brought to agree, first by turns, then along the line on which the one
    # makes up for the other.
    seen = on_sensor(recording, view_of(rig, recording))
    measured = calibrate_matched(seen, keys, _matched(settings))
    if measured.offset_us.value is None:
        raise CalibrationError(f"the clock cannot be told: {measured.offset_us.evidence}")
    maps = _maps(_with_view(measured, rig), recording, keys, int(measured.offset_us.value))
    inner = _on_crop(rig, recording, -1) @ np.asarray(rig.registration.value)
    tried = {late: register_near(maps, inner, late) for late in (-APART_US, 0, APART_US)}
    below, at, above = (tried[late].correlation for late in (-APART_US, 0, APART_US))
    bend = below - 2 * at + above
    late = round(float(np.clip(APART_US * 0.5 * (below - above) / bend, -APART_US, APART_US))) if bend < 0 else 0
    found = register_near(maps, tried[0].matrix, late)
    rise = (1 - (below**2 + above**2) / 2) / max(1 - at**2, 1e-9) - 1
    if rise > LEAST_RISE:
        return _told(rig, recording, found), 0
    apart = distance(tried[-APART_US].matrix, tried[APART_US].matrix, recording.events.size[::-1])
    doubt = apart / 2 / View(found.matrix).pitch(recording.events.size)
    found = replace(found, uncertainty_px=float(np.hypot(found.uncertainty_px or 0.0, doubt)))
    remark = f"; all moves one way: an offset {APART_US / 1000:g} ms off is made up for by the map"
    rig = _told(rig, recording, found)
    return replace(rig, registration=replace(rig.registration, evidence=rig.registration.evidence + remark)), APART_US


def _first(rig: Rig, recording: Recording, keys: Sequence[int], offsets: Sequence[int]) -> tuple[Found, int]:
    """Register with each guess of the clock until one fits well."""
    best: tuple[Found, int] | None = None
    reason: CalibrationError | None = None
    for offset_us in offsets:
        try:
            found = register(_maps(rig, recording, keys, offset_us))
        except CalibrationError as error:
            reason = reason or error
            continue
        if best is None or found.correlation > best[0].correlation:
            best = found, offset_us
        if found.correlation > ENOUGH:
            break
    if best is None:
        raise reason or CalibrationError("there is no guess of the clock to begin with")
    return best


def _maps(rig: Rig, recording: Recording, keys: Sequence[int], offset_us: int) -> ChangeMaps:
    in_place = Quantity(np.eye(3).tolist())
    alone = replace(rig, offset_us=Quantity(offset_us), registration=in_place, frame_lens=NO_LENS, event_lens=NO_LENS)
    events = _events(on_sensor(recording, View(np.eye(3))), alone)
    pairs = [p for p in gather_pairs(recording.frames, keys) if events.covers(p.first.start_us, p.second.end_us)]
    if not pairs:
        raise CalibrationError("no two successive keys that the events cover")
    on_pixels = [replace(pair, change=np.zeros(events.size[::-1])) for pair in pairs]
    ramp_us = rig.ramp_us.value if rig.ramp_us.value is not None else estimate_ramp(on_pixels, events).value
    positive, negative = rig.contrast_positive.value or START[0], rig.contrast_negative.value or START[1]
    contrast = Contrast(float(positive), float(negative), int(ramp_us or 0))
    view = replace(rig, registration=in_place).view
    assert view is not None
    x, y = recording.frames.crop_origin
    lens = view.frame_lens
    if lens is not None:
        lens = Lens(lens.focal, (lens.centre[0] - x, lens.centre[1] - y), lens.distortion)
    return ChangeMaps(pairs, events, contrast, lens, view.event_lens)


def _on_crop(rig: Rig, recording: Recording, sign: int) -> np.ndarray:
    """Pixel of the crop to pixel of the whole frame; the other way round for -1."""
    x, y = (sign * c for c in recording.frames.crop_origin)
    return np.array([[1.0, 0.0, x], [0.0, 1.0, y], [0.0, 0.0, 1.0]])


def _told(rig: Rig, recording: Recording, found: Found) -> Rig:
    matrix = _on_crop(rig, recording, 1) @ found.matrix
    evidence = f"correlation {found.correlation:.3f} over {found.intervals} pairs of keys"
    value = (matrix / matrix[2, 2]).tolist()
    return replace(rig, registration=Quantity(value, found.uncertainty_px, METHOD, evidence))


def _starts(recording: Recording) -> int:
    """Offset to begin with: 0, or the one that matches the starts where the clocks do not meet at all."""
    frames, events = recording.frames, recording.events
    first, last = int(frames.start_us[0]), int(frames.end_us[-1])
    meet = events.cover_start_us < last and first < events.cover_end_us
    return 0 if meet else first - events.cover_start_us


def _by_activity(recording: Recording, keys: Sequence[int]) -> list[int]:
    """Offsets at which the events' rate and the frames' change rise and fall together, the best first."""
    near = keys_near(recording.frames, keys, KEYS, REACH_US)
    frames = [recording.frames.frame(k) for k in near]
    if len(frames) < 6:
        return []
    times = np.array([f.time_us for f in frames])
    logs = [np.log(np.maximum(luma(f.image), 0.02)) for f in frames]
    change = np.array([float(np.abs(b - a).mean()) for a, b in zip(logs[:-1], logs[1:], strict=True)])
    guess = _starts(recording)
    edges = np.arange(int(times[0]) - guess - RANGE_US, int(times[-1]) - guess + RANGE_US + BIN_US, BIN_US)
    counts = [recording.events.count_between(int(a), int(b)) for a, b in zip(edges[:-1], edges[1:], strict=True)]
    total = np.concatenate([[0], np.cumsum(counts)]).astype(np.float64)
    offsets = guess + np.arange(-RANGE_US, RANGE_US + 1, BIN_US)
    seen = np.stack([np.diff(np.interp(times - offset, edges, total)) for offset in offsets])
    lively = (seen > 0).mean(axis=1) > 0.8
    one = seen - seen.mean(axis=1, keepdims=True)
    two = change - change.mean()
    bottom = np.sqrt((one**2).sum(axis=1) * (two**2).sum())
    value = np.where(lively, (one @ two) / np.maximum(bottom, 1e-9), -1.0)
    peaks = [int(k) for k in np.argsort(-value)[:1] if value[k] > LEAST_ACTIVITY]
    return [int(offsets[k]) for k in peaks]
