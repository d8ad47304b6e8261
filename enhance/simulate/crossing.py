"""The event pixel, compiled: where a straight line in log light crosses thresholds, merged with noise and dead time."""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray

#: Events one call may write, and room left for one pixel within one step (log light spans under 8, thresholds exceed
#: 0.005, so no step holds more crossings than this).
CAPACITY, MOST_A_PIXEL = 1 << 18, 1 << 12

F64 = NDArray[np.float64]


@numba.njit(cache=True, nogil=True)
def _random(state: NDArray[np.uint64], pixel: int) -> float:
    """Uniform number above 0 and up to 1 of one pixel's own stream (xorshift64*, Vigna 2016)."""
    x = state[pixel]
    x ^= x >> np.uint64(12)
    x ^= x << np.uint64(25)
    x ^= x >> np.uint64(27)
    state[pixel] = x
    return (float((x * np.uint64(2685821657736338717)) >> np.uint64(11)) + 1.0) / 9007199254740992.0


@numba.njit(cache=True, nogil=True)
def _skip_noise(next_noise: F64, noise_rate: F64, state: NDArray[np.uint64], pixel: int, until: float) -> None:
    """Draw one pixel's noise events on to the first at or after `until`: those before it are not told."""
    while next_noise[pixel] < until:
        next_noise[pixel] -= np.log(_random(state, pixel)) / noise_rate[pixel]


@numba.njit(cache=True, nogil=True)
def cross(
    before: F64,
    after: F64,
    times: F64,
    reference: F64,
    dead_until: F64,
    positive: F64,
    negative: F64,
    constants: F64,
    noise_rate: F64,
    next_noise: F64,
    state: NDArray[np.uint64],
    first: int,
    out_t: NDArray[np.int64],
    out_pixel: NDArray[np.int64],
    out_polarity: NDArray[np.int8],
) -> tuple[int, int]:
    """Events of all pixels in one step, over which log light runs straight.

    Parameters
    ----------
    before, after : ndarray of float64, shape (P,)
        Log light at both ends of the step.
    times : ndarray of float64, shape (2,)
        Both ends, microseconds.
    reference, dead_until, next_noise : ndarray of float64, shape (P,)
        State, changed in place. A pixel with ``dead_until`` ahead is held in reset.
    positive, negative : ndarray of float64, shape (P,)
        Thresholds.
    constants : ndarray of float64, shape (2,)
        Refractory time in microseconds; leak in events a microsecond.
    noise_rate : ndarray of float64, shape (P,)
        Noise events a microsecond.
    state : ndarray of uint64, shape (P,)
        Random streams, changed in place.
    first : int
        Pixel to start from.
    out_t, out_pixel, out_polarity : ndarray, shape (CAPACITY,)
        Written, in pixel order.

    Returns
    -------
    count : int
        Events written.
    next_first : int
        Pixel to go on from with emptied outputs; P when the step is done.
    """
    start, end = times[0], times[1]
    span = end - start
    refractory, leak = constants[0], constants[1]
    count = 0
    for pixel in range(first, before.size):
        if count + MOST_A_PIXEL > out_t.size:
            return count, pixel
        low, up, down = before[pixel], positive[pixel], negative[pixel]
        # Seen from the sinking reference, leakage is light that rises: one slope holds both.
        sunk = leak * up * span
        slope = (after[pixel] + sunk - low) / span
        now, level = start, reference[pixel]
        while count < out_t.size:
            if dead_until[pixel] >= now:
                if dead_until[pixel] >= end:
                    # still in reset at the end: re-armed in a later step, where the level is set
                    _skip_noise(next_noise, noise_rate, state, pixel, end)
                    break
                now = dead_until[pixel]
                level = low + slope * (now - start)
                _skip_noise(next_noise, noise_rate, state, pixel, now)
            target = level + up if slope > 0 else level - down
            when = np.inf
            if slope != 0.0:
                when = max(start + (target - low) / slope, now)
            # A crossing on the border belongs to the step it ends, so none is lost or told twice.
            if next_noise[pixel] < end and next_noise[pixel] < when:
                now = next_noise[pixel]
                next_noise[pixel] -= np.log(_random(state, pixel)) / noise_rate[pixel]
                sign = 1 if _random(state, pixel) > 0.5 else -1
            elif when <= end:
                now, level = when, target
                sign = 1 if slope > 0 else -1
            else:
                break
            out_t[count], out_pixel[count], out_polarity[count] = int(np.floor(now)), pixel, sign
            count += 1
            if refractory > 0.0:
                dead_until[pixel] = now + refractory
        reference[pixel] = level - sunk
    return count, before.size
