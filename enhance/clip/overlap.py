"""Pictures where the event sensor sees only a part: outside it they are made from the frames alone."""

from __future__ import annotations

from dataclasses import replace

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.recording import Picture

#: The two are faded into each other over about this many pixels, all of them inside the part that is seen.
FADE_PX = 4


def outside_by_frames(picture: Picture, alone: Picture, seen: NDArray[np.bool_]) -> Picture:
    """Take a picture by its events where the sensor looks, and by the frames alone where it does not.

    Parameters
    ----------
    picture : Picture
        By the events; says nothing where the sensor does not look.
    alone : Picture
        Of the same instant, by the frames.
    seen : ndarray of bool, shape (H, W)

    Returns
    -------
    Picture
    """
    share = share_of_events(seen)
    over = share if picture.image.ndim == 2 else share[..., None]
    image = over * picture.image + (1 - over) * alone.image
    if picture.error is None or alone.error is None:
        return replace(picture, image=image, error=None)
    return replace(picture, image=image, error=share * picture.error + (1 - share) * alone.error)


def share_of_events(seen: NDArray[np.bool_]) -> NDArray[np.float32]:
    """How much of each pixel is made by events, float32, shape (H, W): 0 wherever the sensor does not look."""
    around = cv2.copyMakeBorder(seen.astype(np.uint8), 1, 1, 1, 1, cv2.BORDER_REPLICATE)
    away = np.asarray(cv2.distanceTransform(around, cv2.DIST_L2, 3), np.float32)[1:-1, 1:-1]
    return np.clip((away - 0.5) / FADE_PX, 0, 1).astype(np.float32)
