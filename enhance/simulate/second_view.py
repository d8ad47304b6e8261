"""An event sensor beside the frame camera, or behind a splitter: its own pixels, its own look at the scene."""

from __future__ import annotations

from dataclasses import dataclass, field

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.light import Image
from enhance.view import View

#: Samples an event pixel along each axis for every frame pixel it is wide: its light is the mean over its area.
SAMPLES_A_PIXEL = 1.5


@dataclass(frozen=True)
class SecondView:
    """What an event sensor of another size sees of a picture that the frames show whole.

    Parameters
    ----------
    view : View
        Event pixel to frame pixel: the truth that registration looks for.
    size : tuple of int
        Width, height of the event sensor.
    """

    view: View
    size: tuple[int, int]
    _map: NDArray[np.float32] = field(init=False, repr=False)
    _samples: int = field(init=False, repr=False)

    def __post_init__(self) -> None:
        samples = max(1, int(np.ceil(SAMPLES_A_PIXEL * self.view.pitch(self.size))))
        width, height = self.size
        # centres of samples x samples equal parts of each event pixel
        x, y = ((np.arange(n * samples) + 0.5) / samples - 0.5 for n in (width, height))
        points = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
        there = np.nan_to_num(self.view.to_frame(points), nan=0.0)
        object.__setattr__(self, "_map", there.reshape(height * samples, width * samples, 2).astype(np.float32))
        object.__setattr__(self, "_samples", samples)

    def show(self, picture: Image) -> Image:
        """Light on the event pixels, (H, W) or (H, W, 3); beyond the picture's border it goes on as in a mirror."""
        x, y = self._map[..., 0], self._map[..., 1]
        fine = cv2.remap(picture, x, y, cv2.INTER_LINEAR, borderMode=cv2.BORDER_REFLECT_101)
        if self._samples > 1:
            fine = cv2.resize(fine, self.size, interpolation=cv2.INTER_AREA)
        return np.asarray(fine, np.float32)
