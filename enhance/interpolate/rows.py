"""The rows of a rolling shutter brought to one instant: what events carry, and what motion moves.

Each row of a deblurred frame stands at its own instant. Carried by the events it comes to the frame's time, with the
noise of every event on the way; warped by the motion from there it is free of that, and wrong where something is
hidden. Both, and the carried picture steadied over the time around it, are weighed as between keys.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from enhance.interpolate.key import in_colour
from enhance.interpolate.steadied import steadied
from enhance.interpolate.weighing import blend_warps
from enhance.kernels.optical_flow import flow_between, warp
from enhance.light import Image, luma
from enhance.recording import Contrast, Events

#: The frame's own light is the nearer evidence: it counts this many times the steadied picture.
OWN = 2


def rows_at_one_instant(
    carried: NDArray[np.float32],
    rowed: Image,
    time_us: int,
    neighbours: tuple[NDArray[np.float32], NDArray[np.float32]] | None,
    interval_us: tuple[int, int],
    events: Events,
    contrast: Contrast,
) -> Image:
    """Make a frame's picture at its time from the sharp picture whose rows stand at their own.

    Parameters
    ----------
    carried : ndarray of float32, shape (H, W)
        Luma of the picture at its time by the events alone, linear light.
    rowed : ndarray of float32, shape (H, W) or (H, W, 3)
        The sharp picture, each row at its own instant.
    time_us : int
        The frame's time.
    neighbours : tuple of ndarray of float32, shape (H, W), or None
        The carried pictures of the keys before and after it; None where there are none, or events do not lead there.
    interval_us : tuple of int
        Their times.
    events : Events
        Those of the interval, and with a ramp those up to `ramp_us` before and twice that after.
    contrast : Contrast

    Returns
    -------
    ndarray of float32, shape as `rowed`
    """
    moved = warp(rowed, flow_between(carried, luma(rowed), "fine"), "cubic")
    warps = [luma(moved)] * OWN
    if neighbours is not None:
        flows = (flow_between(carried, neighbours[0], "fine"), flow_between(carried, neighbours[1], "fine"))
        warps.append(steadied(carried, flows, time_us, interval_us, events, contrast))
    light = blend_warps(np.stack(warps), carried, np.stack([carried, carried]))
    return in_colour(moved, light)
