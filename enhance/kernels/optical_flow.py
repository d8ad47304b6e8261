"""Motion between two pictures seen by the frames alone, and pictures moved by it.

References
----------
Kroeger, Timofte, Dai, Van Gool, "Fast Optical Flow using Dense Inverse Search", ECCV 2016 (as OpenCV has it).
"""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.light import Image, encode, luma

_PRESETS = {
    "ultrafast": cv2.DISOPTICAL_FLOW_PRESET_ULTRAFAST,
    "fast": cv2.DISOPTICAL_FLOW_PRESET_FAST,
    "medium": cv2.DISOPTICAL_FLOW_PRESET_MEDIUM,
    "fine": cv2.DISOPTICAL_FLOW_PRESET_MEDIUM,
}
_INTERPOLATIONS = {"linear": cv2.INTER_LINEAR, "cubic": cv2.INTER_CUBIC}
#: The method's coarsest patches need this many pixels; smaller pictures are edge-padded.
_SMALLEST_SIDE = 32


def display_luma(linear: Image) -> NDArray[np.uint8]:
    """8-bit sRGB-encoded luma: steps that look alike count alike, in the dark as in the light.

    Parameters
    ----------
    linear : ndarray of float32, shape (H, W) or (H, W, 3)

    Returns
    -------
    ndarray of uint8, shape (H, W)
    """
    return np.rint(255.0 * encode("srgb", np.clip(luma(linear), 0.0, 1.0))).astype(np.uint8)


def flow_between(a_linear: Image, b_linear: Image, preset: str = "medium") -> NDArray[np.float32]:
    """Where each pixel of one picture has gone in another; the same for any number of threads.

    Parameters
    ----------
    a_linear, b_linear : ndarray of float32, shape (H, W) or (H, W, 3)
        Linear light.
    preset : str
        ultrafast, fast or medium; fine goes down to whole pixels, for small parts between two pictures that differ
        little: it takes more than twice the time of medium.

    Returns
    -------
    ndarray of float32, shape (H, W, 2)
        On the grid of `a`: what stands at p in `a` stands at p + flow (x, y) in `b`.
    """
    a, b = display_luma(a_linear), display_luma(b_linear)
    height, width = a.shape
    margin = ((0, max(0, _SMALLEST_SIDE - height)), (0, max(0, _SMALLEST_SIDE - width)))
    method = cv2.DISOpticalFlow.create(_PRESETS[preset])
    if preset == "fine":
        method.setFinestScale(0)
        # Patches a pixel apart are dense enough; smoothing them again costs more than it brings.
        method.setVariationalRefinementIterations(0)
    a, b = np.pad(a, margin, mode="edge"), np.pad(b, margin, mode="edge")
    # None, which the published types forget: an array of zeros would count as a first guess and change the result.
    flow = method.calc(a, b, None)  # type: ignore[call-overload]
    return np.ascontiguousarray(flow[:height, :width], dtype=np.float32)


def warp(image: NDArray[np.float32], flow: NDArray[np.float32], interpolation: str = "linear") -> NDArray[np.float32]:
    """Sample a picture at p + flow(p); what lies outside is its nearest edge pixel.

    Parameters
    ----------
    image : ndarray of float32, shape (H, W) or (H, W, C)
    flow : ndarray of float32, shape (H, W, 2)
        x, y in pixels.
    interpolation : str
        ``linear``, or ``cubic``: sharper, but it may overshoot at edges.

    Returns
    -------
    ndarray of float32, same shape as `image`
    """
    height, width = flow.shape[:2]
    x = flow[..., 0] + np.arange(width, dtype=np.float32)
    y = flow[..., 1] + np.arange(height, dtype=np.float32)[:, None]
    moved = cv2.remap(image, x, y, _INTERPOLATIONS[interpolation], borderMode=cv2.BORDER_REPLICATE)
    return np.asarray(moved, dtype=np.float32)


def frame_only_picture(image0: Image, image1: Image, weight: float) -> Image:
    """Make a picture between two, from the two alone.

    Parameters
    ----------
    image0, image1 : ndarray of float32, shape (H, W) or (H, W, 3)
        Linear light.
    weight : float
        0 at `image0`, 1 at `image1`.

    Returns
    -------
    ndarray of float32, same shape
        Linear light.
    """
    w = np.float32(weight)
    forward, backward = flow_between(image0, image1), flow_between(image1, image0)
    sides = moved_sides(image0, image1, forward, backward, w)
    return (1 - w) * sides[0] + w * sides[1]


def moved_sides(
    image0: Image, image1: Image, forward: NDArray[np.float32], backward: NDArray[np.float32], weight: np.float32
) -> tuple[Image, Image]:
    """Carry two pictures to one instant by their flows: for many instants of one span.

    Parameters
    ----------
    image0, image1 : ndarray of float32, shape (H, W) or (H, W, 3)
    forward, backward : ndarray of float32, shape (H, W, 2)
        From 0 to 1 and from 1 to 0.
    weight : float32
        0 at `image0`, 1 at `image1`.

    Returns
    -------
    tuple of ndarray of float32, same shape as the pictures
    """
    return warp(image0, weight * backward), warp(image1, (1 - weight) * forward)
