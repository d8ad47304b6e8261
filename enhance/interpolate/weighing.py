"""How candidates are weighed without a network: arrays in, arrays out."""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.light import encode

Picture = NDArray[np.float32]

#: Neighbourhood over which a warp is compared with the carried picture: wider than event noise, narrower than parts.
COMPARE_PIXELS = (5, 5)
#: Squared signal difference (0 to 1) that is still plain noise; it keeps two good candidates at equal weights.
NOISE = np.float32(1e-3)
#: A warp that is off by twice as much counts 1 / 2^(2 * this).
SHARPNESS = np.float32(1.5)
#: The share of warps sinks where even the best one is further (squared signal difference) from what the events tell
#: than this, and than the two carried pictures, which should agree, are from each other.
MISFIT = np.float32(0.002)
#: Events that count as much as all of the time does when the carried pair is weighed.
TIME_EVENTS = np.float32(2)


def carried_by_events(pair: Picture, counts: Picture, weight: float) -> Picture:
    """Blend the carried pair by where in the span its events lie.

    The error of a threshold grows with the events that were counted, not with time: a key is right up to the first.

    Parameters
    ----------
    pair : ndarray of float32, shape (2, H, W)
        Carried from the left and from the right.
    counts : ndarray of float32, shape (2, H, W)
        Events from the left key to the instant, and from it to the right key.
    weight : float
        Position in the span: it decides where there are few events.

    Returns
    -------
    ndarray of float32, shape (H, W)
    """
    # f = (N_before + k w) / (N_before + N_after + k)
    share = (counts[0] + TIME_EVENTS * np.float32(weight)) / (counts[0] + counts[1] + TIME_EVENTS)
    return (1 - share) * pair[0] + share * pair[1]


def weigh_warps(warps: Picture, target: Picture, apart: Picture) -> tuple[Picture, Picture]:
    """Compare warped pictures with the carried one around each pixel.

    Parameters
    ----------
    warps : ndarray of float32, shape (K, H, W)
        Linear light.
    target : ndarray of float32, shape (H, W)
        The carried picture they should agree with.
    apart : ndarray of float32, shape (2, H, W)
        The carried pair.

    Returns
    -------
    weights : ndarray of float32, shape (K, H, W)
        Non-negative, sum 1.
    share : ndarray of float32, shape (H, W)
        Of the warps in the blend, 0 to 1. They are preferred wherever they fit: their errors are those of motion and
        small there, while the carried picture has the noise of every event.
    """
    signal, wanted, pair = (encode("srgb", a) for a in (warps, target, apart))
    distance = np.stack([cv2.GaussianBlur((s - wanted) ** 2, COMPARE_PIXELS, 0) for s in signal])
    weight = np.power(distance + NOISE, -SHARPNESS)
    weight /= weight.sum(axis=0)
    allowed = MISFIT + cv2.GaussianBlur((pair[0] - pair[1]) ** 2, COMPARE_PIXELS, 0)
    return weight, allowed / (allowed + (weight * distance).sum(axis=0))


def blend_warps(warps: Picture, target: Picture, apart: Picture) -> Picture:
    """Blend warped pictures with the carried one by `weigh_warps`, shape (H, W)."""
    weights, share = weigh_warps(warps, target, apart)
    return share * (weights * warps).sum(axis=0) + (1 - share) * target
