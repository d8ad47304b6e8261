"""Steps of brightness from frame to frame that no event saw: gain or exposure that the camera changed by itself.

A gain changes every pixel of a frame by one factor, and no event fires for it. So two neighbouring frames are compared
where no event fired from the start of the one to the end of the other: the factor is a robust ratio of their light
there. It counts as a step of brightness only where it is well above what neighbouring frames differ by anyway, and
where the parts of the picture agree on it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from enhance.calibrate.clipped import USABLE_LIGHT, ClippedCount, tells_light
from enhance.kernels.double_integral import log_blur_ratio
from enhance.kernels.event_integral import event_counts
from enhance.light import Image, luma
from enhance.recording import Contrast, EventSource, Frame, FrameSource
from enhance.rig import Quantity

METHOD = "light of neighbouring frames where no event fired"
#: Frames whose median light differs by less (natural log) are not looked at any closer.
SCREEN = 0.01
#: Steps below are left alone: they cost less than a wrong correction would.
LEAST_STEP = 0.02
#: Parts of the picture, rows and columns, pixels each needs, and the least number and share that must agree with the
#: whole, within a part of the step or this much.
PARTS, PART_PIXELS, LEAST_PARTS, AGREEING, APART, APART_SHARE = 4, 40, 3, 0.7, 0.01, 0.2
#: Quiet pixels that are needed; where they are fewer, all pixels count, less what their events explain. Of the quiet
#: ones this share counts that is flattest: an edge creeps by up to a threshold without any event.
LEAST_QUIET, FLATTEST = 400, 0.3
#: Pixels kept away from any event, the more the better: light creeps beside an edge that fires.
MARGINS = (21, 11, 3)
#: Frames further apart are not compared: light may have changed by itself.
LONGEST_US = 2_000_000
#: Log ratios are cut at so many robust deviations before light is summed.
CUT, ROUNDS = 3.0, 3


@dataclass(frozen=True)
class Step:
    """A step of log brightness from one frame to the next, the parts' scatter, and how many parts tell."""

    size: float
    scatter: float
    parts: int


