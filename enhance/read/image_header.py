"""What an image file's header says of its picture, read without decoding it: PNG, TIFF and JPEG.

References
----------
PNG: ISO/IEC 15948, chunk IHDR. TIFF: revision 6.0, sections 2 and 8, and its 64-bit form. JPEG: ITU-T T.81, annex B.
"""

from __future__ import annotations

import struct
from pathlib import Path
from typing import BinaryIO, NamedTuple


class Header(NamedTuple):
    """A picture as its file's header describes it.

    Parameters
    ----------
    width, height : int
    depth : int
        8 or 16 bits a channel, as decoded.
    channels : int
        1 or 3, alpha not counted.
    alpha : bool
        Whether there is a channel beside these.
    """

    width: int
    height: int
    depth: int
    channels: int
    alpha: bool


class HeaderError(ValueError):
    """What is wrong with the header, in words that follow the file's name."""


# PNG colour type -> channels, alpha
_PNG_COLOURS = {0: (1, False), 2: (3, False), 3: (3, False), 4: (1, True), 6: (3, True)}

# TIFF field type -> struct letter, for whole numbers
_TIFF_TYPES = {1: "B", 3: "H", 4: "I", 16: "Q"}

_TIFF_NAMES = {256: "width", 257: "height", 258: "bits", 262: "colours", 274: "turned", 277: "samples", 284: "planes"}
_TIFF_NAMES[339] = "numbers"


def read_header(path: Path) -> Header:
    """Read size, depth and channels.

    Parameters
    ----------
    path : Path
        The content decides what it is, not the suffix.

    Returns
    -------
    Header

    Raises
    ------
    HeaderError
        If the file is none of the three, or holds a picture that cannot be taken as it is.
    OSError
        If it cannot be opened.
    """
    with path.open("rb") as file:
        start = file.read(8)
        file.seek(0)
        try:
            if start == b"\x89PNG\r\n\x1a\n":
                return _png(file)
            if start[:2] in (b"II", b"MM"):
                return _tiff(file)
            if start[:2] == b"\xff\xd8":
                return _jpeg(file)
        except struct.error as error:
            raise HeaderError("is cut short") from error
    raise HeaderError("is empty" if not start else "is not a PNG, TIFF or JPEG file")


def _png(file: BinaryIO) -> Header:
    width, height, depth, colour = struct.unpack(">IIBB", file.read(26)[16:])
    if colour not in _PNG_COLOURS:
        raise HeaderError("has a damaged header")
    # The chunks' lengths alone lead to the end mark of a whole file: a copy cut short is told before the night.
    file.seek(8)
    kind = b""
    while kind != b"IEND":
        length, kind = struct.unpack(">I4s", file.read(8))
        file.seek(length + 4, 1)
    channels, alpha = _PNG_COLOURS[colour]
    return Header(width, height, max(depth, 8), channels, alpha)


def _jpeg(file: BinaryIO) -> Header:
    file.seek(2)
    while True:
        mark, kind = struct.unpack(">BB", file.read(2))
        while kind == 0xFF:
            (kind,) = struct.unpack(">B", file.read(1))
        if mark != 0xFF or kind == 0xDA:
            raise HeaderError("has a damaged header")
        (length,) = struct.unpack(">H", file.read(2))
        # C0 to CF start a frame, three of them aside that hold tables.
        if 0xC0 <= kind <= 0xCF and kind not in (0xC4, 0xC8, 0xCC):
            depth, height, width, channels = struct.unpack(">BHHB", file.read(6))
            break
        file.seek(length - 2, 1)
    if depth != 8 or channels not in (1, 3):
        raise HeaderError(f"has {channels} channels of {depth} bit, expected grey or R, G, B of 8 bit")
    return Header(width, height, depth, channels, False)


def _tiff(file: BinaryIO) -> Header:
    order = "<" if file.read(2) == b"II" else ">"
    (magic,) = struct.unpack(f"{order}H", file.read(2))
    if magic not in (42, 43):
        raise HeaderError("has a damaged header")
    large = magic == 43
    word, counter, size = ("Q", "Q", 20) if large else ("I", "H", 12)
    if large:
        file.seek(8)
    (directory,) = struct.unpack(f"{order}{word}", file.read(struct.calcsize(word)))
    file.seek(directory)
    (entries,) = struct.unpack(f"{order}{counter}", file.read(struct.calcsize(counter)))
    # No directory has this many entries: it is damaged.
    if entries > 4096:
        raise HeaderError("has a damaged header")
    table = [file.read(size) for _ in range(entries)]
    (following,) = struct.unpack(f"{order}{word}", file.read(struct.calcsize(word)))
    tags: dict[str, int] = {}
    for entry in table:
        tag, kind = struct.unpack(f"{order}HH", entry[:4])
        if tag in _TIFF_NAMES and kind in _TIFF_TYPES:
            tags[_TIFF_NAMES[tag]] = _tiff_value(file, order, word, kind, entry[4:])
    return _tiff_header(tags, following != 0)


def _tiff_value(file: BinaryIO, order: str, word: str, kind: int, rest: bytes) -> int:
    """Return the first of a field's values; the fields asked for have the same value for every channel."""
    width, letter = struct.calcsize(word), _TIFF_TYPES[kind]
    (count,) = struct.unpack(f"{order}{word}", rest[:width])
    value = rest[width:]
    if count * struct.calcsize(letter) > width:
        (offset,) = struct.unpack(f"{order}{word}", value)
        file.seek(offset)
        value = file.read(struct.calcsize(letter))
    return int(struct.unpack(f"{order}{letter}", value[: struct.calcsize(letter)])[0])


def _tiff_header(tags: dict[str, int], more_pages: bool) -> Header:
    if "width" not in tags or "height" not in tags:
        raise HeaderError("has a damaged header")
    bits, samples, colours = tags.get("bits", 1), tags.get("samples", 1), tags.get("colours", 1)
    if more_pages:
        raise HeaderError("holds several pages, expected one picture a file")
    if bits not in (8, 16) or tags.get("numbers", 1) != 1:
        raise HeaderError(f"has {bits}-bit {'decimal or signed' if tags.get('numbers', 1) != 1 else 'whole'} numbers, "
                          "expected whole ones of 8 or 16 bit")  # fmt: skip
    # 1: grey, black is zero; 2: R, G, B
    if (colours, samples) not in ((1, 1), (2, 3), (2, 4)) or (samples > 1 and tags.get("planes", 1) != 1):
        raise HeaderError(
            f"has {samples} channels of colour kind {colours}, expected grey with black at zero, "
            "or R, G, B side by side"
        )
    if tags.get("turned", 1) != 1:
        raise HeaderError("asks to be turned or mirrored for display, expected the sensor's own rows and columns")
    return Header(tags["width"], tags["height"], bits, min(samples, 3), samples == 4)
