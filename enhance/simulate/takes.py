"""Short takes of scenes with long pauses between them, as one long recording under one drifting clock."""

from __future__ import annotations

from collections.abc import Sequence
from typing import cast

import numpy as np

from enhance.clock import ClockMap
from enhance.recording import EventArray, Events, FrameArray, Recording
from enhance.simulate.recording import Simulated, into_event_clock


def join_takes(
    takes: Sequence[Simulated], starts_us: Sequence[int], clock_offset_us: int = 0, drift_ppm: float = 0.0
) -> tuple[Recording, ClockMap]:
    """Join simulated takes, during whose pauses nothing moves and no frame is taken.

    Parameters
    ----------
    takes : sequence of Simulated
        All of one size, recorded without clock offset or drift.
    starts_us : sequence of int
        When each begins, in the frame clock; a take ends before the next begins.
    clock_offset_us, drift_ppm : int, float
        ``t_frame = t_event + offset + 1e-6 * drift * (t_event - t_first_event)``.

    Returns
    -------
    recording : Recording
    clock : ClockMap
        The true map from event time to frame time.

    Raises
    ------
    ValueError
        If takes overlap, or have a clock of their own.
    """
    ends = [start + take.duration_us for start, take in zip(starts_us, takes, strict=True)]
    if any(end > start for end, start in zip(ends[:-1], starts_us[1:], strict=True)):
        raise ValueError("takes overlap; expected each to end before the next begins")
    if any(take.clock.offset_us or take.clock.drift_ppm for take in takes):
        raise ValueError("a take has a clock offset or drift of its own; give them to the joined recording instead")
    # a simulated recording always lies in memory
    frames = [cast(FrameArray, take.recording.frames) for take in takes]
    seen = [cast(EventArray, take.recording.events).events for take in takes]
    start_us = np.concatenate([part.start_us + start for part, start in zip(frames, starts_us, strict=True)])
    end_us = np.concatenate([part.end_us + start for part, start in zip(frames, starts_us, strict=True)])
    joined = Events(
        np.concatenate([part.t_us + start for part, start in zip(seen, starts_us, strict=True)]),
        *(np.concatenate([getattr(part, name) for part in seen]) for name in ("x", "y", "polarity")),
    )
    events, clock, cover = into_event_clock(joined, ends[-1], clock_offset_us, drift_ppm)
    codes = np.concatenate([part.codes for part in frames])
    first = takes[0].recording
    recording = Recording(
        first.title,
        FrameArray(codes, start_us, end_us, first.frames.light),
        EventArray(events, first.events.size, cover),
    )
    return recording, clock
