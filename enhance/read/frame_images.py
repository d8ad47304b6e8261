"""Frames from a folder of images."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from enhance.errors import FramesError
from enhance.read.image_header import Header, HeaderError, read_header

_SUFFIXES = (".png", ".tif", ".tiff", ".jpg", ".jpeg")

# Several times any camera's picture: a header that claims more is damaged, or meant to exhaust the memory.
_MOST_PIXELS = 200_000_000


class ImageFolder:
    """Pictures of one size, depth and number of channels, in the natural order of their names.

    Orientation tags are ignored on purpose: pixels must stay where the sensor has them.

    Parameters
    ----------
    folder : Path
        Or one picture.

    Raises
    ------
    FramesError
        If there is no picture, or they differ from each other.
    """

    def __init__(self, folder: Path) -> None:
        try:
            inside = [folder] if folder.is_file() else folder.iterdir()
            found = [p for p in inside if p.suffix.lower() in _SUFFIXES and not p.name.startswith(".")]
        except OSError as error:
            raise FramesError(f"{folder} cannot be read: {error.strerror}. Check frames.source.") from error
        self._paths = sorted((p for p in found if p.is_file()), key=_natural)
        if not self._paths:
            if folder.is_file():
                raise FramesError(f"{folder} is no PNG, TIFF or JPEG file; expected one picture. Export it as PNG.")
            raise FramesError(f"{folder} holds no PNG, TIFF or JPEG file. Check frames.source.")
        headers = [_header(path) for path in self._paths]
        self._first = self._check_alike(headers)
        self.names: Sequence[str] = [path.name for path in self._paths]
        self.size = (self._first.width, self._first.height)
        self.channels, self.depth = self._first.channels, self._first.depth
        transparent = sum(header.alpha for header in headers)
        self.notes = [f"{folder}: the alpha channel of {transparent} pictures is ignored"] if transparent else []

    def codes(self, index: int) -> NDArray[np.generic]:
        """Decode one picture.

        Parameters
        ----------
        index : int

        Returns
        -------
        ndarray of uint8 or uint16, shape (H, W) or (H, W, 3)
            Code values as stored; colour is R, G, B.

        Raises
        ------
        FramesError
            If the file is damaged or has changed since it was opened.
        """
        import cv2

        path, header = self._paths[index], self._first
        try:
            data = np.fromfile(path, dtype=np.uint8)
            # UNCHANGED: neither 16 to 8 bit nor colour to grey nor turning by an orientation tag behind our back.
            image = cv2.imdecode(data, cv2.IMREAD_UNCHANGED) if _is_complete(data) else None
        except (OSError, cv2.error) as error:
            raise _damaged(path) from error
        if image is None:
            raise _damaged(path)
        if image.ndim == 3:
            # cv2 stores B, G, R (and alpha); grey with alpha comes as three equal channels.
            image = image[:, :, 0] if header.channels == 1 else image[:, :, 2::-1]
        shape = (header.height, header.width) + ((3,) if header.channels == 3 else ())
        if image.shape != shape or image.dtype.itemsize * 8 != header.depth:
            raise FramesError(
                f"{path}: decodes to {image.shape} of {image.dtype}, its header said {shape} of {header.depth} bit. "
                "The file is damaged or has changed while it was used; copy it again."
            )
        return np.ascontiguousarray(image)

    def close(self) -> None:
        """Nothing stays open."""

    def _check_alike(self, headers: list[Header]) -> Header:
        kinds = [header._replace(alpha=False) for header in headers]
        usual = Counter(kinds).most_common(1)[0][0]
        odd = [i for i, kind in enumerate(kinds) if kind != usual]
        if odd:
            most = 5
            names = ", ".join(self._paths[i].name for i in odd[:most]) + (" ..." if len(odd) > most else "")
            raise FramesError(
                f"{self._paths[0].parent}: {len(odd)} of {len(kinds)} pictures differ from the others: {names} "
                f"({_describe(kinds[odd[0]])}, the others {_describe(usual)}). "
                "Frames must share size, depth and channels; convert or remove these."
            )
        return usual


def _header(path: Path) -> Header:
    try:
        header = read_header(path)
    except HeaderError as error:
        raise FramesError(f"{path} {error}. Export the picture anew, or remove it.") from error
    except OSError as error:
        raise FramesError(f"{path} cannot be read: {error.strerror}. Check its permissions.") from error
    if not 0 < header.width * header.height <= _MOST_PIXELS:
        raise FramesError(
            f"{path}: its header says {header.width} x {header.height} pixels, expected 1 to {_MOST_PIXELS:,}. "
            "The file is damaged, or no camera's picture; remove it."
        )
    return header


def _is_complete(data: NDArray[np.uint8]) -> bool:
    """Whether the end mark is there: some decoders fill the missing rows of a cut file with grey, silently."""
    raw = data.tobytes()
    if raw[:2] == b"\xff\xd8":
        # Inside the coded picture, after the start-of-scan mark, FF D9 can only be the end mark.
        return raw.find(b"\xff\xd9", max(raw.rfind(b"\xff\xda"), 0)) >= 0
    if raw[:4] == b"\x89PNG":
        return raw.rfind(b"IEND") >= 0
    return True


def _damaged(path: Path) -> FramesError:
    return FramesError(
        f"{path} cannot be decoded: it is damaged or cut short. "
        "Copy it again; if it is lost, remove it together with its row in the times table."
    )


def _describe(header: Header) -> str:
    return f"{header.width} x {header.height}, {header.depth} bit, {'grey' if header.channels == 1 else 'colour'}"


def _natural(path: Path) -> tuple[list[tuple[bool, int, str]], str]:
    """Sort key that puts 2.png before 10.png; equal keys fall back to the plain name."""
    parts = re.findall(r"\d+|\D+", path.name.lower())
    return [(not part.isdecimal(), int(part) if part.isdecimal() else 0, part) for part in parts], path.name
