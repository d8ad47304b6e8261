"""Three pictures to look at before the night: a wrong clock or curve shows at once."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from enhance.clip.keys import Keys
from enhance.clip.level import levelled
from enhance.clip.outputs import write_one
from enhance.clip.passes import load_fusion, load_shipped_trust, measured_rig
from enhance.clip.pictures import Pictures
from enhance.clip.source import events_on_frames, opened
from enhance.light import Image, Light, luma
from enhance.recording import By, Events, Kind, Picture, Recording
from enhance.settings import ClipSettings

#: Keys the rig of a preview is measured on: enough for a look, few enough for half a minute.
KEYS = 24
#: Half of the stretch whose events are drawn, at the least and at the most, microseconds.
SHORTEST_US, LONGEST_US = 500, 2_000


def preview(settings: ClipSettings, folder: Path) -> list[Path]:
    """Make one deblurred key, one inserted picture, and a frame with its events drawn over it.

    Parameters
    ----------
    settings : ClipSettings
    folder : Path
        Where the three go.

    Returns
    -------
    list of Path
    """
    with opened(settings) as recording:
        count = len(recording.frames)
        first = _busiest(recording) if count > 1 else 0
        near = range(max(0, first - KEYS // 2), min(count, first + KEYS // 2))
        level = levelled(recording, near, settings, measured_rig)
        rig = level.rig
        network = load_fusion(settings) if count > 1 else None
        keys = Keys(level.recording.frames, near, events_on_frames(recording, rig), rig, network, load_shipped_trust())
        pictures = Pictures(keys)
        light = recording.frames.light
        start = keys.times_us[0]
        key = first - near.start
        made = [
            write_one(folder / "frame-with-events.png", _drawn(recording, keys, key), light, start),
            write_one(folder / "deblurred.png", keys.picture(key), light, start),
        ]
        if count > 1:
            middle = (keys.times_us[key] + keys.times_us[key + 1]) // 2
            made.append(write_one(folder / "inserted.png", pictures.at(middle), light, start))
        return made


def _busiest(recording: Recording) -> int:
    """Find the frame, among some, whose interval to the next holds most events: there a mistake shows."""
    frames, events = recording.frames, recording.events
    starts = np.linspace(0, len(frames) - 2, min(len(frames) - 1, 200)).round().astype(int)
    shift = 0
    if events.cover_end_us <= frames.start_us[0] or frames.end_us[-1] <= events.cover_start_us:
        shift = events.cover_start_us - int(frames.start_us[0])
    counts = [
        events.count_between(int(frames.start_us[k]) + shift, int(frames.start_us[k + 1]) + shift) for k in starts
    ]
    return int(starts[int(np.argmax(counts))])


def _drawn(recording: Recording, keys: Keys, key: int) -> Picture:
    """Draw the events around a frame's middle over it: brighter ones red, darker ones blue, the frame dimmed grey."""
    frame = recording.frames.frame(keys.indices[key])
    events = Events.none()
    if keys.events is not None:
        # All of an exposure's events would cover the picture; those of a short while are lines where the edges are.
        half = min(max(frame.exposure_us // 16, SHORTEST_US), LONGEST_US)
        events = keys.events.between(frame.time_us - half, frame.time_us + half)
    return Picture(_overlay(luma(frame.image), events, recording.frames.light), frame.time_us, Kind.CAPTURED, By.FRAMES)


def _overlay(light: Image, events: Events, curve: Light) -> Image:
    grey = 0.25 * curve.full_scale + 0.5 * np.clip(curve.to_codes(light), 0, curve.full_scale)
    codes = np.repeat(grey[..., None], 3, axis=2)
    red, blue = np.array([[1.0, 0.15, 0.1], [0.1, 0.3, 1.0]]) * curve.full_scale
    rising = events.polarity > 0
    codes[events.y[rising], events.x[rising]] = red
    codes[events.y[~rising], events.x[~rising]] = blue
    return curve.to_linear(codes)
