"""What flows between the rooms: frames, events, a recording, a picture.

All of it is frozen. Times are microseconds (see `enhance.clock`), images are float32 in linear light (see
`enhance.light`), pixel centres stand at integers, arrays are indexed row, column.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from enhance.clock import middle_us
from enhance.light import Image, Light


class Kind(StrEnum):
    """What a picture is; it says so wherever it goes."""

    CAPTURED = "captured"
    DEBLURRED = "deblurred"
    INSERTED = "inserted"


class By(StrEnum):
    """What made a picture: the frames alone, the event integral, or the fusion network."""

    FRAMES = "frames"
    INTEGRAL = "integral"
    NETWORK = "network"


@dataclass(frozen=True)
class Frame:
    """One captured frame.

    Parameters
    ----------
    image : ndarray of float32, shape (H, W) or (H, W, 3)
        Linear light, 1 = full scale; colour is R, G, B.
    start_us, end_us : int
        Exposure of row 0. Equal for a frame that counts as sharp.
    row_time_us : float
        Row r is exposed ``row_time_us * r`` later; 0 for a global shutter.
    scale : float
        How many times the light was when captured what it is here, exposures and gains brought to one: noise and
        clipping are those of ``scale * image``.
    clipped : ndarray of bool, shape (H, W), optional
        Pixels that stood at the file's ceiling in some colour: no evidence of more than "at least". None: none.
    """

    image: Image
    start_us: int
    end_us: int
    row_time_us: float = 0.0
    scale: float = 1.0
    clipped: NDArray[np.bool_] | None = None

    @property
    def time_us(self) -> int:
        """Middle of the middle row's exposure."""
        shift = int(self.row_time_us * (self.image.shape[0] // 2) // 1)
        return middle_us(self.start_us, self.end_us) + shift

    @property
    def exposure_us(self) -> int:
        """Length of one row's exposure."""
        return self.end_us - self.start_us


@dataclass(frozen=True)
class Events:
    """Events as columns, sorted by time, ties in file order.

    Parameters
    ----------
    t_us : ndarray of int64, shape (N,)
    x, y : ndarray of uint16, shape (N,)
        Column and row.
    polarity : ndarray of int8, shape (N,)
        +1 brighter, -1 darker.
    """

    t_us: NDArray[np.int64]
    x: NDArray[np.uint16]
    y: NDArray[np.uint16]
    polarity: NDArray[np.int8]

    def __len__(self) -> int:
        return len(self.t_us)

    def between(self, start_us: int, end_us: int) -> Events:
        """Events of ``[start_us, end_us)``, as views."""
        first, last = np.searchsorted(self.t_us, [start_us, end_us])
        return self.keep(slice(int(first), int(last)))

    def keep(self, chosen: slice | NDArray[np.bool_]) -> Events:
        """Events picked by a slice or a mask, shape (N,)."""
        return Events(self.t_us[chosen], self.x[chosen], self.y[chosen], self.polarity[chosen])

    @staticmethod
    def none() -> Events:
        """No events."""
        return Events(np.empty(0, np.int64), np.empty(0, np.uint16), np.empty(0, np.uint16), np.empty(0, np.int8))


@dataclass(frozen=True)
class Contrast:
    """What one event means.

    Parameters
    ----------
    positive, negative : float
        Contrast thresholds, natural log units, both > 0.
    ramp_us : int
        How long before its event a change of light began, at the most; 0: the staircase of the published form.
    pitch : float
        Frame pixels that an event pixel is wide: sums of its events are spread smoothly over more than one.
    """

    positive: float
    negative: float
    ramp_us: int = 0
    pitch: float = 1.0

    @property
    def thresholds(self) -> tuple[float, float]:
        """Positive and negative threshold."""
        return self.positive, self.negative

    @property
    def mean(self) -> float:
        """Mean of the two thresholds."""
        return 0.5 * (self.positive + self.negative)


class FrameSource(Protocol):
    """Frames of a recording, decoded one at a time.

    The table is known without decoding a picture: `start_us`, `end_us` (int64, shape (K,), strictly rising starts,
    end >= start) and `gain` (float64, shape (K,), 1 where none is given). `notes` lists counted corrections in words.
    """

    @property
    def start_us(self) -> NDArray[np.int64]:
        """Starts of the exposures, shape (K,)."""

    @property
    def end_us(self) -> NDArray[np.int64]:
        """Ends of the exposures, shape (K,)."""

    @property
    def gain(self) -> NDArray[np.float64]:
        """Gain of each frame, shape (K,)."""

    @property
    def names(self) -> Sequence[str]:
        """What each frame is called in its source."""

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of one frame."""

    @property
    def full_size(self) -> tuple[int, int]:
        """Width, height before the crop."""

    @property
    def crop_origin(self) -> tuple[int, int]:
        """Corner (x, y) of the crop in the whole frame."""

    @property
    def light(self) -> Light:
        """The frames' own curve."""

    @property
    def notes(self) -> Sequence[str]:
        """Counted corrections in words."""

    def __len__(self) -> int:
        """Count the frames."""

    def frame(self, index: int) -> Frame:
        """Decode one frame into linear light."""

    def close(self) -> None:
        """Release the file."""


class EventSource(Protocol):
    """Events of a recording, read by time window: memory follows the window, never the file.

    `size` is (width, height) of the sensor; `count` the number of usable events; `first_us` and `last_us` the first
    and the last event's time; ``[cover_start_us, cover_end_us)`` when the sensor was really recording. `notes` lists
    counted corrections in words.
    """

    @property
    def size(self) -> tuple[int, int]:
        """Width, height of the sensor."""

    @property
    def count(self) -> int:
        """Number of usable events."""

    @property
    def first_us(self) -> int:
        """Time of the first event."""

    @property
    def last_us(self) -> int:
        """Time of the last event."""

    @property
    def cover_start_us(self) -> int:
        """When the sensor began to record."""

    @property
    def cover_end_us(self) -> int:
        """When the sensor ceased to record."""

    @property
    def notes(self) -> Sequence[str]:
        """Counted corrections in words."""

    def between(self, start_us: int, end_us: int) -> Events:
        """Events of ``[start_us, end_us)``."""

    def count_between(self, start_us: int, end_us: int) -> int:
        """About how many events lie in ``[start_us, end_us)``, without reading them: for plans, never for results."""

    def close(self) -> None:
        """Release the file."""


@dataclass(frozen=True)
class EventArray:
    """An `EventSource` over events that are in memory already: for simulated recordings and tests.

    Parameters
    ----------
    events : Events
    size : tuple of int
        Width, height.
    cover : tuple of int, optional
        When the sensor was recording; first to last event if left out.
    """

    events: Events
    size: tuple[int, int]
    cover: tuple[int, int] | None = None
    notes: Sequence[str] = ()

    @property
    def count(self) -> int:
        """Number of events."""
        return len(self.events)

    @property
    def first_us(self) -> int:
        """Time of the first event."""
        return int(self.events.t_us[0])

    @property
    def last_us(self) -> int:
        """Time of the last event."""
        return int(self.events.t_us[-1])

    @property
    def cover_start_us(self) -> int:
        """When the sensor began to record."""
        return self.cover[0] if self.cover else self.first_us

    @property
    def cover_end_us(self) -> int:
        """When the sensor ceased to record."""
        return self.cover[1] if self.cover else self.last_us + 1

    def between(self, start_us: int, end_us: int) -> Events:
        """Events of ``[start_us, end_us)``."""
        return self.events.between(start_us, end_us)

    def count_between(self, start_us: int, end_us: int) -> int:
        """How many events lie in ``[start_us, end_us)``."""
        return len(self.between(start_us, end_us))

    def close(self) -> None:
        """Nothing to release."""


@dataclass(frozen=True)
class FrameArray:
    """A `FrameSource` over frames that are in memory already: for simulated recordings and tests.

    Parameters
    ----------
    codes : ndarray, shape (K, H, W) or (K, H, W, 3)
        Code values as a camera would store them.
    start_us, end_us : ndarray of int64, shape (K,)
    light : Light
    gains : ndarray of float64, shape (K,), optional
    """

    codes: NDArray[np.generic]
    start_us: NDArray[np.int64]
    end_us: NDArray[np.int64]
    light: Light
    notes: Sequence[str] = ()
    gains: NDArray[np.float64] | None = None

    @property
    def gain(self) -> NDArray[np.float64]:
        """As given; 1 for every frame where none is."""
        return np.ones(len(self.codes)) if self.gains is None else self.gains

    @property
    def names(self) -> Sequence[str]:
        """Indices as text."""
        return [str(i) for i in range(len(self.codes))]

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of one frame."""
        return self.codes.shape[1:]

    @property
    def full_size(self) -> tuple[int, int]:
        """Width, height."""
        return self.codes.shape[2], self.codes.shape[1]

    @property
    def crop_origin(self) -> tuple[int, int]:
        """Nothing is cropped."""
        return 0, 0

    def __len__(self) -> int:
        return len(self.codes)

    def frame(self, index: int) -> Frame:
        """One frame in linear light."""
        codes, start_us, end_us = self.codes[index], int(self.start_us[index]), int(self.end_us[index])
        return Frame(self.light.to_linear(codes), start_us, end_us, clipped=self.light.clipped(codes))

    def close(self) -> None:
        """Nothing to release."""


@dataclass(frozen=True)
class Triggers:
    """When each frame's exposure was started: event clock, int64, shape (K,), rising; and corrections in words."""

    times_us: NDArray[np.int64]
    remarks: tuple[str, ...] = ()


@dataclass(frozen=True)
class Recording:
    """Frames and events of one scene, each in its own world; a `Rig` says how the two relate."""

    title: str
    frames: FrameSource
    events: EventSource
    triggers: Triggers | None = None


@dataclass(frozen=True)
class Picture:
    """One picture that leaves the tool.

    Parameters
    ----------
    image : ndarray of float32, shape (H, W) or (H, W, 3)
        Linear light.
    time_us : int
        Its instant of the scene.
    kind : Kind
    by : By
    error : ndarray of float32, shape (H, W), optional
        Expected squared error of each pixel against the sharp, noise-free truth, in code values of the frames' own
        curve over full scale (colour: mean of R, G, B); None where it is not known.
    """

    image: Image
    time_us: int
    kind: Kind
    by: By
    error: NDArray[np.float32] | None = None

    @property
    def expected_psnr(self) -> float | None:
        """PSNR, in dB, that the expected error stands for; None where that is not known, 100 at the most."""
        mean = np.nan if self.error is None else float(self.error.mean(dtype=np.float64))
        # PSNR = -10 log10(mean squared error), full scale being 1
        return float(-10 * np.log10(max(mean, 1e-10))) if np.isfinite(mean) else None
