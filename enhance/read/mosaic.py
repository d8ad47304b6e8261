"""A colour mosaic: raw pictures in which each pixel saw one colour, turned into R, G, B."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from enhance.errors import FramesError

#: OpenCV names a mosaic by the second row's second and third pixels, we by the first row's first two and the second's.
_OPENCV = {"RGGB": "BG", "BGGR": "RG", "GRBG": "GB", "GBRG": "GR"}


def check_mosaic(mosaic: str, channels: int, size: tuple[int, int]) -> None:
    """See that pictures can be a mosaic.

    Parameters
    ----------
    mosaic : str
        ``none``, ``RGGB``, ``BGGR``, ``GRBG`` or ``GBRG``: the colours of the top left two by two pixels, row by row.
    channels : int
        Of a stored picture.
    size : tuple of int
        Width, height.

    Raises
    ------
    FramesError
        If they have colours already, or are too small to hold the pattern.
    """
    if mosaic == "none":
        return
    if channels != 1:
        raise FramesError(
            f"frames.mosaic is {mosaic}, but the pictures have {channels} channels: they are colour pictures already. "
            'Expected raw pictures of one channel; leave the key out or write "none".'
        )
    if min(size) < 4:
        raise FramesError(
            f"frames.mosaic is {mosaic}, but the pictures are {size[0]} x {size[1]}; expected at least 4 x 4, two "
            "pixels of every colour each way. Leave the key out."
        )


def demosaic(codes: NDArray[np.generic], mosaic: str) -> NDArray[np.generic]:
    """Fill in the two colours each pixel did not see, from its neighbours.

    Parameters
    ----------
    codes : ndarray of uint8 or uint16, shape (H, W)
        A whole picture: a crop comes after, so that the pattern always starts at its corner.
    mosaic : str
        As in `check_mosaic`, not ``none``.

    Returns
    -------
    ndarray, same type, shape (H, W, 3)
        R, G, B; a pixel's own colour is kept.
    """
    import cv2

    raw: NDArray[np.integer[Any]] = np.asarray(codes)
    return np.asarray(cv2.cvtColor(raw, getattr(cv2, f"COLOR_Bayer{_OPENCV[mosaic]}2RGB")))


def touched(seen: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Spread marked raw pixels, (H, W), to all whose colour was filled in from them: their eight neighbours."""
    import cv2

    return np.asarray(cv2.dilate(seen.astype(np.uint8), np.ones((3, 3), np.uint8)) > 0)
