"""Which pixels move: those near an event that is not alone."""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.kernels.support import support
from enhance.recording import Events

#: Side of the square around an event; with it a mask takes in what an edge uncovers.
_SQUARE = 5


def support_filter(
    events: Events,
    shape: tuple[int, int],
    window_us: int = 10_000,
    neighbours: int = 1,
    both_sides: bool = True,
) -> NDArray[np.bool_]:
    """Tell which events have company, and so are hardly noise.

    Parameters
    ----------
    events : Events
    shape : tuple of int
        H, W.
    window_us : int
        How close in time a neighbour must fire.
    neighbours : int
        How many different ones of the 8 neighbours are wanted.
    both_sides : bool
        Count those that fire after the event too, so that the first event at an edge is kept; False counts those before
        it only. Pure noise of rate L passes with 1 - exp(-16 L window) or 1 - exp(-8 L window), for one neighbour.

    Returns
    -------
    ndarray of bool, shape (N,)
    """
    return support(events.t_us, events.x, events.y, shape, window_us, neighbours, both_sides)


def moving_mask(events: Events, shape: tuple[int, int], window_us: int = 10_000) -> NDArray[np.bool_]:
    """Mark the 5x5 square around every event that is not alone.

    Parameters
    ----------
    events : Events
        From 10 ms before the span to 20 ms after it, in frame pixels, hot pixels dropped.
    shape : tuple of int
        H, W.
    window_us : int
        Of the noise filter.

    Returns
    -------
    ndarray of bool, shape (H, W)
    """
    kept = support_filter(events, shape, window_us)
    hit = np.zeros(shape, np.uint8)
    hit[events.y[kept], events.x[kept]] = 1
    return cv2.dilate(hit, np.ones((_SQUARE, _SQUARE), np.uint8)).astype(bool)
