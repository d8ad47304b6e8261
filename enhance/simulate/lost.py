"""Events lost on the way from the sensor to the file, taken out of a recording whose truth is known."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from enhance.recording import EventArray, Events
from enhance.simulate.recording import Simulated


def with_gap(simulated: Simulated, start_us: int, end_us: int, rows: tuple[int, int] | None = None) -> Simulated:
    """Take out all events of ``[start, end)`` of the event clock, of all rows or of ``[rows[0], rows[1])`` only."""
    events = _of(simulated)
    lost = (events.t_us >= start_us) & (events.t_us < end_us)
    if rows is not None:
        lost &= (events.y >= rows[0]) & (events.y < rows[1])
    return _with(simulated, events.keep(~lost))


def with_plateau(simulated: Simulated, most_a_millisecond: int, seed: int = 1) -> Simulated:
    """Let no more events through in any millisecond than a full link does, those that are lost drawn at random."""
    events = _of(simulated)
    if not len(events):
        return simulated
    millisecond = (events.t_us - events.t_us[0]) // 1_000
    order = np.lexsort((np.random.default_rng(seed).random(len(events)), millisecond))
    begin = np.searchsorted(millisecond, millisecond)
    place: NDArray[np.int64] = np.empty(len(events), np.int64)
    place[order] = np.arange(len(events)) - begin
    return _with(simulated, events.keep(place < most_a_millisecond))


def with_bunch(simulated: Simulated, start_us: int, end_us: int) -> Simulated:
    """Stamp all events of ``[start, end)`` of the event clock with its end, as a buffer does that is emptied late."""
    events = _of(simulated)
    late = (events.t_us >= start_us) & (events.t_us < end_us)
    return _with(simulated, replace(events, t_us=np.where(late, end_us, events.t_us)))


def _of(simulated: Simulated) -> Events:
    source = simulated.recording.events
    return source.between(source.cover_start_us, source.cover_end_us)


def _with(simulated: Simulated, events: Events) -> Simulated:
    source = simulated.recording.events
    array = EventArray(events, source.size, (source.cover_start_us, source.cover_end_us), source.notes)
    return replace(simulated, recording=replace(simulated.recording, events=array))
