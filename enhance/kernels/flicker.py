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

#: How long an edge may take over a stretch, in the time it would take at its speed in the stretch beside it.
BURST = 1.5


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
def _scene_changes(t_us, pixel, polarity, level, share, up, down, last_us, last_level, change, gap):  # type: ignore[no-untyped-def]
    for i in range(t_us.size):
        p = pixel[i]
        if last_us[p] >= 0:
            step = up[p] if polarity[i] > 0 else -down[p]
            change[i] = step - share[p] * (level[i] - last_level[p])
            gap[i] = max(t_us[i] - last_us[p], 1)
        last_us[p], last_level[p] = t_us[i], level[i]


@njit(cache=True, nogil=True)
def _next_slopes(pixel, change, gap, slope, following):  # type: ignore[no-untyped-def]
    for i in range(pixel.size - 1, -1, -1):
        p = pixel[i]
        following[i] = slope[p]
        slope[p] = change[i] / gap[i] if gap[i] > 0 else 0.0


@njit(cache=True, nogil=True)
def _steady(t_us, pixel, change, gap, following, wanted, before, rest, out_t, out_pixel, out_polarity):  # type: ignore[no-untyped-def]
    rise, fall, forget_us, reach_us, burst = wanted
    count = 0
    for i in range(t_us.size):
        if gap[i] <= 0:
            continue
        p, t, moved = pixel[i], t_us[i], change[i]
        # what is left of a threshold fades: unequal thresholds of a pixel would add up in it without end
        left = rest[p] * np.exp(-gap[i] / forget_us)
        length = float(min(gap[i], reach_us))
        since = t - length
        # An edge that goes on after the event, or came from before the last one, is as fast within the stretch between.
        after, ahead = following[i] * np.sign(moved), before[p] * np.sign(moved)
        if max(after, ahead) > 0.0:
            short = burst * abs(moved) / max(after, ahead)
            if short < length:
                since = t - short if after >= ahead else t - gap[i]
                length = short
        before[p] = moved / gap[i]
        reached, told = left + moved, 0.0
        while count < out_t.size:
            # light goes in a straight line over that time, and is told where it meets a threshold
            if reached - told >= rise:
                told += rise
                out_polarity[count] = 1
            elif reached - told <= -fall:
                told -= fall
                out_polarity[count] = -1
            else:
                break
            part = min(max((told - left) / moved, 0.0), 1.0) if moved != 0.0 else 1.0
            out_t[count] = int(since + part * length)
            out_pixel[count] = p
            count += 1
        rest[p] = reached - told
    return count


def steady_steps(
    t_us: NDArray[np.int64],
    pixel: NDArray[np.int64],
    polarity: NDArray[np.int8],
    level: Floats,
    share: Floats,
    thresholds: tuple[Floats, Floats],
    steps: tuple[float, float],
    forget_us: float,
    reach_us: float,
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int8]]:
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
    forget_us : float
        Time in which what is left of a step fades by e.
    reach_us : float
        How long before an event the change that it tells of began, at the most.

    Returns
    -------
    t_us, pixel, polarity : ndarray, shape (M,)
        Sorted by time.
    """
    # an event brings its own threshold and what the lamp did meanwhile: a few steps at the most
    room = 4 * len(t_us) + 64
    out_t, out_pixel, sign = np.empty(room, np.int64), np.empty(room, np.int64), np.empty(room, np.int8)
    pixels = len(share)
    change, gap, following = np.zeros(len(t_us)), np.zeros(len(t_us), np.int64), np.empty(len(t_us))
    last = np.full(pixels, -1, np.int64), np.zeros(pixels)
    _scene_changes(t_us, pixel, polarity, level, share, *thresholds, *last, change, gap)
    _next_slopes(pixel, change, gap, np.zeros(pixels), following)
    wanted = np.array([*steps, forget_us, reach_us, BURST])
    state = np.zeros(pixels), np.zeros(pixels)
    count = _steady(t_us, pixel, change, gap, following, wanted, *state, out_t, out_pixel, sign)
    order = np.argsort(out_t[:count], kind="stable")
    return out_t[order], out_pixel[order], sign[order]
