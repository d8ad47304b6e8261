"""Which pixels move: those near an event that is not alone."""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.kernels.support import support
from enhance.recording import Events

#: Side of the square around an event; with it a mask takes in what an edge uncovers.
_SQUARE = 5


#: Lone events may cover this share of the picture before they are left out of what counts as moving.
STRAY_SHARE = 0.05


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
    """Mark the 5x5 square around every event; where noise is thick, around every event that is not alone.

    The noise filter also takes the sparse events of slow edges, and the figures of slow scenes with them. It is used
    where the lone events would otherwise declare more than `STRAY_SHARE` of the picture to be moving.

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
    every = _squares(events, shape)
    supported = _squares(events.keep(support_filter(events, shape, window_us)), shape)
    stray = int(every.sum()) - int(supported.sum())
    return supported if stray > STRAY_SHARE * every.size else every


def _squares(events: Events, shape: tuple[int, int]) -> NDArray[np.bool_]:
    hit = np.zeros(shape, np.uint8)
    hit[events.y, events.x] = 1
    return cv2.dilate(hit, np.ones((_SQUARE, _SQUARE), np.uint8)).astype(bool)
