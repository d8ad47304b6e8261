"""Opening a recording, and the rig's events on its frames."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

from enhance.read import open_events, open_frames
from enhance.recording import Recording
from enhance.rig import Rig, RiggedEvents
from enhance.settings import ClipSettings


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
    frames = open_frames(settings.frames)
    try:
        events = open_events(settings.events, frames.full_size)
        try:
            yield Recording(settings.title, frames, events)
        finally:
            events.close()
    finally:
        frames.close()


def events_on_frames(recording: Recording, rig: Rig) -> RiggedEvents | None:
    """Place the events on the frames; None where their clock is not known."""
    if rig.offset_us.value is None:
        return None
    height, width = recording.frames.shape[:2]
    return RiggedEvents(
        recording.events, rig, (width, height), recording.frames.crop_origin, recording.frames.full_size
    )
