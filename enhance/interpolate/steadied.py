"""Pictures carried a little way along the events, brought back along the motion, and averaged.

The noise of a carried picture belongs to pixels: their thresholds, what of these is part-filled, stray events. What is
filmed belongs to what moves. Carried pictures of instants a fraction of a pixel apart, each taken back by that motion,
hold the same surface with the noise of other pixels.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from enhance.kernels.double_integral import log_sum
from enhance.kernels.event_integral import event_counts
from enhance.kernels.optical_flow import warp
from enhance.light import LOG_FLOOR
from enhance.recording import Contrast, Events

Flows = tuple[NDArray[np.float32], NDArray[np.float32]]

#: Steps taken to either side of an instant, how far fast pixels (95 % are slower) move in each, and what share of the
#: span a step may be at the most.
STEPS = (-3, -2, -1, 0, 1, 2, 3)
STEP_PIXELS, FAST, LONGEST_STEP = 0.7, 95, 0.1


def steadied(
    picture: NDArray[np.float32],
    flows: Flows,
    time_us: int,
    interval_us: tuple[int, int],
    events: Events,
    contrast: Contrast,
) -> NDArray[np.float32]:
    """Average a picture over nearby instants along its motion.

    Parameters
    ----------
    picture : ndarray of float32, shape (H, W)
        Of the instant; linear light.
    flows : tuple of ndarray of float32, shape (H, W, 2)
        From it to the start and to the end of the interval.
    time_us : int
    interval_us : tuple of int
    events : Events
        Those of the interval, and with a ramp those up to `ramp_us` before and twice that after.
    contrast : Contrast

    Returns
    -------
    ndarray of float32, shape (H, W)
    """
    start, end = interval_us
    way = flows[1] - flows[0]
    fast = float(np.percentile(np.hypot(way[..., 0], way[..., 1]), FAST))
    step_us = (end - start) * min(LONGEST_STEP, STEP_PIXELS / max(fast, 1e-3))
    total = np.zeros_like(picture)
    for step in STEPS:
        near = min(max(time_us + round(step * step_us), start), end)
        change = light_change(events, time_us, near, contrast, picture.shape)
        there = (np.maximum(picture, 0) + LOG_FLOOR) * np.exp(change) - LOG_FLOOR
        total += warp(there, np.float32((near - time_us) / (end - start)) * way, "cubic")
    return total / np.float32(len(STEPS))


def light_change(
    events: Events, start_us: int, end_us: int, contrast: Contrast, shape: tuple[int, ...]
) -> NDArray[np.float32]:
    """Log change of light from one instant to another, in either order, shape (H, W)."""
    return log_sum(events, start_us, end_us, contrast, (shape[0], shape[1])).astype(np.float32)


def events_seen(events: Events, start_us: int, end_us: int, shape: tuple[int, ...]) -> NDArray[np.float32]:
    """Count the events of each pixel between two instants, shape (H, W)."""
    seen = events.between(start_us, end_us)
    return event_counts(seen.x, seen.y, seen.polarity, (shape[0], shape[1])).sum(axis=0).astype(np.float32)
