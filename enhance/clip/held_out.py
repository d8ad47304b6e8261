"""The second pass: keys are every n-th frame only, and the frames between judge the pictures made in their place."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from enhance.clip.pictures import Pictures
from enhance.kernels.optical_flow import flow_between
from enhance.light import Image, Light
from enhance.measure import (
    alternatives,
    ceiling,
    exposure_times,
    moving_mask,
    noise_sigma,
    psnr,
    re_expose,
    row_shares,
    sharpness,
    ssim,
)
from enhance.recording import Frame, Picture

#: Moving pixels: around any event from this long before a span to this long after it, microseconds.
BEFORE_US, AFTER_US = 10_000, 20_000
#: Pictures made inside one exposure at the most: beyond it their average no longer changes.
MOST_EXPOSED = 64
#: Columns of held-out.csv.
COLUMNS = (
    "time_us",
    "psnr",
    "ssim",
    "psnr_moving",
    "ssim_moving",
    "ceiling",
    "nearest",
    "blend",
    "flow",
    "nearest_moving",
    "blend_moving",
    "flow_moving",
    "moving_share",
    "re_exposed",
    "sharpness",
    "sharpness_captured",
    "expected_psnr",
    "expected_psnr_moving",
)


@dataclass(frozen=True)
class Judged:
    """A picture made in place of a held-out frame, and its figures by the names of `COLUMNS`."""

    picture: Picture
    figures: dict[str, Any]


def judge(pictures: Pictures, index: int) -> Judged:
    """Make the picture of a held-out frame and compare it with the frame as it was captured.

    A captured frame is an average over its exposure, so pictures made inside that exposure are averaged likewise.

    Parameters
    ----------
    pictures : Pictures
        Of the pass; `index` is none of its keys.
    index : int
        The held-out frame.

    Returns
    -------
    Judged
    """
    keys, light = pictures.keys, pictures.keys.frames.light
    held = keys.frames.frame(index)
    key = max(k for k, i in enumerate(keys.indices) if i < index)
    left, right = (keys.frames.frame(keys.indices[k]).image for k in (key, key + 1))
    sharp = pictures.at(held.time_us)
    times = _instants(pictures, key, held, sharp.image)
    shares = row_shares(times, held.start_us, held.end_us, keys.delays_us) if keys.rolling else None
    made = re_expose((pictures.at(t).image for t in times), shares)
    moving = _moving(pictures, key)
    plain = alternatives(left, right, keys.times_us[key], keys.times_us[key + 1], held.time_us)
    reference = light.to_codes(held.image)
    compare = _comparison(reference, light, moving)
    figures: dict[str, Any] = {"time_us": held.time_us}
    figures["psnr"], figures["psnr_moving"] = compare(made)
    codes = _codes(made, light)
    figures["ssim"] = ssim(reference, codes, light.full_scale)
    figures["ssim_moving"] = None if moving is None else ssim(reference, codes, light.full_scale, moving)
    for name in ("nearest", "blend", "flow"):
        figures[name], figures[f"{name}_moving"] = compare(plain[name])
    still = None if moving is None else ~moving
    sigma = noise_sigma(reference, light.to_codes(left), still, light.full_scale)
    figures["ceiling"] = None if sigma is None else ceiling(sigma, light.full_scale)
    figures["moving_share"] = None if moving is None else float(moving.mean())
    figures["re_exposed"] = len(times)
    figures["sharpness"] = sharpness(_codes(sharp.image, light), light.full_scale, moving)
    figures["sharpness_captured"] = sharpness(reference, light.full_scale, moving)
    figures["expected_psnr"] = sharp.expected_psnr
    figures["expected_psnr_moving"] = _expected_within(sharp, moving)
    return Judged(sharp, figures)


def _expected_within(picture: Picture, pixels: NDArray[np.bool_] | None) -> float | None:
    if picture.error is None or pixels is None or not pixels.any():
        return None
    return replace(picture, error=picture.error[pixels]).expected_psnr


def _instants(pictures: Pictures, key: int, held: Frame, middle: Image) -> list[int]:
    """As many instants as keep the motion within half a pixel a step.

    The motion is that between pictures made within the exposure: the keys lie too far apart for the frames' own flow.
    """
    delays = pictures.keys.delays_us
    # of a rolling shutter the earliest row's start and the latest one's end
    start, end = held.start_us + int(delays.min()), held.end_us + int(delays.max())
    if not pictures.keys.span_covered(key) or start == end:
        return exposure_times(held.start_us, held.end_us, 0.0)
    first, last = pictures.keys.times_us[key : key + 2]
    ends = [pictures.at(t).image for t in (max(start, first), min(end, last))]
    motion = sum(_motion_px(end, middle) for end in ends)
    return exposure_times(start, end, min(motion, MOST_EXPOSED / 2))


def _motion_px(one: Image, two: Image) -> float:
    """How far the fastest parts move from one picture to another (99th percentile), pixels."""
    flow = flow_between(one, two)
    return float(np.percentile(np.hypot(flow[..., 0], flow[..., 1]), 99))


def _moving(pictures: Pictures, key: int) -> NDArray[np.bool_] | None:
    keys = pictures.keys
    if keys.events is None:
        return None
    events = keys.events.between(keys.times_us[key] - BEFORE_US, keys.times_us[key + 1] + AFTER_US)
    mask = moving_mask(events, (keys.frames.shape[0], keys.frames.shape[1]))
    return mask if mask.any() else None


def _comparison(
    reference: Image, light: Light, moving: NDArray[np.bool_] | None
) -> Callable[[Image], tuple[float | None, float | None]]:
    def compare(image: Image) -> tuple[float | None, float | None]:
        codes = _codes(image, light)
        whole = psnr(reference, codes, light.full_scale)
        return whole, None if moving is None else psnr(reference, codes, light.full_scale, moving)

    return compare


def _codes(image: Image, light: Light) -> Image:
    """Code values, unrounded, within what a file could hold: the captured frame stops at full scale as well."""
    return np.clip(light.to_codes(image), 0, light.full_scale)
