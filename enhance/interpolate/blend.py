"""The analytic blend: a good picture without a network, and the place the network starts from."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from enhance.interpolate.candidates import Candidates, Span
from enhance.kernels.optical_flow import warp
from enhance.light import Image, encode, luma

#: Neighbourhood over which a warp is compared with the carried picture: wider than event noise, narrower than parts.
COMPARE_PIXELS = 5
#: Squared signal difference (0 to 1) that is still plain noise; it keeps two good candidates at equal weights.
NOISE = np.float32(1e-3)
#: Share of warps that fit: half, since the carried picture's errors are of another kind and so cancel. It sinks where
#: even the best warp is further (squared signal difference) from what the events tell than this, and than the two
#: carried pictures, which should agree, are from each other.
WARPED, MISFIT, DISAGREEMENT = np.float32(0.5), np.float32(0.01), np.float32(3)


def fit_of_warps(candidates: Candidates) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Compare the four warped candidates with the carried picture around each pixel.

    Parameters
    ----------
    candidates : Candidates

    Returns
    -------
    weights : ndarray of float32, shape (4, H, W)
        Non-negative, sum 1.
    share : ndarray of float32, shape (H, W)
        Of the warps in the blend, 0 to `WARPED`.
    """
    import cv2

    signal = encode("srgb", candidates.stack)
    target = carried_blend(candidates, signal)
    window = (COMPARE_PIXELS, COMPARE_PIXELS)
    distance = np.stack([cv2.GaussianBlur((s - target) ** 2, window, 0) for s in signal[2:]])
    # 1 / e^2: a warp that is off by twice as much counts a quarter
    weight = np.reciprocal(np.square(distance + NOISE))
    weight /= weight.sum(axis=0)
    allowed = MISFIT + DISAGREEMENT * cv2.GaussianBlur((signal[0] - signal[1]) ** 2, window, 0)
    return weight, WARPED * allowed / (allowed + (weight * distance).sum(axis=0))


def carried_blend(candidates: Candidates, stack: NDArray[np.float32]) -> NDArray[np.float32]:
    """Blend the two carried members of a stack by time, shape (H, W)."""
    w = np.float32(candidates.weight)
    return (1 - w) * stack[0] + w * stack[1]


def analytic_blend(candidates: Candidates) -> NDArray[np.float32]:
    """Blend all candidates without a network.

    Parameters
    ----------
    candidates : Candidates

    Returns
    -------
    ndarray of float32, shape (H, W)
        Luma, linear light.
    """
    weights, share = fit_of_warps(candidates)
    warped = (weights * candidates.stack[2:]).sum(axis=0)
    return share * warped + (1 - share) * carried_blend(candidates, candidates.stack)


def with_colour(picture: NDArray[np.float32], span: Span, candidates: Candidates) -> Image:
    """Give a luma picture the colour of the keys, carried along the motion.

    Parameters
    ----------
    picture : ndarray of float32, shape (H, W)
        Luma, linear light.
    span : Span
    candidates : Candidates

    Returns
    -------
    ndarray of float32, shape (H, W) or (H, W, 3)
        As the keys are.
    """
    if span.left.ndim == 2:
        return picture
    w = np.float32(candidates.weight)
    sides = [warp(key, flow) for key, flow in zip((span.left, span.right), candidates.flows, strict=True)]
    weights, _ = fit_of_warps(candidates)
    # Each side counts by the time to its key and by how well its own warp fits here.
    left, right = (1 - w) * weights[0] + 1e-6, w * weights[1] + 1e-6
    share = (left / (left + right))[..., None]
    colour = share * sides[0] + (1 - share) * sides[1]
    grey = np.maximum(luma(colour), 0)
    # In the dark the ratio is noise: the difference is added there instead of multiplied.
    floor = np.float32(0.02)
    return (colour + floor) * ((picture + floor) / (grey + floor))[..., None] - floor
