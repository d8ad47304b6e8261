"""Linear light to what a file stores: 16-bit levels of the frames' own curve, or the display signal of a video."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from enhance.errors import WriteError
from enhance.light import Image, Light, encode


def own_levels(linear: Image, light: Light) -> NDArray[np.uint16]:
    """16-bit levels in the frames' own curve.

    Parameters
    ----------
    linear : ndarray of float32, shape (H, W) or (H, W, 3)
        Linear light.
    light : Light
        The frames' own curve.

    Returns
    -------
    ndarray of uint16, same shape
        ``code / full scale x 65535``, rounded and clipped.

    Raises
    ------
    WriteError
        If a value is not finite.
    """
    codes = light.to_codes(_finite(linear)).astype(np.float64)
    return np.clip(np.rint(codes / light.full_scale * 65535.0), 0, 65535).astype(np.uint16)


def display_signal(linear: Image) -> Image:
    """Signal of a BT.709 video.

    Parameters
    ----------
    linear : ndarray of float32, shape (H, W) or (H, W, 3)

    Returns
    -------
    ndarray of float32, same shape
        0 to 1.

    Raises
    ------
    WriteError
        If a value is not finite.
    """
    return encode("bt709", np.clip(_finite(linear), 0.0, 1.0))


def limited_yuv(signal: Image) -> NDArray[np.uint8]:
    """8-bit limited-range Y'CbCr 4:2:0 of a display signal, with the BT.709 matrix.

    The conversion is written out here because the usual library call takes the matrix of BT.601 whatever the tags say.

    Parameters
    ----------
    signal : ndarray of float32, shape (H, W) or (H, W, 3)
        0 to 1; H and W even.

    Returns
    -------
    ndarray of uint8, shape (H * 3 / 2, W)
        The three planes one after the other.

    References
    ----------
    Recommendation ITU-R BT.709: Y' = 0.2126 R' + 0.7152 G' + 0.0722 B', Cb = (B' - Y') / 1.8556,
    Cr = (R' - Y') / 1.5748, stored as 16 + 219 Y', 128 + 224 Cb, 128 + 224 Cr.
    """
    height, width = signal.shape[:2]
    planes = np.full(height * width * 3 // 2, 128, dtype=np.uint8)
    quarter = height * width // 4
    y = signal if signal.ndim == 2 else signal @ np.array([0.2126, 0.7152, 0.0722], dtype=np.float32)
    planes[: 4 * quarter] = np.rint(16.0 + 219.0 * y).astype(np.uint8).ravel()
    if signal.ndim == 3:
        blue, red = (signal[..., 2] - y) / 1.8556, (signal[..., 0] - y) / 1.5748
        planes[4 * quarter : 5 * quarter] = np.rint(128.0 + 224.0 * _halve(blue)).astype(np.uint8).ravel()
        planes[5 * quarter :] = np.rint(128.0 + 224.0 * _halve(red)).astype(np.uint8).ravel()
    return planes.reshape(height * 3 // 2, width)


def _halve(plane: Image) -> Image:
    """Halve a colour plane; its samples stand on the left column of each pair, as H.264 takes for granted."""
    left = np.concatenate([plane[:, :1], plane[:, 1:-1:2]], axis=1)
    wide = 0.25 * left + 0.5 * plane[:, 0::2] + 0.25 * plane[:, 1::2]
    return 0.5 * (wide[0::2] + wide[1::2])


def _finite(linear: Image) -> Image:
    if np.isfinite(linear).all():
        return linear
    row, column = np.argwhere(~np.isfinite(linear))[0][:2]
    raise WriteError(
        f"A picture holds a value that is not finite at row {row}, column {column}; expected linear light. "
        'Nothing of it was written: run the job again with network.use = "off", and report it if it stays.'
    )
