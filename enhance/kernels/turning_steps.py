"""Events as steps of light whose time is right: for clocks, where a lag matters and the shape of a step does not.

An event tells when light *arrives* a threshold away from the last level, so a plain sum of events is late by half a
step. Between events of one sign that is no matter: a step drawn at its event stands in the middle of the way from half
a threshold below to half a threshold above. Where light turns, though, the sensor needs a whole threshold beyond the
level it reported last: light has crossed that level again, unreported, before the event of the other sign. Each turn
therefore gets that crossing as a step of its own, as long before the event as light took for the threshold between.

How long that was follows from the events around it, if light near its turn is a parabola: with d from the last event to
the first after the turn, and s from there to the next of the same sign, it is ``s (d + s) / (d - s)``. That is s where
light rested before it turned (d much longer than s), and d, all of it, at a sharp peak.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

#: Where d is no longer than this many s, the parabola has its crossing at the last event itself: 1 + sqrt(2).
_SHARP_PEAK = 2.414213562373095
#: Where no neighbour tells how fast light moved: this part of d, right in the mean for a wave of one to two thresholds.
_PART = 0.5
#: exp(S) stays finite in a pixel that fires for no reason: 100 dB.
_LEAST_GAIN, _MOST_GAIN = 1e-5, 1e5


@njit(cache=True, nogil=True)
def _leads(t_us, pixel, polarity, longest, next_us, next_sign, last_us, last_sign, before, out):  # type: ignore[no-untyped-def]
    for i in range(t_us.size - 1, -1, -1):
        p = pixel[i]
        out[i] = next_us[p] - t_us[i] if next_sign[p] == polarity[i] else -1.0
        next_us[p], next_sign[p] = t_us[i], polarity[i]
    for i in range(t_us.size):
        p = pixel[i]
        s, out[i] = out[i], -1.0
        if last_sign[p] == polarity[i]:
            before[p] = t_us[i] - last_us[p]
        elif last_sign[p] != 0:
            d = t_us[i] - last_us[p]
            if s >= 0:
                lead = d if d <= _SHARP_PEAK * s else s * (d + s) / (d - s)
            else:
                # the crossing before the turn, seen in a mirror
                lead = before[p] if before[p] >= 0 else _PART * d
            out[i] = min(lead, d, longest)
            before[p] = out[i]
        last_us[p], last_sign[p] = t_us[i], polarity[i]


@njit(cache=True, nogil=True)
def _means(t_us, pixel, factor, windows, gain, last, out):  # type: ignore[no-untyped-def]
    for i in range(t_us.size + gain.size):
        # after the events every pixel holds its last level to the end
        p = pixel[i] if i < t_us.size else i - t_us.size
        now = t_us[i] if i < t_us.size else np.inf
        for k in range(windows.shape[0]):
            start, end = max(last[p], windows[k, 0]), min(now, windows[k, 1])
            if end > start:
                out[k, p] += gain[p] * (end - start) / (windows[k, 1] - windows[k, 0])
        if i < t_us.size:
            gain[p] = min(max(gain[p] * factor[i], _LEAST_GAIN), _MOST_GAIN)
            last[p] = now


def turning_steps(
    t_us: NDArray[np.int64],
    pixel: NDArray[np.int64],
    polarity: NDArray[np.int8],
    contrast: tuple[float, float],
    pixels: int,
    longest_us: float,
) -> tuple[NDArray[np.float64], NDArray[np.int64], NDArray[np.float64]]:
    """Write events as steps of log light, with one more step before each turn.

    Parameters
    ----------
    t_us, pixel, polarity : ndarray, shape (N,)
        Events, sorted; pixels counted row by row.
    contrast : tuple of float
        Thresholds, positive and negative.
    pixels : int
        How many there are.
    longest_us : float
        No step stands longer than this before its event.

    Returns
    -------
    t_us : ndarray of float64, shape (M,)
        Sorted.
    pixel : ndarray of int64, shape (M,)
    step : ndarray of float64, shape (M,)
        A turn's own step is the mean of both thresholds, or the sum would run away where they differ.
    """
    t = t_us.astype(np.float64)
    lead = np.empty(len(t))
    times, signs = (np.zeros((2, pixels)) for _ in range(2))
    _leads(t, pixel, polarity, longest_us, times[0], signs[0], times[1], signs[1], np.full(pixels, -1.0), lead)
    step = np.where(polarity > 0, contrast[0], -contrast[1])
    turn = lead >= 0
    added = np.where(polarity[turn] > 0, 0.5, -0.5) * (contrast[0] + contrast[1])
    t = np.concatenate([t, t[turn] - lead[turn]])
    order = np.argsort(t, kind="stable")
    return t[order], np.concatenate([pixel, pixel[turn]])[order], np.concatenate([step, added])[order]


def mean_light(
    t_us: NDArray[np.float64],
    pixel: NDArray[np.int64],
    step: NDArray[np.float64],
    windows_us: NDArray[np.float64],
    pixels: int,
) -> NDArray[np.float64]:
    """Mean of exp(S(t)) over some windows, S being the sum of steps since the first.

    Parameters
    ----------
    t_us, pixel, step : ndarray, shape (M,)
        As `turning_steps` gives them.
    windows_us : ndarray of float64, shape (K, 2)
        Starts and ends, each end after its start.
    pixels : int

    Returns
    -------
    ndarray of float64, shape (K, pixels)
    """
    out = np.zeros((len(windows_us), pixels))
    _means(t_us, pixel, np.exp(step), windows_us, np.ones(pixels), np.full(pixels, -np.inf), out)
    return out
