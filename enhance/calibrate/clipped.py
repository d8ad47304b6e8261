"""Which pixels of a captured frame say how light it was: those at the ceiling or in the dark do not."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from enhance.light import luma
from enhance.recording import Frame

#: Light as captured (1 = full scale) below which the frame's noise and level, above which its ceiling, spoil a
#: logarithm.
USABLE_LIGHT = (0.02, 0.97)


def tells_light(frame: Frame) -> NDArray[np.bool_]:
    """Find the pixels whose logarithm means something.

    Parameters
    ----------
    frame : Frame
        Grey or colour.

    Returns
    -------
    ndarray of bool, shape (H, W)
        Neither in the dark nor, in any colour, at the ceiling.
    """
    low, high = USABLE_LIGHT
    captured = luma(frame.image) * np.float32(frame.scale)
    usable: NDArray[np.bool_] = (captured > low) & (captured < high)
    return usable if frame.clipped is None else usable & ~frame.clipped


@dataclass
class ClippedCount:
    """How many pixels of some frames stood at the ceiling or at the floor, counted frame by frame."""

    frames: int = 0
    pixels: int = 0
    ceiling: int = 0
    floor: int = 0
    most: int = 0
    most_at_us: int | None = None

    def add(self, frame: Frame) -> None:
        """Count one frame's."""
        ceiling = 0 if frame.clipped is None else int(frame.clipped.sum())
        dark = frame.image <= 0
        self.frames += 1
        self.pixels += int(np.prod(frame.image.shape[:2]))
        self.ceiling += ceiling
        self.floor += int((dark if dark.ndim == 2 else dark.any(axis=-1)).sum())
        if ceiling > self.most:
            self.most, self.most_at_us = ceiling, frame.time_us
