"""The frames' own noise, from pixels at which no event fired between two keys."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from enhance.calibrate.evidence import Pair
from enhance.kernels.event_integral import event_counts
from enhance.recording import EventSource
from enhance.rig import Quantity

#: Classes of brightness, and quiet pixels each needs to count.
CLASSES, LEAST_PIXELS = 12, 200
#: Share of all pixels that has to be quiet: the few of a scene that moves all over only creep.
LEAST_SHARE = 0.02
#: Where nothing can be told: half a step of 8 bits and shot noise of about 20 000 electrons at full scale.
ASSUMED = (0.002, 5e-5)
#: Rounding to 8 bits alone scatters by 1 / 255 / sqrt(12).
LEAST_FLOOR = 0.001
#: What creeps by less than a threshold fires no event and must not count as noise: values are cut at so many standard
#: deviations, again and again. (A median of whole code values would know the noise to a code value only.)
CUT, ROUNDS = 3.0, 8


def estimate_frame_noise(pairs: Sequence[Pair], events: EventSource) -> Quantity:
    """Fit variance = floor^2 + shot * light to the difference of two keys.

    Parameters
    ----------
    pairs : sequence of Pair
    events : EventSource
        Events in the frames' clock and on the frames' pixels.

    Returns
    -------
    Quantity
        Value: [floor, shot], linear light with 1 = full scale.
    """
    import cv2

    light, difference = [], []
    for pair in pairs:
        one, two = pair.first, pair.second
        seen = events.between(one.start_us, two.end_us)
        fired = event_counts(seen.x, seen.y, seen.polarity, pair.usable.shape).sum(axis=0) > 0
        # An edge that fires here creeps by less than a threshold next door.
        quiet = pair.usable & (cv2.dilate(fired.astype(np.uint8), np.ones((3, 3), np.uint8)) == 0)
        light.append(0.5 * (one.image + two.image)[quiet])
        # A change of lamp or gain is no noise.
        gain = np.float32(np.median(two.image[quiet] / one.image[quiet])) if quiet.any() else np.float32(1)
        difference.append(two.image[quiet] - gain * one.image[quiet])
    level = np.concatenate([*light, np.empty(0, np.float32)])
    change = np.concatenate([*difference, np.empty(0, np.float32)])
    edges = np.linspace(0, 1, CLASSES + 1)
    points = []
    for low, high in zip(edges[:-1], edges[1:], strict=True):
        inside = (level >= low) & (level < high)
        if inside.sum() >= LEAST_PIXELS:
            points.append((float(level[inside].mean()), 0.5 * _variance(change[inside]), int(inside.sum())))
    if not points or len(level) < LEAST_SHARE * sum(pair.usable.size for pair in pairs):
        return Quantity(list(ASSUMED), None, "assumed", "too few pixels stay quiet between two keys")
    at, variance, count = np.array(points).T
    # The scatter of a variance from n values is about variance * sqrt(2 / n).
    weight = np.sqrt(count) / np.maximum(variance, LEAST_FLOOR**2)
    A = np.stack([np.ones_like(at), at], axis=1)
    floor2, shot = np.linalg.lstsq(A * weight[:, None], variance * weight, rcond=None)[0]
    value = [max(float(np.sqrt(max(floor2, 0.0))), LEAST_FLOOR), max(float(shot), 0.0)]
    return Quantity(
        value, None, "difference of keys at quiet pixels", f"{int(count.sum())} pixels, {len(points)} levels"
    )


def _variance(values: NDArray[np.float32]) -> float:
    """Variance of the bulk of some values, shape (N,)."""
    away = np.square(values.astype(np.float64) - np.mean(values, dtype=np.float64))
    variance = float(away.mean())
    for _ in range(ROUNDS):
        variance = float(away[away <= CUT**2 * variance].mean()) if variance else 0.0
    return variance
