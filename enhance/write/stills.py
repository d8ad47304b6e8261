"""Stills: 16-bit PNG in the frames' own curve, with what the picture is as PNG text."""

from __future__ import annotations

import struct
import zlib
from collections.abc import Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from enhance.errors import WriteError
from enhance.light import Image, Light
from enhance.write.levels import own_levels
from enhance.write.whole import whole_file

#: Signature (8 bytes) and header chunk (25 bytes) of every PNG: text goes right behind them.
_HEADER_BYTES = 33


def write_still(path: Path, linear_image: Image, light: Light, text: Mapping[str, str]) -> None:
    """Write one picture as a 16-bit PNG; the same input gives the same bytes.

    Parameters
    ----------
    path : Path
        Ends in ``.png``.
    linear_image : ndarray of float32, shape (H, W) or (H, W, 3)
        Linear light.
    light : Light
        The frames' own curve: level = code / full scale x 65535, rounded and clipped.
    text : mapping of str to str
        PNG text, written in this order.

    Raises
    ------
    WriteError
        If the file cannot be written, or a keyword is none that PNG allows.
    """
    write_levels(path, own_levels(linear_image, light), text)


def write_levels(path: Path, levels: NDArray[np.uint16], text: Mapping[str, str]) -> None:
    """Write 16-bit levels, grey or R, G, B, as a PNG with text; raises as `write_still`."""
    import cv2

    stored = levels if levels.ndim == 2 else levels[..., ::-1]
    # 16-bit noise hardly shrinks further at a higher level, but takes several times as long.
    ok, encoded = cv2.imencode(".png", stored, [cv2.IMWRITE_PNG_COMPRESSION, 3])
    if not ok:
        raise WriteError(f"{path}: a picture of shape {levels.shape} cannot be stored as PNG.")
    data = encoded.tobytes()
    chunks = b"".join(_text_chunk(path, keyword, value) for keyword, value in text.items())
    with whole_file(path) as partial:
        partial.write_bytes(data[:_HEADER_BYTES] + chunks + data[_HEADER_BYTES:])


def _text_chunk(path: Path, keyword: str, value: str) -> bytes:
    """One text chunk: Latin-1 where the value allows it, else international text; both uncompressed (PNG, 11.3.4)."""
    try:
        key = keyword.encode("latin-1")
    except UnicodeEncodeError:
        key = b""
    if not 1 <= len(key) <= 79 or keyword != keyword.strip() or not keyword.isprintable():
        raise WriteError(f"{path}: {keyword!r} is no PNG keyword; expected 1 to 79 printable Latin-1 characters.")
    value = value.replace("\0", " ")
    try:
        return _chunk(b"tEXt", key + b"\0" + value.encode("latin-1"))
    except UnicodeEncodeError:
        # keyword, 0, compression flag, method, empty language tag, empty translated keyword, UTF-8 text
        return _chunk(b"iTXt", key + b"\0\0\0\0\0" + value.encode("utf-8"))


def _chunk(kind: bytes, body: bytes) -> bytes:
    return struct.pack(">I", len(body)) + kind + body + struct.pack(">I", zlib.crc32(kind + body))
