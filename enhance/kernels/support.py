"""Which events have company: the background-activity filter.

Noise comes alone, an edge sets off several neighbouring pixels within milliseconds.

References
----------
Delbruck, "Frame-free dynamic digital vision", Proc. Intl. Symposium on Secure-Life Electronics, 2008 (the filter of one
neighbour, looking back).
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray


@njit(cache=True, nogil=True)
def _collect(t_us, x, y, order, window_us, last, seen):  # type: ignore[no-untyped-def]
    # One bit for each of the 8 neighbours that fired within the window; `last` has a margin of one pixel. The pass
    # forward sees the neighbours before an event, the pass backward those after it.
    for step in range(x.size):
        i = step if order > 0 else x.size - 1 - step
        row, column, now = y[i] + 1, x[i] + 1, t_us[i] * order
        bits = 0
        bit = 1
        for dy in range(-1, 2):
            for dx in range(-1, 2):
                if dy != 0 or dx != 0:
                    if now - last[row + dy, column + dx] <= window_us:
                        bits |= bit
                    bit <<= 1
        seen[i] |= bits
        last[row, column] = now


@njit(cache=True, nogil=True)
def _enough(seen, neighbours, kept):  # type: ignore[no-untyped-def]
    for i in range(seen.size):
        bits = seen[i]
        count = 0
        while bits:
            bits &= bits - 1
            count += 1
        kept[i] = count >= neighbours


def support(
    t_us: NDArray[np.int64],
    x: NDArray[np.uint16],
    y: NDArray[np.uint16],
    shape: tuple[int, int],
    window_us: int,
    neighbours: int,
    both_sides: bool = True,
) -> NDArray[np.bool_]:
    """Tell which events have enough of their 8 neighbours firing close in time.

    Parameters
    ----------
    t_us, x, y : ndarray, shape (N,)
        Sorted by time.
    shape : tuple of int
        H, W.
    window_us : int
        How far apart in time counts as close.
    neighbours : int
        k: how many different neighbours are wanted.
    both_sides : bool
        Count neighbours that fire after the event too, so that the first event at an edge is kept. False: only those
        before it, as a filter in the sensor would.

    Returns
    -------
    ndarray of bool, shape (N,)
        For noise of rate L a pixel and k = 1, a share of 1 - exp(-8 L window) is kept looking back only, of
        1 - exp(-16 L window) looking both ways.
    """
    seen = np.zeros(t_us.size, np.int64)
    # half the range: a difference to it must not wrap
    never = np.iinfo(np.int64).min // 2
    for order in (1, -1) if both_sides else (1,):
        last = np.full((shape[0] + 2, shape[1] + 2), never, np.int64)
        _collect(t_us, x, y, order, window_us, last, seen)
    kept = np.empty(t_us.size, np.bool_)
    _enough(seen, neighbours, kept)
    return kept
