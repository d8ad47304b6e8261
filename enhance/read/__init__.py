"""Frames and events from files, read lazily into a recording.

::

    open_frames   image folder or video, with exact times   (frames.py; frame_images.py, frame_video.py, frame_times.py)
    read_triggers when each frame's exposure was started, in the event clock   (trigger_table.py)
    open_events   HDF5, NPZ, text or Parquet, by time window (events.py; one file a container: event_hdf5.py ...)
"""

from __future__ import annotations

from pathlib import Path

from enhance.recording import EventSource, FrameSource, Triggers
from enhance.settings import EventsSettings, FramesSettings

__all__ = ["open_events", "open_frames", "read_triggers"]


def open_frames(settings: FramesSettings) -> FrameSource:
    """Open a folder of images or a video; pictures are decoded one at a time, when asked for.

    Parameters
    ----------
    settings : FramesSettings

    Returns
    -------
    FrameSource
        Its whole time table is known and checked; every picture's size and depth is checked against the others.

    Raises
    ------
    FramesError
        If the frames, their times or the video cannot be used.
    JobError
        If a setting is missing (exposure, light curve) or does not fit the frames (crop, black, white).
    """
    from enhance.read.frames import open_frame_source

    return open_frame_source(settings)


def open_events(settings: EventsSettings, frame_size: tuple[int, int]) -> EventSource:
    """Open an event file for reading by time window.

    The file is streamed through once: every event is checked, and a time index is built. Containers that cannot be read
    from the middle are copied on the way into nameless temporary files, which vanish with `close` or with the process.

    Parameters
    ----------
    settings : EventsSettings
    frame_size : tuple of int
        Width, height of the whole frame before any crop: the sensor's size where the job gives none.

    Returns
    -------
    EventSource
        Memory follows the window that is read, never the file.

    Raises
    ------
    EventsError
        If the file cannot be read, or its events cannot be those of this sensor.
    JobError
        If a setting does not fit the file.
    PackageError
        If the container needs an optional package.
    """
    from enhance.read.events import open_event_source

    return open_event_source(settings, frame_size)


def read_triggers(path: Path, frames: FrameSource) -> Triggers:
    """Read a table of trigger pulses.

    Parameters
    ----------
    path : Path
        Header ``frame,time_us``, or ``time_us`` alone in the frames' order; microseconds of the event clock.
    frames : FrameSource

    Returns
    -------
    Triggers
        One pulse a frame.

    Raises
    ------
    FramesError
        If a pulse is missing or doubled, or the table cannot be that of these frames.
    """
    from enhance.read.trigger_table import read_triggers as read

    return read(path, frames)
