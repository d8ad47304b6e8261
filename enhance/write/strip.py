"""The caption strip of a clip: extra rows below the picture, never over it."""

from __future__ import annotations

import numpy as np

from enhance.light import Image
from enhance.recording import Kind

#: Between the parts of a caption; a narrow clip stacks the parts in lines.
SEPARATOR = "   "

_BACKGROUND, _INK = 0.08, 0.92
_LONGEST_PART = "expected 00.0 dB, LOW"
_LONGEST_LINE = SEPARATOR.join(["t = 0000.000000 s", "deblurred", _LONGEST_PART])


def caption_line(time_us: int, kind: Kind, expected_psnr: float | None, low: bool = False) -> str:
    """Caption of one picture.

    Parameters
    ----------
    time_us : int
        Scene time, from wherever the caller counts.
    kind : Kind
    expected_psnr : float or None
        dB; left out for a captured picture.
    low : bool
        Below what the job asks for.

    Returns
    -------
    str

    Examples
    --------
    >>> caption_line(12_345_678, Kind.INSERTED, 34.14)
    't = 12.345678 s   inserted   expected 34.1 dB'
    """
    sign, size = "-" if time_us < 0 else "", abs(int(time_us))
    parts = [f"t = {sign}{size // 1_000_000}.{size % 1_000_000:06d} s", str(kind)]
    if expected_psnr is not None:
        parts.append(f"expected {expected_psnr:.1f} dB{', LOW' if low else ''}")
    elif kind is not Kind.CAPTURED:
        parts.append("expected: not known")
    return SEPARATOR.join(parts)


def strip_rows(width: int) -> int:
    """Rows the strip of a clip takes; even, and the same for every picture."""
    _, lines, line_rows = _layout(width)
    return lines * line_rows


def draw_strip(width: int, caption: str) -> Image:
    """Draw a caption, light on a dark band.

    Parameters
    ----------
    width : int
    caption : str
        Parts separated by three spaces.

    Returns
    -------
    ndarray of float32, shape (strip_rows(width), width)
        Signal from 0 to 1, grey.
    """
    import cv2

    scale, lines, line_rows = _layout(width)
    band = np.full((lines * line_rows, width), round(255 * _BACKGROUND), dtype=np.uint8)
    texts = [caption] if lines == 1 else caption.split(SEPARATOR)
    for number, text in enumerate(texts[:lines]):
        baseline = number * line_rows + round(0.72 * line_rows)
        corner = (round(8 * scale) + 2, baseline)
        ink = round(255 * _INK)
        cv2.putText(band, text, corner, cv2.FONT_HERSHEY_SIMPLEX, scale, ink, _stroke(scale), cv2.LINE_AA)
    return band.astype(np.float32) / np.float32(255)


def _layout(width: int) -> tuple[float, int, int]:
    """Scale of the letters, number of lines and rows a line."""
    # Below this scale the strokes of the letters run into each other.
    smallest, largest = 0.4, 1.0
    scale = min(width / _text_width(_LONGEST_LINE), width / 900.0 + 0.1, largest)
    lines = 1
    if scale < smallest:
        lines = 3
        scale = min(smallest, width / _text_width(_LONGEST_PART))
    return scale, lines, 2 * max(round(20 * scale), 3)


def _text_width(text: str) -> float:
    """Width of a text in pixels at scale 1, its margins included."""
    import cv2

    return float(cv2.getTextSize(text, cv2.FONT_HERSHEY_SIMPLEX, 1.0, 1)[0][0] + 30)


def _stroke(scale: float) -> int:
    return 2 if scale > 0.8 else 1
