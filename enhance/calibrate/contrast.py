"""Contrast thresholds by regression between deblurred keys.

Between two sharp pictures the events tell the change of log light but for the part-filled threshold at either end:

    ln L2 - ln L1 = c+ N+ - c- N- + b+ [N+ > 0] - b- [N- > 0].

The two intercepts absorb the part that is not filled; without them the thresholds read high. Blurred frames in place of
the latents read far too low, so the latents are made with the thresholds found so far, and both are iterated.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from enhance.calibrate.clipped import USABLE_LIGHT
from enhance.calibrate.evidence import Pair, thinned
from enhance.kernels.double_integral import log_blur_ratio
from enhance.kernels.event_integral import event_counts
from enhance.recording import Contrast, EventSource
from enhance.rig import Quantity

#: Where the iteration starts and what no sensor leaves (natural log units).
START, RANGE = (0.2, 0.2), (0.03, 1.0)
#: The latents change little from one round to the next: it stops at this relative change, or after so many rounds.
ENOUGH, ROUNDS = 0.002, 12
#: Fewer pixels with events than this cannot tell four numbers apart.
LEAST_PIXELS = 400
#: A pixel with a single event is as likely one of noise, which says nothing of a threshold.
LEAST_EVENTS = 2
#: Huber's k: residuals beyond k robust deviations pull no harder than those at k (Huber 1964, 95 % efficiency).
HUBER = 1.345

Rows = tuple[NDArray[np.float64], NDArray[np.float64]]

METHOD = "regression between deblurred keys"


def estimate_contrast(
    pairs: Sequence[Pair], events: EventSource, ramp_us: int = 0, start: tuple[float, float] = START
) -> tuple[Quantity, Quantity]:
    """Estimate both contrast thresholds.

    Parameters
    ----------
    pairs : sequence of Pair
    events : EventSource
        Events in the frames' clock and on the frames' pixels.
    ramp_us : int
        The events' ramp.
    start : tuple of float
        Thresholds to begin with.

    Returns
    -------
    positive, negative : Quantity
        Value None, with the reason, where the recording cannot tell.
    """
    contrast = start
    rows: list[Rows] = []
    for _ in range(ROUNDS):
        rows = [_equations(pair, events, Contrast(*contrast, ramp_us)) for pair in pairs]
        count = sum(len(change) for _, change in rows)
        if count < LEAST_PIXELS:
            reason = f"only {count} usable pixels with events between the keys; {LEAST_PIXELS} are needed"
            return Quantity(None, None, METHOD, reason), Quantity(None, None, METHOD, reason)
        fit, left_out = _solve(rows)
        found = (float(np.clip(fit[0], *RANGE)), float(np.clip(fit[1], *RANGE)))
        moved = max(abs(a / b - 1) for a, b in zip(found, contrast, strict=True))
        contrast = found
        if moved < ENOUGH:
            break
    evidence = f"{count} pixels with events between {len(pairs)} pairs of deblurred keys"
    positive, negative = (
        _quantity(contrast[k], left_out[:, k], name, evidence) for k, name in enumerate(("positive", "negative"))
    )
    return positive, negative


def _quantity(value: float, left_out: NDArray[np.float64], name: str, evidence: str) -> Quantity:
    if value in RANGE:
        return Quantity(
            None, None, METHOD, f"the {name} threshold ran to {value}, the border of what a sensor can have"
        )
    # Jackknife over the pairs; one pair has no scatter to show.
    pairs = len(left_out)
    return Quantity(value, float(np.sqrt((pairs - 1) * np.var(left_out))) if pairs > 1 else None, METHOD, evidence)


def _equations(pair: Pair, events: EventSource, contrast: Contrast) -> Rows:
    """Rows of the regression of one pair: (N+, -N-, [N+ > 0], -[N- > 0]) and the latents' log change."""
    one, two = pair.first, pair.second
    ramp = contrast.ramp_us
    pair, seen = thinned(pair, events.between(one.start_us - ramp, max(two.end_us, two.time_us) + 2 * ramp))
    shape = pair.change.shape
    first = log_blur_ratio(seen, one.start_us, one.end_us, one.time_us, contrast, shape)
    second = log_blur_ratio(seen, two.start_us, two.end_us, two.time_us, contrast, shape)
    # ln L = ln B - (ln B - ln L)
    change = pair.change - (second - first)
    between = seen.between(one.time_us, two.time_us)
    positive, negative = event_counts(between.x, between.y, between.polarity, shape)
    usable = pair.usable & (positive + negative >= LEAST_EVENTS) & _stays_in_range(pair, first, second)
    n = positive[usable].astype(np.float64)
    m = negative[usable].astype(np.float64)
    return np.stack([n, -m, n > 0, -(m > 0).astype(np.float64)], axis=1), change[usable]


def _stays_in_range(pair: Pair, first: NDArray[np.float64], second: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Where the latents, too, are neither dark nor brighter than the frame could show."""
    low, high = USABLE_LIGHT
    inside = np.ones(first.shape, bool)
    for frame, ratio in ((pair.first, first), (pair.second, second)):
        latent = frame.image * frame.scale * np.exp(-ratio)
        inside &= (latent > low) & (latent < high)
    return inside


def _solve(rows: Sequence[Rows]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Least squares with Huber weights over all pairs, and the fits with each pair left out, shape (pairs, 4)."""
    A = np.concatenate([a for a, _ in rows])
    b = np.concatenate([c for _, c in rows])
    weight = np.ones(len(b))
    fit = np.zeros(4)
    for _ in range(8):
        fit = _normal(A, b, weight)
        residual = np.abs(b - A @ fit)
        scale = 1.4826 * np.median(residual) + 1e-9
        weight = np.minimum(1.0, HUBER * scale / np.maximum(residual, 1e-9))
    pair = np.repeat(np.arange(len(rows)), [len(c) for _, c in rows])
    left_out = [_normal(A, b, weight * (pair != k)) for k in range(len(rows))]
    return fit, np.array(left_out)


def _normal(A: NDArray[np.float64], b: NDArray[np.float64], weight: NDArray[np.float64]) -> NDArray[np.float64]:
    """Weighted normal equations; a column that is all zero (one sign only) gets a zero."""
    weighted = A * weight[:, None]
    return np.asarray(np.linalg.lstsq(A.T @ weighted, weighted.T @ b, rcond=None)[0], dtype=np.float64)
