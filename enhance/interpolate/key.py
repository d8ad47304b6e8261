"""Candidates for a key itself: what its neighbours and its own surroundings in time say of it.

The same stack and the same network as for inserted pictures, with other members in three places:

========  =================================================================================================
carried   its neighbours, carried to the key along the events
moved     its neighbours, warped by the motion between them and the key
straight  the frame as captured, and the key by its own double integral alone, without its neighbours: the best
          there is where nothing moves, and where thresholds are wrong
steadied  the key itself, steadied over the time around it
========  =================================================================================================

and the key by the multi-frame double integral as what the network starts from.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from enhance.interpolate.candidates import Candidates, Span
from enhance.interpolate.steadied import steadied
from enhance.interpolate.weighing import carried_by_events
from enhance.kernels.optical_flow import warp
from enhance.light import LOG_FLOOR, Image, luma


def key_candidates(
    key: NDArray[np.float32],
    captured: NDArray[np.float32],
    alone: NDArray[np.float32],
    time_us: int,
    span: Span,
    exposed: NDArray[np.float32],
) -> Candidates:
    """Make all candidates of a key.

    Parameters
    ----------
    key : ndarray of float32, shape (H, W)
        Luma of the key by the multi-frame double integral, linear light.
    captured, alone : ndarray of float32, shape (H, W)
        Luma of the frame, and of the key by the double integral of this frame alone.
    time_us : int
        Its time.
    span : Span
        From the neighbour before it to the one after it; the key itself stands in for one that is missing.
    exposed : ndarray of float32, shape (H, W)
        Events within its exposure.

    Returns
    -------
    Candidates
    """
    pair, counts = span.carried(time_us)
    flows = span.flows_from(key, "fine")
    moved = [warp(side, flow, "cubic") for side, flow in zip(span.luma, flows, strict=True)]
    steady = steadied(key, flows, time_us, span.interval_us, span.events, span.contrast)
    weight = span.weight(time_us)
    return Candidates(
        stack=np.stack([*pair, *moved, captured, alone, steady]),
        carried=carried_by_events(pair, counts, weight),
        weight=weight,
        counts=counts,
        exposed=np.stack([exposed, exposed]),
        mismatch=span.mismatch,
        flows=flows,
        key=key,
    )


def in_colour(key: Image, refined: NDArray[np.float32]) -> Image:
    """Give a refined luma picture the key's own colour.

    Parameters
    ----------
    key : ndarray of float32, shape (H, W) or (H, W, 3)
    refined : ndarray of float32, shape (H, W)

    Returns
    -------
    ndarray of float32, as the key is
    """
    if key.ndim == 2:
        return refined
    ratio = (np.maximum(refined, 0) + LOG_FLOOR) / (np.maximum(luma(key), 0) + LOG_FLOOR)
    coloured = (np.maximum(key, 0) + LOG_FLOOR) * ratio[..., None] - LOG_FLOOR
    return np.asarray(coloured, dtype=np.float32)
