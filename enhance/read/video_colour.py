"""A video's code values: depth, range and colour matrix from its tags, to full-range grey or R, G, B.

References
----------
The numbers of the tags: Recommendation ITU-T H.273.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from enhance.errors import FramesError

_UNSPECIFIED = 2

# H.273 TransferCharacteristics -> light curve. BT.601 (6) and BT.2020 (14, 15) share BT.709's curve.
_CURVES = {1: "bt709", 6: "bt709", 14: "bt709", 15: "bt709", 4: "gamma 2.2", 5: "gamma 2.8", 8: "linear", 13: "srgb"}

# H.273 MatrixCoefficients -> the converter's number for the same matrix
_MATRICES = {1: 1, 4: 4, 5: 5, 6: 5, 7: 7, 9: 9}

_LIMITED, _FULL = 1, 2

# From this height on untagged video is BT.709, below it BT.601 (common practice).
_HD_HEIGHT = 720


@dataclass(frozen=True)
class Conversion:
    """How decoded pictures become arrays.

    Parameters
    ----------
    target : str
        Name of the packed pixel format.
    channels, depth : int
        Of the arrays.
    limits : tuple of float, optional
        Codes of black and white where the pictures keep a limited range, which is stretched here.
    matrix, source_range : int, optional
        Of the source, for a conversion from Y'CbCr.
    notes : tuple of str
    """

    target: str
    channels: int
    depth: int
    limits: tuple[float, float] | None = None
    matrix: int | None = None
    source_range: int | None = None
    notes: tuple[str, ...] = ()

    def apply(self, frame: Any) -> NDArray[np.generic]:
        """Convert one decoded frame, to shape (H, W) or (H, W, 3), uint8 or uint16."""
        from av.video.reformatter import Interpolation

        colours = {}
        if self.matrix is not None:
            colours = {"src_colorspace": self.matrix, "src_color_range": self.source_range, "dst_color_range": _FULL}
        exact = Interpolation.BICUBIC | Interpolation.ACCURATE_RND | Interpolation.FULL_CHR_H_INT
        packed = frame.reformat(format=self.target, interpolation=exact, threads=1, **colours)
        codes = np.array(packed.to_ndarray())
        if self.limits is None:
            return codes
        black, white = self.limits
        highest = 2**self.depth - 1
        full = (codes.astype(np.float32) - black) * (highest / (white - black))
        return np.rint(np.clip(full, 0, highest)).astype(codes.dtype)


def conversion(path: Path, context: Any, first: Any) -> Conversion:
    """Choose the conversion that keeps a stream's depth.

    Parameters
    ----------
    path : Path
        For messages.
    context : av.VideoCodecContext
    first : av.VideoFrame
        A decoded picture, whose own tags fill what the stream's leave open.

    Returns
    -------
    Conversion

    Raises
    ------
    FramesError
        If pictures of this pixel format are not read.
    """
    pixels = first.format
    bits = max(component.bits for component in pixels.components)
    if pixels.is_bayer or bits > 16 or bits < 8 and not pixels.has_palette:
        raise FramesError(
            f"{path}: pixel format {pixels.name} is not read; expected grey, R G B or Y'CbCr of 8 to 16 bit. "
            "Export the pictures as 16-bit PNG or TIFF with a times table."
        )
    depth = 8 if bits == 8 or pixels.has_palette else 16
    notes = [] if bits in (8, 16) else [f"{path}: {bits}-bit codes are scaled to 16 bit (full scale is 65535)"]
    colour_range = first.color_range or context.color_range
    if pixels.name.startswith(("gray", "mono", "ya")):
        target = "gray" if depth == 8 else "gray16le"
        limits = _limits(bits, depth) if colour_range == _LIMITED else None
        return Conversion(target, 1, depth, limits, notes=tuple(notes))
    target = "rgb24" if depth == 8 else "rgb48le"
    if pixels.is_rgb or pixels.has_palette:
        return Conversion(target, 3, depth, notes=tuple(notes))
    matrix = _tag(context.colorspace, first.colorspace)
    if matrix not in _MATRICES:
        matrix = 1 if context.height >= _HD_HEIGHT else 5
        notes.append(f"{path}: its colour matrix is not told; {'BT.709' if matrix == 1 else 'BT.601'} is assumed")
    full = colour_range == _FULL or pixels.name.startswith("yuvj")
    return Conversion(target, 3, depth, None, _MATRICES[matrix], _FULL if full else _LIMITED, tuple(notes))


def light_curve(context: Any, first: Any) -> str | None:
    """Name the light curve that a stream's transfer tag tells; None if it tells none of ours.

    Parameters
    ----------
    context : av.VideoCodecContext
    first : av.VideoFrame

    Returns
    -------
    str or None
    """
    return _CURVES.get(_tag(context.color_trc, first.color_trc))


def _tag(stream: object, frame: object) -> int:
    """Return the stream's tag, or the frame's where the stream has none."""
    return int(stream) if int(stream) != _UNSPECIFIED else int(frame)  # type: ignore[call-overload]


def _limits(bits: int, depth: int) -> tuple[float, float]:
    # 16 and 235 of 8 bit, shifted up to the source's depth (ITU-R BT.709), then on the scale of the array
    scale = 2.0 ** (bits - 8) * (2**depth - 1) / (2**bits - 1)
    return 16 * scale, 235 * scale
