"""Lamp flicker in events: what each pixel's events say of the lamp, and events without it.

At an event a pixel's log light stands exactly one threshold from where it stood at the event before. With the lamp's
own log light m(t) known, the scene's share of each such step is ``+-c - share * (m(t) - m(t of the event before))``:
every event that the lamp sets off is one more exact sample of the scene.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@njit(cache=True, nogil=True)
def _differences(t_us, pixel, polarity, least_us, since, up, down, out_pixel, out_t, out_n):  # type: ignore[no-untyped-def]
    count = 0
    for i in range(t_us.size):
        p, t = pixel[i], t_us[i]
        if polarity[i] > 0:
            up[p] += 1
        else:
            down[p] += 1
        if since[p] < 0:
            since[p], up[p], down[p] = t, 0, 0
        elif t - since[p] >= least_us:
            out_pixel[count], out_t[count, 0], out_t[count, 1] = p, since[p], t
            out_n[count, 0], out_n[count, 1] = up[p], down[p]
            count += 1
            since[p], up[p], down[p] = t, 0, 0
    return count


def long_differences(
    t_us: NDArray[np.int64], pixel: NDArray[np.int64], polarity: NDArray[np.int8], pixels: int, least_us: int
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
    """Cut each pixel's events into stretches from one event to another.

    Parameters
    ----------
    t_us, pixel, polarity : ndarray, shape (N,)
        Sorted by time, from 0 on; pixels counted row by row.
    pixels : int
        How many pixels there are.
    least_us : int
        Each stretch ends with the first event at least this long after the one it began with.

    Returns
    -------
    pixel : ndarray of int64, shape (M,)
    ends_us : ndarray of int64, shape (M, 2)
        Times of the two events.
    count : ndarray of int64, shape (M, 2)
        Positive and negative events after the first one, the last one included.
    """
    out = np.empty(len(t_us), np.int64), np.empty((len(t_us), 2), np.int64), np.empty((len(t_us), 2), np.int64)
    since, up, down = np.full(pixels, -1, np.int64), np.zeros(pixels, np.int64), np.zeros(pixels, np.int64)
    count = _differences(t_us, pixel, polarity, least_us, since, up, down, *out)
    return out[0][:count], out[1][:count], out[2][:count]


@njit(cache=True, nogil=True)
def _steady(  # type: ignore[no-untyped-def]
    t_us, pixel, polarity, level, share, up, down, steps, forget_us, last_us, last_level, rest, out_index, out_polarity
):
    count = 0
    for i in range(t_us.size):
        p, t = pixel[i], t_us[i]
        step = up[p] if polarity[i] > 0 else -down[p]
        if last_us[p] >= 0:
            # what is left of a threshold fades: unequal thresholds of a pixel would add up in it without end
            left = rest[p] * np.exp(-(t - last_us[p]) / forget_us)
            rest[p] = left + step - share[p] * (level[i] - last_level[p])
        last_us[p], last_level[p] = t, level[i]
        while count < out_index.size:
            if rest[p] >= steps[2] * steps[0]:
                rest[p] -= steps[0]
                out_polarity[count] = 1
            elif rest[p] <= -steps[2] * steps[1]:
                rest[p] += steps[1]
                out_polarity[count] = -1
            else:
                break
            out_index[count] = i
            count += 1
    return count


def steady_steps(
    t_us: NDArray[np.int64],
    pixel: NDArray[np.int64],
    polarity: NDArray[np.int8],
    level: Floats,
    share: Floats,
    thresholds: tuple[Floats, Floats],
    steps: tuple[float, float],
    early: float,
    forget_us: float,
) -> tuple[NDArray[np.int64], NDArray[np.int8]]:
    """Say again as events what is left of them when a lamp's flicker is taken out.

    Parameters
    ----------
    t_us, pixel, polarity : ndarray, shape (N,)
        Sorted by time, from 0 on.
    level : ndarray, shape (N,)
        The lamp's log light at each event, in units of the thresholds.
    share : ndarray, shape (P,)
        How much of it reaches each pixel.
    thresholds : tuple of ndarray, shape (P,)
        Each pixel's own, positive and negative.
    steps : tuple of float
        What the events that come out stand for, positive and negative.
    early : float
        Share of such a step at which it is told.
    forget_us : float
        Time in which what is left of a step fades by e.

    Returns
    -------
    index : ndarray of int64, shape (M,)
        The event at whose time and pixel each one stands.
    polarity : ndarray of int8, shape (M,)
    """
    # an event brings its own threshold and what the lamp did meanwhile: a few steps at the most
    room = 4 * len(t_us) + 64
    index, sign = np.empty(room, np.int64), np.empty(room, np.int8)
    pixels = len(share)
    state = np.full(pixels, -1, np.int64), np.zeros(pixels), np.zeros(pixels)
    wanted = np.array([*steps, early])
    count = _steady(t_us, pixel, polarity, level, share, *thresholds, wanted, forget_us, *state, index, sign)
    return index[:count], sign[:count]
