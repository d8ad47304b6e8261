"""Sums over events, and the event double integral, one pass over the events.

A pixel's log light is a staircase: each event adds ``+c_positive`` or ``-c_negative``. Integrals over the exponential
of a staircase are finite sums, so nothing here is approximated. Because a step multiplies the light by a fixed number,
one multiplication an event replaces the exponential.

References
----------
Pan, Scheerlinck, Yu, Hartley, Liu, Dai, "Bringing a Blurry Frame Alive at High Frame-Rate with an Event Camera",
CVPR 2019.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray


@njit(cache=True, nogil=True)
def _count(x, y, polarity, counts):  # type: ignore[no-untyped-def]
    for i in range(x.size):
        counts[0 if polarity[i] > 0 else 1, y[i], x[i]] += 1


@njit(cache=True, nogil=True)
def _exponential_mean(t_us, x, y, polarity, start_us, end_us, up, down, gain, area):  # type: ignore[no-untyped-def]
    # gain: exp(S) now; area: integral of exp(S) so far, counted as if the present gain held until the end,
    # so that an event only has to correct the rest of the exposure.
    length = end_us - start_us
    for i in range(x.size):
        row, column = y[i], x[i]
        before = gain[row, column]
        after = before * (up if polarity[i] > 0 else down)
        gain[row, column] = after
        area[row, column] += (after - before) * (end_us - t_us[i]) / length


def event_counts(
    x: NDArray[np.uint16], y: NDArray[np.uint16], polarity: NDArray[np.int8], shape: tuple[int, int]
) -> NDArray[np.int32]:
    """Count the positive and the negative events of each pixel.

    Parameters
    ----------
    x, y, polarity : ndarray, shape (N,)
    shape : tuple of int
        H, W.

    Returns
    -------
    ndarray of int32, shape (2, H, W)
        Positive, negative.
    """
    counts = np.zeros((2, *shape), np.int32)
    _count(x, y, polarity, counts)
    return counts


def exponential_mean(
    t_us: NDArray[np.int64],
    x: NDArray[np.uint16],
    y: NDArray[np.uint16],
    polarity: NDArray[np.int8],
    interval_us: tuple[int, int],
    contrast: tuple[float, float],
    shape: tuple[int, int],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Mean over an interval of exp(S(t)), S being the sum of events since its start.

    Parameters
    ----------
    t_us, x, y, polarity : ndarray, shape (N,)
        Events inside the interval, sorted.
    interval_us : tuple of int
        Start and end; the end lies after the start.
    contrast : tuple of float
        Thresholds, positive and negative.
    shape : tuple of int
        H, W.

    Returns
    -------
    mean : ndarray of float64, shape (H, W)
        ``(1 / T) * integral of exp(S(t)) dt``.
    gain : ndarray of float64, shape (H, W)
        ``exp(S(end))``.
    """
    gain = np.ones(shape)
    area = np.ones(shape)
    up, down = math.exp(contrast[0]), math.exp(-contrast[1])
    _exponential_mean(t_us, x, y, polarity, interval_us[0], interval_us[1], up, down, gain, area)
    return area, gain
