"""Hot pixels: those that fire all the time whatever the scene does."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from enhance.kernels.event_integral import event_counts
from enhance.recording import EventSource
from enhance.rig import Quantity

#: Slices of the recording that are looked at, and their length at most: memory and time stay the same for an hour.
SLICES, SLICE_US = 32, 100_000
#: Events read at the most, over all slices.
MOST_EVENTS = 20_000_000
#: A hot pixel outdoes the median of its neighbourhood this many times, at this rate at least (events a second), and
#: does so in nearly every slice: an edge that passes, or a part that turns, spares some slices or moves its neighbours.
TIMES_NEIGHBOURS, LEAST_RATE_HZ, LEAST_SLICES = 20.0, 20.0, 0.8


def find_hot_pixels(events: EventSource) -> Quantity:
    """Find pixels whose events say nothing of the scene.

    Parameters
    ----------
    events : EventSource
        In the sensor's own world.

    Returns
    -------
    Quantity
        Value: list of [x, y].
    """
    import cv2

    width, height = events.size
    span = events.last_us + 1 - events.first_us
    length = min(SLICE_US, max(1, span // SLICES))
    starts = [events.first_us + (span - length) * k // (SLICES - 1) for k in range(SLICES)]
    total = np.zeros((height, width), np.int64)
    fired = np.zeros((height, width), np.int64)
    looked, read = 0, 0
    for start in starts:
        seen = events.between(start, start + length)
        counts = event_counts(seen.x, seen.y, seen.polarity, (height, width)).sum(axis=0)
        total += counts
        fired += counts > 0
        looked, read = looked + 1, read + len(seen)
        if read > MOST_EVENTS:
            break
    seconds = looked * length / 1e6
    neighbours = cv2.medianBlur(np.minimum(total, 65535).astype(np.uint16), 5)
    hot: NDArray[np.bool_] = (
        (total > TIMES_NEIGHBOURS * np.maximum(neighbours, 1))
        & (total > LEAST_RATE_HZ * seconds)
        & (fired >= LEAST_SLICES * looked)
    )
    rows, columns = np.nonzero(hot)
    found = [[int(x), int(y)] for x, y in zip(columns, rows, strict=True)]
    evidence = f"{looked} slices of {length / 1000:.1f} ms; {len(found)} of {width * height} pixels"
    return Quantity(found, None, "rate against the neighbours, slice by slice", evidence)
