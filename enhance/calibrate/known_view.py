"""Where the event sensor looks, as far as a job or a rig file tells; and frames shown on the sensor's own pixels."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.calibrate.lens_file import read_lens
from enhance.errors import CalibrationError
from enhance.recording import Frame, FrameSource, Recording
from enhance.rig import Quantity, Rig
from enhance.settings import RigSettings
from enhance.view import View, shared_view

SHARED = Quantity(None, None, "assumed", "one shared view")
NO_LENS = Quantity(None, None, "assumed", "no lens file")


def known_view(rig: Rig, recording: Recording, settings: RigSettings) -> Rig:
    """Set what is known of where the sensor looks: what the job gives, else what its rig file says.

    Parameters
    ----------
    rig : Rig
        With what a rig file says.
    recording : Recording
    settings : RigSettings

    Returns
    -------
    Rig
        Its registration has no value where both sensors share one view, or it is to be estimated.

    Raises
    ------
    CalibrationError
        If a lens file cannot be used, or the matrix maps everything outside.
    """
    given, lenses = settings.registration, settings.frame_lens or settings.event_lens
    if isinstance(given, tuple) or given == "shared" or lenses or rig.registration.value is None:
        rig = replace(rig, registration=SHARED, frame_lens=NO_LENS, event_lens=NO_LENS)
    if isinstance(given, tuple):
        rig = replace(rig, registration=Quantity([list(row) for row in given]))
    for name, path, size in (
        ("frame_lens", settings.frame_lens, recording.frames.full_size),
        ("event_lens", settings.event_lens, recording.events.size),
    ):
        if path is not None:
            numbers: dict[str, Any] = {name: Quantity(read_lens(path, size), None, "given", path.name)}
            rig = replace(rig, **numbers)
    shared = _shared(recording)
    if rig.registration.value is None and given != "estimate" and (lenses or shared.shift is None):
        rig = replace(rig, registration=replace(SHARED, value=shared.matrix.tolist()))
    _check(rig, recording)
    return rig


def view_of(rig: Rig, recording: Recording) -> View:
    """Tell where the sensor looks: one shared view where nothing else is known."""
    return rig.view or _shared(recording)


def _shared(recording: Recording) -> View:
    frames = recording.frames
    size = (frames.shape[1], frames.shape[0])
    return shared_view(recording.events.size, frames.full_size, frames.crop_origin, size)


def _check(rig: Rig, recording: Recording) -> None:
    """Refuse a matrix that leaves no frame pixel with an event pixel."""
    if rig.view is None:
        return
    frames, size = recording.frames, recording.events.size
    shape = (frames.shape[1], frames.shape[0])
    if (rig.view.lookup(size, shape, frames.crop_origin) >= 0).any():
        return
    centre = rig.view.to_frame(np.array([[(size[0] - 1) / 2, (size[1] - 1) / 2]]))[0]
    x, y = frames.crop_origin
    raise CalibrationError(
        f"{recording.title}: rig.registration maps the whole event sensor of {size[0]} x {size[1]} outside the frames: "
        f"its centre lands at ({centre[0]:.1f}, {centre[1]:.1f}), the frames show x {x} to {x + shape[0] - 1} and "
        f"y {y} to {y + shape[1] - 1}. Expected the matrix from event pixels to pixels of the whole frame (not the "
        f'other way round); mend it, or write "estimate"'
    )


@dataclass(frozen=True)
class FramesOnSensor:
    """A `FrameSource` whose frames are shown on the event sensor's pixels: what calibration compares events with.

    Each event pixel has the mean light of the frame pixels it covers, as the sensor itself sees it; 0 outside.

    Parameters
    ----------
    frames : FrameSource
    view : View
    size : tuple of int
        Width, height of the event sensor.
    """

    frames: FrameSource
    view: View
    size: tuple[int, int]

    def __getattr__(self, name: str) -> Any:
        """Everything else is the frames' own."""
        return getattr(self.frames, name)

    def __len__(self) -> int:
        return len(self.frames)

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of the sensor, and the frames' colours."""
        return (self.size[1], self.size[0], *self.frames.shape[2:])

    @property
    def full_size(self) -> tuple[int, int]:
        """The sensor's."""
        return self.size

    @property
    def crop_origin(self) -> tuple[int, int]:
        """Nothing is cropped."""
        return 0, 0

    def frame(self, index: int) -> Frame:
        """Decode one frame and show it on the sensor's pixels."""
        frame = self.frames.frame(index)
        there = self._there()
        image = self._sampled(frame.image, there)
        clipped = frame.clipped
        if clipped is not None:
            clipped = self._sampled(clipped.astype(np.float32), there) > 0
        # a row of the sensor is exposed when the row of the frame at its middle is
        first, last = (_mean_row(row) for row in (there[0, :, 1], there[-1, :, 1]))
        shift = int(frame.row_time_us * first // 1)
        row_time_us = frame.row_time_us * (last - first) / max(self.size[1] - 1, 1)
        return replace(
            frame,
            image=image,
            clipped=clipped,
            start_us=frame.start_us + shift,
            end_us=frame.end_us + shift,
            row_time_us=row_time_us,
        )

    def _there(self) -> NDArray[np.float32]:
        """Pixel of the crop at each event pixel's centre, (H, W, 2); far outside where there is none."""
        width, height = self.size
        y, x = np.mgrid[:height, :width].reshape(2, -1).astype(np.float64)
        there = np.asarray(self.view.to_frame(np.column_stack([x, y])) - self.frames.crop_origin, np.float64)
        rows, columns = self.frames.shape[:2]
        with np.errstate(invalid="ignore"):
            inside = np.asarray(((there >= -0.5) & (there <= (columns - 0.5, rows - 0.5))).all(axis=1))
        return np.where(inside[:, None], there, -99).astype(np.float32).reshape(height, width, 2)

    def _sampled(self, image: NDArray[np.float32], there: NDArray[np.float32]) -> NDArray[np.float32]:
        pitch = self.view.pitch(self.size)
        # area of an event pixel, but for the area of a frame pixel that the samples have already
        wide = np.sqrt(max(0.0, pitch**2 - 1) / 12)
        smooth = cv2.GaussianBlur(image, (0, 0), wide) if wide > 0.2 else image
        x, y = there[..., 0], there[..., 1]
        seen = np.asarray(cv2.remap(smooth, x, y, cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE), np.float32)
        seen[x < -1] = 0
        return seen


def _mean_row(rows: NDArray[np.float32]) -> float:
    known = rows[rows > -1]
    return float(known.mean()) if known.size else 0.0


def on_sensor(recording: Recording, view: View) -> Recording:
    """Show a recording's frames on the sensor's pixels."""
    return replace(recording, frames=FramesOnSensor(recording.frames, view, recording.events.size))


def keys_near(frames: FrameSource, keys: Sequence[int], most: int, within_us: int) -> list[int]:
    """Choose the first keys, at most so many, that lie within a time of the first."""
    start = int(frames.start_us[keys[0]])
    return [k for k in keys if int(frames.start_us[k]) - start <= within_us][:most]
