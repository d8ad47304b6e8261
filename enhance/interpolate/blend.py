"""The analytic blend: a good picture without a network, and the place the network starts from."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from enhance.interpolate.candidates import Candidates, Span
from enhance.interpolate.weighing import blend_warps, weigh_warps
from enhance.kernels.optical_flow import warp
from enhance.light import Image, luma


def analytic_blend(candidates: Candidates) -> NDArray[np.float32]:
    """Blend all candidates without a network; a key stays as its own double integral has it.

    Parameters
    ----------
    candidates : Candidates

    Returns
    -------
    ndarray of float32, shape (H, W)
        Luma, linear light.
    """
    if candidates.key is not None:
        return candidates.key
    return blend_warps(candidates.stack[2:], candidates.carried, candidates.stack[:2])


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
    weights, _ = weigh_warps(candidates.stack[2:], candidates.carried, candidates.stack[:2])
    # Each side counts by the time to its key and by how well its own warp fits here.
    left, right = (1 - w) * weights[0] + 1e-6, w * weights[1] + 1e-6
    share = (left / (left + right))[..., None]
    colour = share * sides[0] + (1 - share) * sides[1]
    grey = np.maximum(luma(colour), 0)
    # In the dark the ratio is noise: the difference is added there instead of multiplied.
    floor = np.float32(0.02)
    return (colour + floor) * ((picture + floor) / (grey + floor))[..., None] - floor
