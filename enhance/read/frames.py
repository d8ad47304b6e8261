"""Frames of a folder or a video as a `FrameSource`: times, crop and light are the same for both."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from enhance.errors import FramesError, JobError
from enhance.light import Image, Light, check_curve
from enhance.read.frame_images import ImageFolder
from enhance.read.frame_times import Exposures, from_stamps, read_table
from enhance.read.frame_video import Video
from enhance.read.level import Development, read_dark
from enhance.read.mosaic import check_mosaic
from enhance.recording import Frame
from enhance.settings import FramesSettings


class Pictures(Protocol):
    """Whole pictures by index, as code values."""

    names: Sequence[str]
    size: tuple[int, int]
    channels: int
    depth: int
    notes: list[str]

    def codes(self, index: int) -> NDArray[np.generic]:
        """Decode one picture, shape (H, W) or (H, W, 3)."""
        ...

    def close(self) -> None:
        """Release the file."""
        ...


class FileFrames:
    """A `FrameSource` over pictures of a file; see `enhance.recording.FrameSource`."""

    def __init__(
        self,
        pictures: Pictures,
        exposures: Exposures,
        development: Development,
        crop: tuple[int, int, int, int],
        notes: Sequence[str],
    ) -> None:
        self._pictures, self._development = pictures, development
        self.start_us, self.end_us, self.gain = exposures.start_us, exposures.end_us, exposures.gain
        self.names: Sequence[str] = tuple(pictures.names)
        self.full_size = pictures.size
        x, y, width, height = crop
        self.crop_origin = (x, y)
        self._crop = (slice(y, y + height), slice(x, x + width))
        colour = pictures.channels == 3 or development.mosaic != "none"
        self.shape: tuple[int, ...] = (height, width) + ((3,) if colour else ())
        self.light = development.light
        self.notes: Sequence[str] = tuple(notes)

    def __len__(self) -> int:
        return len(self.names)

    def frame(self, index: int) -> Frame:
        """Decode one frame into linear light."""
        if not 0 <= index < len(self):
            raise IndexError(f"frame {index} of {len(self)}")
        image, clipped = self._development.develop(self._pictures.codes(index), self._crop)
        return Frame(image, int(self.start_us[index]), int(self.end_us[index]), clipped=clipped)

    def close(self) -> None:
        """Release the file."""
        self._pictures.close()


def open_frame_source(settings: FramesSettings) -> FileFrames:
    """Open a folder or a video; see `enhance.read.open_frames`."""
    source = settings.source
    if not source.exists():
        raise FramesError(f"{source} is not there. Check frames.source.")
    pictures: ImageFolder | Video = ImageFolder(source) if source.is_dir() else Video(source)
    try:
        light = _light(settings, pictures, pictures.light_curve if isinstance(pictures, Video) else None)
        crop = _crop(settings, pictures.size)
        exposures = _exposures(settings, pictures)
        check_mosaic(settings.mosaic, pictures.channels, pictures.size)
        development = Development(light, settings.mosaic, _dark(settings, pictures, light))
    except BaseException:
        pictures.close()
        raise
    return FileFrames(pictures, exposures, development, crop, [*pictures.notes, *exposures.notes])


def _exposures(settings: FramesSettings, pictures: ImageFolder | Video) -> Exposures:
    if isinstance(pictures, ImageFolder) or settings.times is not None:
        return read_table(settings, pictures.names)
    return from_stamps(settings, pictures.stamps_us)


def _dark(settings: FramesSettings, pictures: Pictures, light: Light) -> Image | None:
    if settings.dark is None:
        return None
    return read_dark(settings.dark, light, pictures.size, pictures.channels, pictures.depth, settings.mosaic)


def _light(settings: FramesSettings, pictures: Pictures, tagged: str | None) -> Light:
    curve = settings.light_curve or tagged
    if curve is None:
        raise JobError(
            f"frames.light_curve is missing, and {settings.source} does not tell it. Give "
            '"linear", "srgb", "bt709" or "gamma 2.2": averages are only right in linear light.'
        )
    try:
        check_curve(curve)
    except ValueError as error:
        raise JobError(f"frames.light_curve: {error}.") from error
    highest = 2**pictures.depth - 1
    black = 0.0 if settings.black is None else float(settings.black)
    white = float(highest) if settings.white is None else float(settings.white)
    if not 0 <= black < white <= highest:
        raise JobError(
            f"frames.black is {black:g} and frames.white is {white:g}; expected 0 <= black < white <= {highest}, "
            f"the highest code of these {pictures.depth}-bit pictures."
        )
    return Light(curve, black, white)


def _crop(settings: FramesSettings, size: tuple[int, int]) -> tuple[int, int, int, int]:
    if settings.crop is None:
        return 0, 0, *size
    x, y, width, height = settings.crop
    if x < 0 or y < 0 or width < 1 or height < 1 or x + width > size[0] or y + height > size[1]:
        raise JobError(
            f"frames.crop [{x}, {y}, {width}, {height}] does not lie inside the frames of {size[0]} x {size[1]}; "
            "it is x, y, width, height of the part to keep."
        )
    return x, y, width, height
