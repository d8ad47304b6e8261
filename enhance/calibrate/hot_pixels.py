"""Hot pixels: those that fire all the time whatever the scene does."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from enhance.kernels.event_integral import event_counts
from enhance.recording import EventSource
from enhance.rig import Quantity

#: Slices of the recording that are looked at: memory and time stay the same for an hour. A short recording is cut into
#: fewer, since in a slice much shorter than this many microseconds even a hot pixel may be silent.
SLICES, LEAST_SLICES, SLICE_US, SHORT_SLICE_US = 32, 8, 100_000, 20_000
#: Events read at the most, over all slices.
MOST_EVENTS = 20_000_000
#: A hot pixel outdoes its neighbours this many times, at this rate at least (events a second), and fires in nearly all
#: slices: an edge that passes, or a part that turns, spares some slices or moves the neighbours as well.
TIMES_NEIGHBOURS, LEAST_RATE_HZ, LEAST_SHARE = 8.0, 20.0, 0.8
#: Which of the 8 neighbours, from the busiest down, is compared: two hot pixels may stand side by side, while along the
#: thinnest line that moves both neighbours on it are busy.
COMPARED = 2


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
    width, height = events.size
    span = events.last_us + 1 - events.first_us
    slices = int(np.clip(span // SHORT_SLICE_US, LEAST_SLICES, SLICES))
    length = min(SLICE_US, max(1, span // slices))
    starts = [events.first_us + (span - length) * k // (slices - 1) for k in range(slices)]
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
    hot: NDArray[np.bool_] = (
        (total > TIMES_NEIGHBOURS * np.maximum(_busy_neighbour(total), 1))
        & (total > LEAST_RATE_HZ * seconds)
        & (fired >= LEAST_SHARE * looked)
    )
    rows, columns = np.nonzero(hot)
    found = [[int(x), int(y)] for x, y in zip(columns, rows, strict=True)]
    evidence = f"{looked} slices of {length / 1000:.1f} ms; {len(found)} of {width * height} pixels"
    return Quantity(found, None, "rate against the neighbours, slice by slice", evidence)


def _busy_neighbour(total: NDArray[np.int64]) -> NDArray[np.int64]:
    """Count of the second busiest of each pixel's neighbours, shape (H, W)."""
    height, width = total.shape
    # Mirrored: a line that moves goes on beyond the frame's border.
    around = np.pad(total, 1, mode="reflect")
    shifted = [around[1 + dy : 1 + dy + height, 1 + dx : 1 + dx + width] for dy in (-1, 0, 1) for dx in (-1, 0, 1)]
    del shifted[4]  # the pixel itself
    return np.asarray(np.partition(np.stack(shifted), -COMPARED, axis=0)[-COMPARED])
