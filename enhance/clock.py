"""What time is: integer microseconds of the frame table's clock, half-open intervals ``[start, end)``.

Everything that turns text, floats or another unit into time stands here, and is applied once, at the door. Finer units
are floored. Names carry their unit (``start_us``, ``rate_hz``).
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

#: Microseconds in one of each unit that a file or a job may use.
MICROSECONDS: dict[str, Fraction] = {
    "s": Fraction(1_000_000),
    "ms": Fraction(1000),
    "us": Fraction(1),
    "ns": Fraction(1, 1000),
}

_DURATION = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*(s|ms|us|ns)\s*")


def parse_duration(text: str) -> int:
    """Read a time with its unit, such as ``"20 ms"`` or ``"2.10 s"``.

    Parameters
    ----------
    text : str
        A decimal number and one of s, ms, us, ns.

    Returns
    -------
    int
        Microseconds, floored.

    Raises
    ------
    ValueError
        If the text is not a number with a unit.

    Examples
    --------
    >>> parse_duration("20 ms"), parse_duration("14.8 us")
    (20000, 14)
    """
    return int(parse_exact(text) // 1)


def parse_exact(text: str) -> Fraction:
    """Read a time with its unit as exact microseconds: for row times, which may be a fraction of one.

    Parameters
    ----------
    text : str
        A decimal number and one of s, ms, us, ns.

    Returns
    -------
    Fraction
        Microseconds.

    Raises
    ------
    ValueError
        If the text is not a number with a unit.
    """
    match = _DURATION.fullmatch(text)
    if match is None:
        raise ValueError(f'{text!r} is not a time with its unit; write for example "20 ms" (s, ms, us or ns)')
    return Fraction(match[1]) * MICROSECONDS[match[2]]


def to_microseconds(values: NDArray[np.generic], unit: str) -> NDArray[np.int64]:
    """Convert stored times to microseconds, exactly for integers.

    Parameters
    ----------
    values : ndarray, shape (N,)
        Integers or floats in `unit`. Floats must be finite.
    unit : str
        One of s, ms, us, ns.

    Returns
    -------
    ndarray of int64, shape (N,)
        Floored to whole microseconds.
    """
    scale = MICROSECONDS[unit]
    if np.issubdtype(values.dtype, np.integer):
        whole = values.astype(np.int64)
        return whole * scale.numerator if scale.denominator == 1 else whole // scale.denominator
    exact = values.astype(np.float64) * float(scale)
    # A decimal second such as 0.000003 is stored a hair below three microseconds: a plain floor would lose one.
    nearest = np.rint(exact)
    tolerance = 4 * np.spacing(np.abs(exact)) + 1e-9
    return np.where(np.abs(exact - nearest) <= tolerance, nearest, np.floor(exact)).astype(np.int64)


def middle_us(start_us: int, end_us: int) -> int:
    """Time of a frame: the middle of its exposure, floored.

    Parameters
    ----------
    start_us, end_us : int
        The exposure of the frame's middle row.

    Returns
    -------
    int
        ``floor((start + end) / 2)``.
    """
    return (int(start_us) + int(end_us)) // 2


def factor_times(first_us: int, last_us: int, factor: int) -> list[int]:
    """Instants of the n-1 pictures inserted between two keys.

    Parameters
    ----------
    first_us, last_us : int
        Times of the two keys.
    factor : int
        n; pictures a span, the first key counted.

    Returns
    -------
    list of int
        ``first + floor(i (last - first) / n)`` for i = 1 .. n-1.
    """
    return [first_us + i * (last_us - first_us) // factor for i in range(1, factor)]


def rate_times(first_us: int, last_us: int, rate: Fraction) -> list[int]:
    """Instants at a constant number of pictures a second of scene time.

    Parameters
    ----------
    first_us, last_us : int
        Times of the first and the last key.
    rate : Fraction
        Pictures a second.

    Returns
    -------
    list of int
        ``first + floor(k 10^6 / rate)`` up to and including `last_us`.
    """
    count = (last_us - first_us) * rate // 1_000_000 + 1
    times = [first_us + int(k * 1_000_000 // rate) for k in range(int(count) + 1)]
    return [t for t in times if t <= last_us]


@dataclass(frozen=True)
class ClockMap:
    """How event time becomes frame time.

    ``t_frame = t_event + offset + 1e-6 * drift_ppm * (t_event - t_first_event)``

    Parameters
    ----------
    offset_us : int
        Added to every event time.
    drift_ppm : float
        Rate of the frame clock against the event clock, parts per million.
    first_event_us : int
        The event the drift counts from.
    """

    offset_us: int = 0
    drift_ppm: float = 0.0
    first_event_us: int = 0

    def to_frame(self, event_us: NDArray[np.int64]) -> NDArray[np.int64]:
        """Map event times, shape (N,), to the frame clock, floored; order is kept."""
        if self.drift_ppm == 0.0:
            return event_us + self.offset_us
        # The drift term alone is a float: epoch-sized integers never pass through one. Divided, not multiplied by 1e-6,
        # which is no exact float: a whole number of microseconds stays whole.
        drift = np.floor(self.drift_ppm * (event_us - self.first_event_us) / 1e6).astype(np.int64)
        return event_us + self.offset_us + drift

    def to_event(self, frame_us: int) -> int:
        """Earliest event time whose frame time is at or after `frame_us`."""
        guess = frame_us - self.offset_us
        if self.drift_ppm == 0.0:
            return guess
        elapsed = (guess - self.first_event_us) / (1.0 + 1e-6 * self.drift_ppm)
        # The guess is right to a few microseconds; the exact border is searched among its neighbours.
        near = self.first_event_us + int(elapsed) + np.arange(-4, 5, dtype=np.int64)
        return int(near[np.searchsorted(self.to_frame(near), frame_us)])
