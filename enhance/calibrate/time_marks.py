"""Which edge of the exposure the frames' times mark, and whether a given clock is that of the events.

A table with one time a frame says nothing of where in the exposure that time lies. A wrong `frames.time_marks` moves
every exposure by half its length or all of it, and shows where the clock is known from elsewhere: events and frames
then fit best at just such a shift. Where the clock is estimated, the offset takes the mistake up and no harm is done.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from enhance.calibrate.clock import LEAST_CORRELATION, refine_offset
from enhance.calibrate.evidence import Pair
from enhance.recording import Contrast, EventSource
from enhance.rig import Quantity

#: Shifts are looked for up to this many exposures either side; over that it is no question of edges.
REACH = 1.3
#: A shift this near a half or a whole exposure, in exposures, is taken for one; as near as the search is in poor light.
NEAR = 0.12
#: A shift of fewer standard deviations, or of less than this part of the exposure, is none.
SIGNIFICANT, LEAST_SHARE = 4.0, 0.04
#: In exposures shorter than this an edge is no matter. Pairs that are looked at.
SHORT_US, PAIRS = 2_000, 6
METHOD = "best fit of frames and events around the given clock"

_NAMED = {-1.0: "a whole exposure early", -0.5: "half an exposure early", 0.5: "half an exposure late"} | {
    1.0: "a whole exposure late"
}
_MARKS = {
    -1.0: '"start" in place of "end"',
    -0.5: '"start" in place of "middle", or "middle" in place of "end"',
    0.5: '"middle" in place of "start", or "end" in place of "middle"',
    1.0: '"end" in place of "start"',
}


def check_clock(pairs: Sequence[Pair], events: EventSource, contrast: Contrast) -> Quantity:
    """Look whether frames and events fit better at another clock than the one they were given.

    Parameters
    ----------
    pairs : sequence of Pair
    events : EventSource
        On the frames' pixels, in the given clock.
    contrast : Contrast

    Returns
    -------
    Quantity
        The shift, in microseconds, that the events lack; its evidence is a remark where it is one to be told, else
        empty. None, with the reason, where nothing can be told.
    """
    strongest = sorted(pairs, key=lambda pair: float(np.abs(pair.change).sum()), reverse=True)[:PAIRS]
    exposure = int(np.median([pair.first.exposure_us for pair in pairs])) if pairs else 0
    if len(strongest) < 2 or exposure < SHORT_US:
        return Quantity(None, None, METHOD, f"{len(strongest)} pairs of exposures of {exposure} us tell nothing of it")
    shift, sigma, correlation = refine_offset(strongest, events, 0, round(REACH * exposure), contrast)
    if sigma is None or correlation < LEAST_CORRELATION or abs(shift) >= REACH * exposure - 1_000:
        return Quantity(None, None, METHOD, f"frames and events do not move together near it ({correlation:.2f})")
    return Quantity(shift, sigma, METHOD, _remark(shift, sigma, exposure))


def _remark(shift: int, sigma: float, exposure: int) -> str:
    if abs(shift) < max(SIGNIFICANT * sigma, LEAST_SHARE * exposure):
        return ""
    edge = min(_NAMED, key=lambda each: abs(shift - each * exposure))
    lack = f"frames and events fit best {shift / 1000:+.2f} +/- {sigma / 1000:.2f} ms from the given clock"
    if abs(shift - edge * exposure) <= max(NEAR * exposure, 2 * sigma):
        return (
            f"the exposures look {_NAMED[edge]} ({lack}, of {exposure / 1000:.1f} ms exposure): where a frame has one "
            f'time, frames.time_marks is likely {_MARKS[edge]}; else check rig.clock, or write rig.clock = "estimate"'
        )
    return f'{lack}: check rig.clock, or write rig.clock = "estimate"'


def edge_of_offset(offset: Quantity, exposure_us: int) -> str:
    """Say where an estimated offset is one that a wrong edge of two clocks in step would leave.

    Parameters
    ----------
    offset : Quantity
        Estimated.
    exposure_us : int

    Returns
    -------
    str
        A remark, or nothing.
    """
    if offset.value is None or offset.uncertainty is None or exposure_us < SHORT_US:
        return ""
    edge = min(_NAMED, key=lambda each: abs(offset.value - each * exposure_us))
    if abs(offset.value - edge * exposure_us) > max(2 * offset.uncertainty, 0.015 * exposure_us):
        return ""
    return f"if both clocks are in step, frames.time_marks is likely {_MARKS[edge]}: the offset is {_NAMED[edge]}"
