"""quality.json: the figures of a job in short, each with its definition."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from enhance.clip.held_out import COLUMNS, Judged
from enhance.measure import summarise

#: What each figure of the second pass is.
DEFINITIONS = {
    "psnr": "dB, 10 log10(MAX^2 / MSE) in code values of the frames' own curve, MAX = full scale; the made pictures "
    "averaged over the held-out frame's exposure in linear light, against the frame as captured; mean of the "
    "pictures' dB",
    "ssim": "Wang et al. 2004 (11x11 Gaussian window, sigma 1.5, K1 0.01, K2 0.03), of the same two pictures; mean",
    "psnr_moving": "as psnr, over moving pixels only: the 5x5 square around any event from 10 ms before the span to "
    "20 ms after it, hot pixels left out, and lone events where they would cover more than 5 % of the picture",
    "ssim_moving": "as ssim, the map's mean over moving pixels",
    "ceiling": "dB that a flawless picture would read against the captured frame: 20 log10(MAX / sigma), sigma being "
    "the frame's own noise",
    "nearest": "psnr of the nearest captured key instead",
    "blend": "psnr of the two captured keys blended by time instead",
    "flow": "psnr of the two captured keys moved by the frames' own optical flow (DIS, medium) instead",
    "nearest_moving": "as nearest, over moving pixels",
    "blend_moving": "as blend, over moving pixels",
    "flow_moving": "as flow, over moving pixels",
    "moving_share": "share of the pixels that count as moving",
    "re_exposed": "pictures averaged to stand for one exposure",
    "sharpness": "RMS slope at moving pixels of the sharp picture made at the frame's middle, percent of full scale a "
    "pixel: the figures above are blind to sharpness along the motion",
    "sharpness_captured": "the same of the captured frame",
}


def held_out_summary(judged: Sequence[Judged], every: int) -> dict[str, Any]:
    """Sum up the second pass.

    Parameters
    ----------
    judged : sequence of Judged
    every : int
        Keys were every n-th frame.

    Returns
    -------
    dict
        Each figure with its mean, what it is over, and its definition.
    """
    names = [name for name in COLUMNS if name != "time_us"]
    rows = [{name: j.figures[name] for name in names} for j in judged]
    figures = summarise(rows, names)
    return {
        "keys": f"every {every}. frame; the frames between took no part in the pass, calibration included",
        "pictures": len(judged),
        "figures": {
            name: {
                "mean": figure.mean,
                "pictures": figure.count,
                "infinite": figure.infinite,
                "unknown": figure.unknown,
                "definition": DEFINITIONS[name],
            }
            for name, figure in figures.items()
        },
    }


def sharpness_summary(pairs: Sequence[tuple[float | None, float | None]]) -> dict[str, Any]:
    """Sum up the keys' sharpness before and after: (captured, deblurred) of each deblurred key."""
    known = [(a, b) for a, b in pairs if a is not None and b is not None]
    mean = np.mean(known, axis=0) if known else (None, None)
    return {
        "keys": len(known),
        "captured": None if mean[0] is None else float(mean[0]),
        "deblurred": None if mean[1] is None else float(mean[1]),
        "definition": "RMS slope over the whole picture, percent of full scale a pixel; mean over the deblurred keys",
    }
