"""Frames brought to one exposure, one gain and one level: light that means the same in every frame."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from enhance.light import Image, Light
from enhance.recording import Frame, FrameSource

#: Exposures within this part of their median are equal: a camera's table shows its own jitter.
EQUAL_EXPOSURES = 0.01


class LevelledFrames:
    """A `FrameSource` over another: an offset taken out of every frame, then each divided by its own scale.

    Parameters
    ----------
    source : FrameSource
    scale : ndarray of float64, shape (K,), optional
        How many times brighter each frame shows the same light; all 1 if left out.
    offset : ndarray of float32, optional
        Light that every frame shows besides, before the scale; broadcast against a frame.
    notes : sequence of str
        What was done, in words.
    """

    def __init__(
        self,
        source: FrameSource,
        scale: NDArray[np.float64] | None = None,
        offset: Image | None = None,
        notes: Sequence[str] = (),
    ) -> None:
        self.source = source
        self._scale = np.ones(len(source)) if scale is None else scale
        self._offset = offset
        self.start_us, self.end_us, self.gain = source.start_us, source.end_us, source.gain
        self.names, self.shape, self.full_size = source.names, source.shape, source.full_size
        self.crop_origin: tuple[int, int] = source.crop_origin
        self.light: Light = source.light
        self.notes: Sequence[str] = (*source.notes, *notes)

    def __len__(self) -> int:
        return len(self.source)

    def frame(self, index: int) -> Frame:
        """Decode one frame into levelled linear light."""
        frame, scale = self.source.frame(index), float(self._scale[index])
        image = frame.image
        if self._offset is not None:
            image = image - self._offset / np.float32(frame.scale)
        if scale != 1.0:
            image = image / np.float32(scale)
        return replace(frame, image=image, scale=frame.scale * scale)

    def close(self) -> None:
        """Release the file."""
        self.source.close()


def as_tabled(frames: FrameSource) -> FrameSource:
    """Bring frames to one exposure and gain by their own table: light goes with both.

    Parameters
    ----------
    frames : FrameSource

    Returns
    -------
    FrameSource
        The same where nothing changes from frame to frame.
    """
    exposure = (frames.end_us - frames.start_us).astype(np.float64)
    usual = float(np.median(exposure))
    # a frame that counts as sharp has no length to go by
    told = exposure.min() > 0 and np.any(np.abs(exposure - usual) > EQUAL_EXPOSURES * usual)
    bright = frames.gain * (exposure if told else 1.0)
    if np.all(bright == bright[0]):
        return frames
    # a value that really occurs: so most frames stay as they are
    reference = int(np.argsort(bright, kind="stable")[(len(bright) - 1) // 2])
    scale = bright / bright[reference]
    what = [f"exposures run from {exposure.min() / 1000:.3f} to {exposure.max() / 1000:.3f} ms"] * bool(told)
    what += [f"gains from {frames.gain.min():g} to {frames.gain.max():g}"] * bool(np.ptp(frames.gain))
    length = f"{exposure[reference] / 1000:.3f} ms at " if told else ""
    note = (
        f"{', '.join(what)}: all frames are brought to the light of {length}gain {frames.gain[reference]:g} "
        f"({int(np.sum(scale != 1))} of {len(scale)} are scaled, by {scale.min():.3f} to {scale.max():.3f})"
    )
    return LevelledFrames(frames, scale, notes=(note,))
