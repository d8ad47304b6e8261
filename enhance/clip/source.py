"""Opening a recording, and the rig's events on its frames."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

import numpy as np

from enhance.calibrate import as_tabled, in_steady_light
from enhance.read import open_events, open_frames, read_triggers
from enhance.recording import FrameSource, Recording
from enhance.rig import Rig, RiggedEvents
from enhance.settings import ClipSettings

#: Frames looked at, light outside 0 to 1 that is more than noise, and the share of such pixels that is no accident.
LOOKED_AT, OUTSIDE, STRANGE_SHARE = 5, 0.05, 0.01


@contextmanager
def opened(settings: ClipSettings) -> Iterator[Recording]:
    """Open a job's recording and close it again.

    Parameters
    ----------
    settings : ClipSettings

    Yields
    ------
    Recording

    Raises
    ------
    ReadError
        If an input cannot be used.
    JobError
        If a setting does not fit the files.
    """
    frames = as_tabled(open_frames(settings.frames))
    try:
        events = open_events(settings.events, frames.full_size)
        try:
            pulses = settings.rig.triggers
            yield Recording(settings.title, frames, events, read_triggers(pulses, frames) if pulses else None)
        finally:
            events.close()
    finally:
        frames.close()


def events_on_frames(recording: Recording, rig: Rig) -> RiggedEvents | None:
    """Place the events on the frames; None where their clock is not known."""
    if rig.offset_us.value is None:
        return None
    height, width = recording.frames.shape[:2]
    events = in_steady_light(recording.events, rig)
    return RiggedEvents(events, rig, (width, height), recording.frames.crop_origin, recording.frames.full_size)


def light_remarks(frames: FrameSource) -> tuple[str, ...]:
    """Say where `frames.white` or `frames.black` cannot be right: codes far outside them in some of the frames.

    Parameters
    ----------
    frames : FrameSource

    Returns
    -------
    tuple of str
    """
    some = np.unique(np.linspace(0, len(frames) - 1, min(len(frames), LOOKED_AT)).round().astype(int))
    looked_at = [frames.frame(int(index)) for index in some]
    images = [frame.image * np.float32(frame.scale) for frame in looked_at]
    over = float(np.mean([np.mean(image > 1 + OUTSIDE) for image in images]))
    under = float(np.mean([np.mean(image < -OUTSIDE) for image in images]))
    remarks = []
    if over > STRANGE_SHARE:
        remarks.append(
            f"{over:.1%} of the pixels lie above frames.white = {frames.light.white:g}; they count as clipped. "
            f"Check frames.white: full scale of these codes (4095 for 12 bit, 65535 for 16 bit)"
        )
    if under > STRANGE_SHARE:
        remarks.append(
            f"{under:.1%} of the pixels lie far below frames.black = {frames.light.black:g}; check frames.black"
        )
    return tuple(remarks)
