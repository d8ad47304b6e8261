"""Row time: a rolling shutter seen as a global one.

Row r of a frame is exposed `row_time` * r later than row 0 (earlier where the sensor is read upward). Counted in its
own time, each row of a frame is exposed at the same moment: shifting the events of every row back by the row's delay
turns the recording into one of a global shutter. All that compares a frame with the events of its own exposure works
there unchanged: the double integral, clock, thresholds, noise. Delays count from the middle row, whose time is the
frame's: a frame's exposure in row time is its middle row's.

What shows one instant of the scene must come back from there: `enhance.deblur.rows`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from enhance.light import Light
from enhance.recording import Events, EventSource, Frame, FrameSource


class FrameEvents(EventSource, Protocol):
    """Events in the frames' clock and on the frames' pixels."""

    def covers(self, start_us: int, end_us: int) -> bool:
        """Whether the sensor was recording all through ``[start_us, end_us)``."""
        ...


def row_delays_us(row_time_us: float, height: int) -> NDArray[np.int64]:
    """How much later than the middle row each row is exposed.

    Parameters
    ----------
    row_time_us : float
        From one row to the next; negative: read upward.
    height : int
        H, rows of the (cropped) frame.

    Returns
    -------
    ndarray of int64, shape (H,)
        Microseconds, floored.
    """
    return np.floor(row_time_us * (np.arange(height) - height // 2)).astype(np.int64)


class RowEvents:
    """Events in row time: those of each row shifted back by the row's delay, and sorted again.

    Parameters
    ----------
    source : EventSource
        Events in the frames' clock and on the frames' pixels.
    delays_us : ndarray of int64, shape (H,)
        By how much each row of the (cropped) frame is late.
    """

    def __init__(self, source: EventSource, delays_us: NDArray[np.int64]) -> None:
        self._source, self.delays_us = source, delays_us
        self._earliest, self._latest = int(delays_us.min()), int(delays_us.max())
        self.size, self.count, self.notes = source.size, source.count, source.notes
        self.first_us, self.last_us = source.first_us - self._latest, source.last_us - self._earliest
        # recorded in every row
        self.cover_start_us = source.cover_start_us - self._earliest
        self.cover_end_us = source.cover_end_us - self._latest

    def between(self, start_us: int, end_us: int) -> Events:
        """Events of ``[start_us, end_us)`` in row time."""
        seen = self._source.between(start_us + self._earliest, end_us + self._latest)
        return in_row_time(seen, self.delays_us).between(start_us, end_us)

    def count_between(self, start_us: int, end_us: int) -> int:
        """About how many events lie in ``[start_us, end_us)`` of row time."""
        return self._source.count_between(start_us, end_us)

    def covers(self, start_us: int, end_us: int) -> bool:
        """Whether the sensor was recording all through ``[start_us, end_us)`` of every row."""
        return self.cover_start_us <= start_us and end_us <= self.cover_end_us

    def close(self) -> None:
        """Release the file."""
        self._source.close()


def in_row_time(events: Events, delays_us: NDArray[np.int64]) -> Events:
    """Shift the events of each row back by its delay; ties stay in file order.

    Parameters
    ----------
    events : Events
    delays_us : ndarray of int64, shape (H,)

    Returns
    -------
    Events
        Sorted by row time.
    """
    t_us = events.t_us - delays_us[events.y]
    order = np.argsort(t_us, kind="stable")
    return Events(t_us[order], events.x[order], events.y[order], events.polarity[order])


class RowFrames:
    """Frames in row time: each stands at its middle row's exposure, as if all rows were exposed together.

    Parameters
    ----------
    source : FrameSource
        Its times are those of the whole frame's row 0.
    row_time_us : float
    """

    def __init__(self, source: FrameSource, row_time_us: float) -> None:
        self._source = source
        middle = source.crop_origin[1] + source.shape[0] // 2
        self._later_us = int(np.floor(row_time_us * middle))
        self.start_us: NDArray[np.int64] = source.start_us + self._later_us
        self.end_us: NDArray[np.int64] = source.end_us + self._later_us

    def frame(self, index: int) -> Frame:
        """Decode one frame into linear light."""
        frame = self._source.frame(index)
        return replace(frame, start_us=frame.start_us + self._later_us, end_us=frame.end_us + self._later_us)

    def __len__(self) -> int:
        return len(self._source)

    @property
    def gain(self) -> NDArray[np.float64]:
        """Gain of each frame, shape (K,)."""
        return self._source.gain

    @property
    def names(self) -> Sequence[str]:
        """What each frame is called in its source."""
        return self._source.names

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of one frame."""
        return self._source.shape

    @property
    def full_size(self) -> tuple[int, int]:
        """Width, height before the crop."""
        return self._source.full_size

    @property
    def crop_origin(self) -> tuple[int, int]:
        """Corner (x, y) of the crop in the whole frame."""
        return self._source.crop_origin

    @property
    def light(self) -> Light:
        """The frames' own curve."""
        return self._source.light

    @property
    def notes(self) -> Sequence[str]:
        """Counted corrections in words."""
        return self._source.notes

    def close(self) -> None:
        """Release the file."""
        self._source.close()


def frames_in_row_time(source: FrameSource, row_time_us: float | None) -> FrameSource:
    """Give frames in row time; the very same ones for a global shutter, or where the row time is not known."""
    return RowFrames(source, row_time_us) if row_time_us else source


def events_in_row_time(source: FrameEvents, row_time_us: float | None, height: int) -> FrameEvents:
    """Give events in row time; the very same ones for a global shutter, or where the row time is not known."""
    return RowEvents(source, row_delays_us(row_time_us, height)) if row_time_us else source
