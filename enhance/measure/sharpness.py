"""Sharpness of a picture as one figure: it falls with blur, and is only comparable between pictures of one scene."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from enhance.errors import MeasureError
from enhance.light import LUMA_BT709


def sharpness(codes: NDArray[np.generic], full_scale: float, mask: NDArray[np.bool_] | None = None) -> float | None:
    """Root mean square slope, in percent of full scale a pixel.

    Noise counts as slope: compare pictures of one scene with like noise.

    Parameters
    ----------
    codes : ndarray, shape (H, W) or (H, W, 3)
        Code values; colour is weighed to luma.
    full_scale : float
        Code value of full scale.
    mask : ndarray of bool, shape (H, W), optional
        Pixels that count.

    Returns
    -------
    float or None
        None where no pixel counts.

    Raises
    ------
    MeasureError
        If the picture is smaller than 3x3 or the mask has another shape.
    """
    image = grey(codes)
    if min(image.shape) < 3 or (mask is not None and mask.shape != image.shape):
        raise MeasureError(
            f"The picture is {image.shape}, the mask {None if mask is None else mask.shape}; "
            "expected at least 3x3 and the same shape."
        )
    # central differences: half the slope's noise of neighbouring ones, and one value for each inner pixel
    across = (image[1:-1, 2:] - image[1:-1, :-2]) / 2.0
    down = (image[2:, 1:-1] - image[:-2, 1:-1]) / 2.0
    energy = across**2 + down**2
    counted = energy if mask is None else energy[mask[1:-1, 1:-1]]
    return float(100.0 * np.sqrt(counted.mean()) / full_scale) if counted.size else None


def grey(codes: NDArray[np.generic]) -> NDArray[np.float64]:
    """Code values as float64, shape (H, W); colour weighed to luma."""
    image = codes.astype(np.float64)
    return image if image.ndim == 2 else image @ np.asarray(LUMA_BT709)
