"""From a stored picture's code values to linear light: mosaic, curve, and the level of no light.

A dark frame, taken with the lens covered, is subtracted from every frame's light.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from enhance.errors import FramesError
from enhance.light import Image, Light
from enhance.read.frame_images import ImageFolder
from enhance.read.mosaic import demosaic, touched

#: Median light of a dark frame at the most: beyond, something shone on the sensor.
BRIGHTEST = 0.25


@dataclass(frozen=True)
class Development:
    """How code values become light.

    Parameters
    ----------
    light : Light
    mosaic : str
        As in `enhance.read.mosaic.check_mosaic`.
    dark : ndarray of float32, shape (H, W) or (H, W, 3), optional
        Linear light that every whole frame shows without any.
    """

    light: Light
    mosaic: str = "none"
    dark: Image | None = None

    def develop(self, codes: NDArray[np.generic], crop: tuple[slice, slice]) -> tuple[Image, NDArray[np.bool_] | None]:
        """Turn a whole picture into the linear light of its crop.

        Parameters
        ----------
        codes : ndarray, shape (H, W) or (H, W, 3)
        crop : tuple of slice
            Rows, columns.

        Returns
        -------
        image : ndarray of float32
        clipped : ndarray of bool, shape (H, W), or None
            Pixels at the ceiling, or filled in from one that is; None: none.
        """
        if self.mosaic == "none":
            codes = codes[crop]
            clipped = self.light.clipped(codes)
        else:
            clipped = self.light.clipped(codes)
            clipped = None if clipped is None else touched(clipped)[crop]
            codes = demosaic(codes, self.mosaic)[crop]
        image = self.light.to_linear(codes)
        return (image if self.dark is None else image - self.dark[crop]), clipped


def read_dark(path: Path, light: Light, size: tuple[int, int], channels: int, depth: int, mosaic: str) -> Image:
    """Read a dark frame.

    Parameters
    ----------
    path : Path
        One image, as the frames are: the same size, depth and channels.
    light : Light
        The frames' curve.
    size : tuple of int
        Width, height of the whole frame.
    channels, depth : int
        Of a stored frame.
    mosaic : str
        Of the frames.

    Returns
    -------
    ndarray of float32, shape (H, W) or (H, W, 3)
        Linear light that every frame shows without any.

    Raises
    ------
    FramesError
        If it cannot be read, is not like the frames, or is not dark.
    """
    if not path.is_file():
        raise FramesError(f"{path} is not there, or no file. Check frames.dark: one image, taken without light.")
    picture = ImageFolder(path)
    found = (*picture.size, picture.channels, picture.depth)
    if found != (*size, channels, depth):
        raise FramesError(
            f"{path}: the dark frame is {found[0]} x {found[1]}, {found[2]} channels of {found[3]} bit, the frames are "
            f"{size[0]} x {size[1]}, {channels} channels of {depth} bit. Take it with the same camera settings."
        )
    codes = picture.codes(0)
    dark = light.to_linear(codes if mosaic == "none" else demosaic(codes, mosaic))
    level = float(np.median(dark))
    if level > BRIGHTEST:
        raise FramesError(
            f"{path}: the dark frame's median is {level:.2f} of full scale, expected below {BRIGHTEST:g}: light fell "
            "on the sensor, or frames.white is too low. Cover the lens and take it again."
        )
    return dark
