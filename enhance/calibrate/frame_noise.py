"""The frames' own noise, from pixels at which no event fired between two keys."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from enhance.calibrate.evidence import Pair
from enhance.kernels.event_integral import event_counts
from enhance.recording import EventSource
from enhance.rig import Quantity

#: Classes of brightness, and quiet pixels each needs to count.
CLASSES, LEAST_PIXELS = 12, 200
#: Where nothing can be told: half a step of 8 bits and shot noise of about 20 000 electrons at full scale.
ASSUMED = (0.002, 5e-5)


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
    light, difference = [], []
    for pair in pairs:
        one, two = pair.first, pair.second
        seen = events.between(one.start_us, two.end_us)
        quiet = pair.usable & (event_counts(seen.x, seen.y, seen.polarity, pair.usable.shape).sum(axis=0) == 0)
        light.append(0.5 * (one.image + two.image)[quiet])
        difference.append((two.image - one.image)[quiet])
    level = np.concatenate([*light, np.empty(0, np.float32)])
    change = np.concatenate([*difference, np.empty(0, np.float32)])
    edges = np.linspace(0, 1, CLASSES + 1)
    points = []
    for low, high in zip(edges[:-1], edges[1:], strict=True):
        inside = (level >= low) & (level < high)
        if inside.sum() >= LEAST_PIXELS:
            here = change[inside]
            # Robust: what creeps by less than a threshold without an event must not count as noise.
            sigma = 1.4826 * np.median(np.abs(here - np.median(here))) / np.sqrt(2)
            points.append((float(level[inside].mean()), float(sigma**2), int(inside.sum())))
    if not points:
        return Quantity(list(ASSUMED), None, "assumed", "no pixel stays quiet between two keys")
    at, variance, count = np.array(points).T
    weight = np.sqrt(count)
    A = np.stack([np.ones_like(at), at], axis=1)
    floor2, shot = np.linalg.lstsq(A * weight[:, None], variance * weight, rcond=None)[0]
    # A step of 8 bits is never finer than this.
    floor = float(np.sqrt(max(floor2, 0.0)))
    value = [max(floor, 0.001), max(float(shot), 0.0)]
    return Quantity(
        value, None, "difference of keys at quiet pixels", f"{int(count.sum())} pixels, {len(points)} levels"
    )
