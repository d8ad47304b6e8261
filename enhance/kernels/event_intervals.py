"""Time between the events of a pixel."""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray


@njit(cache=True, nogil=True)
def _intervals(t_us, x, y, polarity, last, sign, out):  # type: ignore[no-untyped-def]
    count = 0
    for i in range(x.size):
        row, column = y[i], x[i]
        if sign[row, column] == polarity[i]:
            out[count] = t_us[i] - last[row, column]
            count += 1
        last[row, column] = t_us[i]
        sign[row, column] = polarity[i]
    return count


def burst_intervals(
    t_us: NDArray[np.int64],
    x: NDArray[np.uint16],
    y: NDArray[np.uint16],
    polarity: NDArray[np.int8],
    shape: tuple[int, int],
) -> NDArray[np.int64]:
    """Time from each event to the next of its pixel, where that has the same sign.

    Parameters
    ----------
    t_us, x, y, polarity : ndarray, shape (N,)
        Sorted by time.
    shape : tuple of int
        H, W.

    Returns
    -------
    ndarray of int64, shape (M,)
        Microseconds.
    """
    out = np.empty(len(t_us), np.int64)
    count = _intervals(t_us, x, y, polarity, np.zeros(shape, np.int64), np.zeros(shape, np.int8), out)
    return out[:count]