def find_gain(
    frames: FrameSource, keys: Sequence[int], events: EventSource | None, contrast: Contrast | None
) -> tuple[NDArray[np.float64], Quantity, ClippedCount]:
    """Find by how much each frame is brighter than it should be.

    Parameters
    ----------
    frames : FrameSource
        Brought to one exposure by their table already.
    keys : sequence of int
        Frames that may be looked at. The others' own scale is told from the key before them, for whoever compares with
        them; no key's scale depends on them.
    events : EventSource or None
        In the frames' clock and on their pixels; without a clock nothing can be told.
    contrast : Contrast or None
        Known where the events' clock is.

    Returns
    -------
    scale : ndarray of float64, shape (K,)
        Of every frame of `frames`; all 1 where no step was found.
    quantity : Quantity
        Value: list of [frame, factor] where the brightness steps, empty for none; None where it cannot be told.
    clipped : ClippedCount
        Of the keys.
    """
    scale, clipped = np.ones(len(frames)), ClippedCount()
    level = np.zeros(len(frames))
    found: list[tuple[int, Step]] = []
    allowed = set(keys)
    before: tuple[int, Frame] | None = None
    for index in range(len(frames)):
        frame = frames.frame(index)
        step = None
        if before is not None and events is not None and contrast is not None:
            step = _step(before[1], frame, events, contrast)
        if before is not None:
            level[index] = level[before[0]] + (step.size if step else 0.0)
        if index in allowed:
            clipped.add(frame)
            before = (index, frame)
            found += [(index, step)] if step else []
    if events is None:
        return scale, Quantity(None, None, METHOD, "the clock of the events is not known"), clipped
    if not found:
        return (
            scale,
            Quantity([], None, METHOD, f"no step of {LEAST_STEP:.0%} or more in {clipped.frames} frames"),
            clipped,
        )
    # the brightness of a frame in the middle: so most frames stay about as they are
    order = np.asarray(sorted(keys, key=lambda k: (level[k], k)))
    scale = np.exp(level - level[order[(len(order) - 1) // 2]])
    steps = [[index, round(float(np.exp(step.size)), 5)] for index, step in found]
    uncertainty = float(np.median([step.scatter for _, step in found]))
    evidence = f"{len(found)} steps in {clipped.frames} frames, {min(s.parts for _, s in found)} or more parts agree"
    return scale, Quantity(steps, uncertainty, METHOD, evidence), clipped


def _step(one: Frame, two: Frame, events: EventSource, contrast: Contrast) -> Step | None:
    """Step of log brightness between two frames; None where there is none, or none that can be told."""
    if two.end_us - one.start_us > LONGEST_US:
        return None
    usable = tells_light(one) & tells_light(two)
    if not usable.any():
        return None
    ratio = np.zeros(usable.shape)
    first, second = luma(one.image)[usable], luma(two.image)[usable]
    ratio[usable] = np.log(second.astype(np.float64)) - np.log(first)
    if abs(np.median(ratio[usable])) < SCREEN:
        return None
    step = _measured(one, two, ratio, usable, events, contrast)
    return step if step and abs(step.size) >= max(LEAST_STEP, CUT * step.scatter) else None


def _measured(
    one: Frame,
    two: Frame,
    ratio: NDArray[np.float64],
    usable: NDArray[np.bool_],
    events: EventSource,
    contrast: Contrast,
) -> Step | None:
    margin = contrast.ramp_us
    seen = events.between(one.start_us - margin, two.end_us + 2 * margin)
    shape = usable.shape
    fired = event_counts(seen.x, seen.y, seen.polarity, shape).sum(axis=0) > 0
    quiet = _quiet(usable, fired)
    if quiet.sum() >= LEAST_QUIET:
        slope = _slope(luma(one.image)) + _slope(luma(two.image))
        parts = _parts(ratio, quiet, slope)
        if len(parts) >= LEAST_PARTS:
            return _agreed(parts)
    middle = one.time_us
    explained = [log_blur_ratio(seen, f.start_us, f.end_us, middle, contrast, shape) for f in (one, two)]
    return _agreed(_parts(ratio - (explained[1] - explained[0]), usable, np.zeros_like(ratio)))


def _quiet(usable: NDArray[np.bool_], fired: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Find usable pixels as far from any event as enough of them are."""
    import cv2

    quiet = usable
    for margin in MARGINS:
        quiet = usable & (cv2.dilate(fired.astype(np.uint8), np.ones((margin, margin), np.uint8)) == 0)
        if quiet.sum() >= max(LEAST_QUIET, usable.sum() // 20):
            break
    return quiet


def _slope(light: Image) -> Image:
    """Slope of light around each pixel, relative to it."""
    import cv2

    smooth = cv2.GaussianBlur(light, (0, 0), 1.5)
    across, down = cv2.Sobel(smooth, cv2.CV_32F, 1, 0), cv2.Sobel(smooth, cv2.CV_32F, 0, 1)
    return np.asarray(np.hypot(across, down) / np.maximum(smooth, USABLE_LIGHT[0]), np.float32)


def _parts(ratio: NDArray[np.float64], chosen: NDArray[np.bool_], slope: NDArray[np.floating]) -> NDArray[np.float64]:
    """Robust mean, and number, of the flattest chosen pixels of each part that has enough of them, shape (parts, 2)."""
    height, width = ratio.shape
    parts = []
    for rows in np.array_split(np.arange(height), PARTS):
        for columns in np.array_split(np.arange(width), PARTS):
            part = slice(rows[0], rows[-1] + 1), slice(columns[0], columns[-1] + 1)
            values, slopes = ratio[part][chosen[part]], slope[part][chosen[part]]
            if len(values) * FLATTEST >= PART_PIXELS:
                values = values[slopes <= np.quantile(slopes, FLATTEST)]
                parts.append((_centre(values), len(values)))
    return np.array(parts).reshape(-1, 2)


def _agreed(parts: NDArray[np.float64]) -> Step | None:
    """Mean over the parts of a picture, if they agree."""
    if len(parts) < LEAST_PARTS:
        return None
    whole = float(np.average(parts[:, 0], weights=parts[:, 1]))
    away = np.abs(parts[:, 0] - whole)
    if np.mean(away <= max(APART, APART_SHARE * abs(whole))) < AGREEING:
        return None
    return Step(whole, float(1.4826 * np.median(away) / np.sqrt(len(parts))), len(parts))


def _centre(values: NDArray[np.float64]) -> float:
    """Mean of the bulk of some values: a median of few code values would be one of few."""
    centre = float(np.median(values))
    for _ in range(ROUNDS):
        away = np.abs(values - centre)
        reach = CUT * 1.4826 * float(np.median(away)) + 0.01
        centre = float(values[away <= reach].mean())
    return centre
