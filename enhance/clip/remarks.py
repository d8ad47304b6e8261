"""What a rig says that the user should read beside the pictures: a lamp, lost events, bad pixels."""

from __future__ import annotations

from typing import Any

from enhance.rig import Rig


def rig_remarks(rig: Rig) -> list[str]:
    """Say what was found to be wrong with the light or the events, and what was done about it.

    Parameters
    ----------
    rig : Rig

    Returns
    -------
    list of str
    """
    remarks = []
    if rig.flicker_hz.value is not None:
        remarks.append(_lamp(rig))
    if rig.lost.value:
        count = len(rig.lost.value)
        stretches = "1 stretch" if count == 1 else f"{count} stretches"
        remarks.append(
            f"events are missing in {stretches} of the recording ({rig.lost.evidence}); where a tenth of them or more "
            "is, pictures are made from frames alone"
        )
    if rig.dead_pixels.value:
        remarks.append(f"dead pixels of the event sensor, given their neighbours' events: {len(rig.dead_pixels.value)}")
    return remarks


def _lamp(rig: Rig) -> str:
    depth = "" if rig.flicker_depth.value is None else f", depth of modulation {rig.flicker_depth.value:.2f}"
    if rig.offset_us.value is None:
        return f"a lamp flickers at {rig.flicker_hz.value:.2f} Hz; frames that beat with it stay as they are"
    seen = rig.flicker_in_frames
    frames = "frames were brought to steady light" if seen.value else "the frames do not show it and stay as they are"
    why = f" ({seen.evidence})" if seen.evidence else ""
    return f"a lamp flickers at {rig.flicker_hz.value:.2f} Hz{depth}: its events were taken out; {frames}{why}"


def lost_figures(rig: Rig) -> dict[str, Any]:
    """Give the stretches without events for quality.json.

    Parameters
    ----------
    rig : Rig

    Returns
    -------
    dict
    """
    return {
        "stretches_us": [[int(start), int(end), float(share)] for start, end, share in rig.lost.value or ()],
        "evidence": rig.lost.evidence,
        "definition": "start, end (event clock, microseconds) and share of the events surmised lost of each stretch in "
        "which events are missing: gaps, row bands, full links, bunched stamps",
    }
