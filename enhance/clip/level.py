"""One brightness and one level for all frames of a recording, and the rig measured on frames that have it."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from enhance.calibrate import ClippedCount, LevelledFrames, evenly_lit, find_gain, find_stripes
from enhance.clip.source import events_on_frames
from enhance.recording import Recording
from enhance.rig import Quantity, Rig
from enhance.settings import ClipSettings

#: Measures the rig of a recording on some of its frames.
Measure = Callable[[Recording, range, ClipSettings], Rig]
#: Share of pixels at the ceiling that is worth a line.
NOTED_SHARE = 1e-4


@dataclass(frozen=True)
class Levelled:
    """A recording whose frames mean the same light everywhere.

    Parameters
    ----------
    recording : Recording
    rig : Rig
        Measured on it; what was taken out of the frames stands in `stripes` and `brightness`.
    clipped : ClippedCount
        Of its keys.
    """

    recording: Recording
    rig: Rig
    clipped: ClippedCount

    @property
    def notes(self) -> tuple[str, ...]:
        """What was done to the frames, in words, and how much of them is clipped."""
        found = []
        if self.rig.stripes.value:
            found.append(
                f"stripes of {self.rig.stripes.value:.2%} of full scale are taken out ({self.rig.stripes.evidence})"
            )
        if self.rig.brightness.value:
            steps = self.rig.brightness.value
            first = ", ".join(f"{factor:g} times at frame {frame}" for frame, factor in steps[:3])
            found.append(
                f"the frames' brightness steps without any event: {first}{' ...' if len(steps) > 3 else ''}; "
                f"all are brought to one ({self.rig.brightness.evidence})"
            )
        count = self.clipped
        if count.pixels and count.ceiling > NOTED_SHARE * count.pixels:
            found.append(
                f"{count.ceiling / count.pixels:.2%} of the keys' pixels are clipped at full scale, most at "
                f"{count.most_at_us} us: what they were is told by events and neighbouring frames where these know, "
                "else they stay at full scale"
            )
        return tuple(found)

    @property
    def figures(self) -> dict[str, Any]:
        """What stands in quality.json."""
        count = self.clipped
        return {
            "keys": count.frames,
            "ceiling": count.ceiling / count.pixels if count.pixels else None,
            "floor": count.floor / count.pixels if count.pixels else None,
            "most_time_us": count.most_at_us,
            "definition": "share of the captured keys' pixels at full scale in some colour, and with no light or less; "
            "neither says how light it was. They count as no evidence for the rig, and as little in deblurring",
        }


def levelled(recording: Recording, keys: range, settings: ClipSettings, measure: Measure) -> Levelled:
    """Take stripes and steps of brightness out of the frames, where there are any, and measure the rig.

    Parameters
    ----------
    recording : Recording
    keys : range
        Frames that may be looked at; the others' own brightness is only told for whoever compares with them.
    settings : ClipSettings
    measure : callable
        Measures the rig of a recording on its keys.

    Returns
    -------
    Levelled

    Raises
    ------
    CalibrationError
        If the rig cannot be told.
    """
    clipped = ClippedCount()
    if settings.frames.level == "given":
        for index in keys:
            clipped.add(recording.frames.frame(index))
        return Levelled(recording, measure(recording, keys, settings), clipped)
    offset, stripes = find_stripes(recording.frames, keys)
    if offset is not None:
        recording = replace(recording, frames=LevelledFrames(recording.frames, offset=offset))
    rig = measure(recording, keys, settings)
    scale, brightness, clipped = _gain(recording, keys, rig)
    if brightness.value:
        # the rig is measured again on frames of one brightness, and the brightness with that rig: a rig file that is
        # fed back in then gives the same pictures
        rig = measure(replace(recording, frames=LevelledFrames(recording.frames, scale)), keys, settings)
        scale, brightness, clipped = _gain(recording, keys, rig)
        recording = replace(recording, frames=LevelledFrames(recording.frames, scale))
    return Levelled(recording, replace(rig, stripes=stripes, brightness=brightness), clipped)


def _gain(recording: Recording, keys: Sequence[int], rig: Rig) -> tuple[NDArray[np.float64], Quantity, ClippedCount]:
    events = events_on_frames(recording, rig)
    return find_gain(
        evenly_lit(recording.frames, events, rig), keys, events, rig.contrast if events is not None else None
    )
