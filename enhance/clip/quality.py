"""quality.json: the figures of a job in short, each with its definition."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from enhance.clip.held_out import COLUMNS, Judged
from enhance.measure import rank_correlation, summarise
from enhance.recording import Kind

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
    "expected_psnr": "expected PSNR, as defined above, of the sharp picture made at the frame's middle",
    "expected_psnr_moving": "as expected_psnr, over moving pixels",
}
EXPECTED = (
    "expected PSNR in dB against the sharp, noise-free truth, in code values of the frames' own curve, over the whole "
    "picture; estimated by the tool itself from how far its candidates disagree, the events, the noise and the "
    "distance from the keys; fitted on simulated recordings. Not a measurement"
)
RANKED = (
    "Spearman's rank correlation between the expected PSNR and the figure, over the held-out pictures that have both: "
    "1 where the expectation puts them in the order of the figure, 0 where it tells nothing; null for fewer than 5 "
    "pictures or where one of the two never varies"
)


@dataclass(frozen=True)
class Expected:
    """What is expected of one delivered picture; `psnr` is None where it is not known."""

    time_us: int
    kind: Kind
    psnr: float | None

    def below(self, least_psnr: float | None) -> bool | None:
        """Whether a picture is below what the job asks for; None where nothing is asked or known."""
        # as the tables show it, so that no picture of "30.00" is marked as below 30
        return None if least_psnr is None or self.psnr is None else round(self.psnr, 2) < least_psnr


def expected_summary(expected: Sequence[Expected], least_psnr: float | None) -> dict[str, Any]:
    """Sum up what is expected of the delivered pictures.

    Parameters
    ----------
    expected : sequence of Expected
    least_psnr : float or None
        What the job asks for.

    Returns
    -------
    dict
    """
    known = [(e.psnr, e.time_us) for e in expected if e.psnr is not None]
    lowest, at = min(known, default=(None, None))
    below = below_count(expected, least_psnr)
    return {
        "mean": float(np.mean([value for value, _ in known])) if known else None,
        "lowest": lowest,
        "lowest_time_us": at,
        "pictures": len(known),
        "unknown": len(expected) - len(known),
        "least_psnr": least_psnr,
        "below_least": None if least_psnr is None else below,
        "note": _below_note(below, least_psnr),
        "definition": EXPECTED,
    }


def below_count(expected: Sequence[Expected], least_psnr: float | None) -> int:
    """Count the pictures below what the job asks for."""
    return sum(e.below(least_psnr) is True for e in expected)


def expected_notes(expected: Sequence[Expected], least_psnr: float | None) -> list[str]:
    """Say which pictures are below what the job asks for, and of how many that is not known."""
    notes = [_below_note(below_count(expected, least_psnr), least_psnr)]
    unknown = sum(e.psnr is None and e.kind is not Kind.CAPTURED for e in expected)
    if least_psnr is not None and unknown:
        notes.append(
            f"made pictures whose expected PSNR is not known, and so not held to measure.least_psnr: {unknown}"
        )
    return [note for note in notes if note]


def _below_note(below: int, least_psnr: float | None) -> str | None:
    pictures = "1 picture" if below == 1 else f"{below} pictures"
    return f"{pictures} below {least_psnr:g} dB expected: see pictures.csv" if below else None


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
        "rank_correlation": {
            "psnr": _ranked(rows, "psnr"),
            "psnr_moving": _ranked(rows, "psnr_moving"),
            "definition": RANKED,
        },
    }


def _ranked(rows: Sequence[dict[str, Any]], name: str) -> float | None:
    pairs = [(row[f"expected_{name}"], row[name]) for row in rows]
    known = [pair for pair in pairs if None not in pair]
    return rank_correlation([a for a, _ in known], [b for _, b in known])


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
