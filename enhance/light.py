"""What light is: code values of a file to linear light and back, through the frames' own curve.

Sensors add up light, so averages, the double integral and warping work on linear light; scores and stills are in code
values of the frames' own curve. Both directions stand here and nowhere else.

References
----------
IEC 61966-2-1 (sRGB); Recommendation ITU-R BT.709 (with the standard's rounded constants 1.099 and 0.018).
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Image = NDArray[np.float32]

#: Light added before a logarithm (1 = full scale): a frame's noise and residual level, below which ratios mean nothing.
LOG_FLOOR = np.float32(1 / 255)

#: Codes this near full scale (share of the range) count as clipped: compression smears a ceiling by a code or two.
CEILING = 0.005

#: ITU-R BT.709 luma weights of linear R, G, B (rows of the standard's Y').
LUMA_BT709 = (0.2126, 0.7152, 0.0722)

_GAMMA = re.compile(r"gamma\s+(\d+(?:\.\d+)?)")


def check_curve(curve: str) -> str:
    """Return the name of a light curve if it is one of ours.

    Parameters
    ----------
    curve : str
        ``linear``, ``srgb``, ``bt709`` or ``gamma G``.

    Returns
    -------
    str
        The name, unchanged.

    Raises
    ------
    ValueError
        For any other name, or a gamma outside 0.2 to 5.
    """
    gamma = _GAMMA.fullmatch(curve)
    if curve in ("linear", "srgb", "bt709") or (gamma and 0.2 <= float(gamma[1]) <= 5):
        return curve
    raise ValueError(f'{curve!r} is not a light curve; expected "linear", "srgb", "bt709" or "gamma 2.2" (0.2 to 5)')


@dataclass(frozen=True)
class Light:
    """The curve of a recording's frames, with the code values of no light and of full scale.

    Parameters
    ----------
    curve : str
        ``linear``, ``srgb``, ``bt709`` or ``gamma G``.
    black, white : float
        Code value of no light and of full scale.

    Examples
    --------
    >>> round(float(Light("srgb", 0, 1).to_linear(np.float32([0.5]))[0]), 6)
    0.214041
    """

    curve: str
    black: float = 0.0
    white: float = 255.0

    @property
    def full_scale(self) -> float:
        """MAX of every score: the code value of full scale."""
        return self.white

    def to_linear(self, codes: NDArray[np.generic]) -> Image:
        """Turn code values, any shape, into linear light: 0 at `black`, 1 at `white`, noise below black negative."""
        signal = (np.asarray(codes, dtype=np.float32) - np.float32(self.black)) / np.float32(self.white - self.black)
        return _odd(_decode, self.curve, signal)

    def clipped(self, codes: NDArray[np.generic]) -> NDArray[np.bool_] | None:
        """Find pixels at the ceiling in any colour, (H, W) or (H, W, 3) to (H, W); None where there is none."""
        high = np.atleast_3d(np.asarray(codes)) >= self.white - CEILING * (self.white - self.black)
        return np.asarray(high.any(axis=-1)) if high.any() else None

    def to_codes(self, linear: NDArray[np.generic]) -> Image:
        """Turn linear light, any shape, into code values: float, unrounded, not clipped."""
        signal = _odd(_encode, self.curve, np.asarray(linear, dtype=np.float32))
        return signal * np.float32(self.white - self.black) + np.float32(self.black)


def decode(curve: str, signal: NDArray[np.generic]) -> Image:
    """Signal (0 to 1) of a curve to linear light (0 to 1); odd-symmetric below 0."""
    return _odd(_decode, curve, np.asarray(signal, dtype=np.float32))


def encode(curve: str, linear: NDArray[np.generic]) -> Image:
    """Linear light (0 to 1) to the signal (0 to 1) of a curve; odd-symmetric below 0."""
    return _odd(_encode, curve, np.asarray(linear, dtype=np.float32))


def luma(linear: Image) -> Image:
    """Luminance of linear light, (H, W, 3) R G B to (H, W); a grey image passes unchanged."""
    return linear if linear.ndim == 2 else linear @ np.asarray(LUMA_BT709, dtype=np.float32)


def log_light(linear: Image) -> Image:
    """Natural logarithm of linear light, any shape, with `LOG_FLOOR` added; noise below black counts as none."""
    return np.log(np.maximum(linear, 0) + LOG_FLOOR)


def _odd(function: Callable[[str, Image], Image], curve: str, value: Image) -> Image:
    """Apply a curve to the magnitude and give the sign back: read noise around black must not turn into a bias."""
    if curve == "linear":
        return value
    size = np.abs(value)
    return np.copysign(function(curve, size), value).astype(np.float32)


def _decode(curve: str, signal: Image) -> Image:
    if curve == "srgb":
        # IEC 61966-2-1: V / 12.92 below 0.04045, ((V + 0.055) / 1.055)^2.4 above
        return np.where(signal <= 0.04045, signal / 12.92, ((signal + 0.055) / 1.055) ** 2.4)
    if curve == "bt709":
        # inverse of ITU-R BT.709: V / 4.5 below 4.5 * 0.018, ((V + 0.099) / 1.099)^(1 / 0.45) above
        return np.where(signal < 4.5 * 0.018, signal / 4.5, ((signal + 0.099) / 1.099) ** (1 / 0.45))
    return signal ** _gamma(curve)


def _encode(curve: str, linear: Image) -> Image:
    if curve == "srgb":
        # IEC 61966-2-1: 12.92 L below 0.0031308, 1.055 L^(1/2.4) - 0.055 above
        return np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1 / 2.4) - 0.055)
    if curve == "bt709":
        # ITU-R BT.709: 4.5 L below 0.018, 1.099 L^0.45 - 0.099 above
        return np.where(linear < 0.018, 4.5 * linear, 1.099 * linear**0.45 - 0.099)
    return linear ** (1 / _gamma(curve))


def _gamma(curve: str) -> float:
    match = _GAMMA.fullmatch(check_curve(curve))
    if match is None:
        raise ValueError(f"{curve!r} has no exponent")
    return float(match[1])
