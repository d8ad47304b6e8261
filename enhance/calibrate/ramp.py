"""How long before its event a change of light begins.

Where an edge passes, a pixel fires in a burst, one event for each threshold of the edge's contrast. Between the events
of a burst light is on its way from one level to the next; before the first it was on its way as well, for about as
long. The usual interval within bursts is therefore the length of the ramp that leads to an event of a pixel that was
quiet before.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from enhance.calibrate.evidence import Pair
from enhance.kernels.event_intervals import burst_intervals
from enhance.recording import EventSource
from enhance.rig import Quantity

#: Ramp in median intervals: on 17 simulated recordings the best lay at 1 to 4 of them, at about 2 in most.
INTERVALS = 2.0
#: Only intervals within an exposure are looked at, so where light takes longer their median is half an exposure
#: whatever the scene: a ramp over this part of the exposure cannot be told, and the clock's offset takes its lag up.
#: At half an exposure, as it stood before, three slow scenes got a clock 3 ms early, and keys 4 to 6 dB worse.
LONGEST_SHARE = 0.9
#: Intervals a median needs, and pairs that are looked at.
LEAST_INTERVALS, PAIRS = 200, 6
METHOD = "interval of events within bursts"


def estimate_ramp(pairs: Sequence[Pair], events: EventSource) -> Quantity:
    """Find the ramp of a recording's events.

    Parameters
    ----------
    pairs : sequence of Pair
    events : EventSource
        Events on the frames' pixels; the clock may be some milliseconds off.

    Returns
    -------
    Quantity
        Microseconds; 0, with the reason, where it cannot be told.
    """
    strongest = sorted(pairs, key=lambda p: float(np.abs(p.change).sum()), reverse=True)[:PAIRS]
    intervals = []
    for pair in strongest:
        seen = events.between(pair.first.start_us, pair.second.end_us)
        intervals.append(burst_intervals(seen.t_us, seen.x, seen.y, seen.polarity, pair.change.shape))
    exposure = int(np.median([pair.first.exposure_us for pair in pairs])) if pairs else 0
    short = np.concatenate([*intervals, np.empty(0, np.int64)])
    short = short[short < exposure]
    if len(short) < LEAST_INTERVALS:
        return Quantity(0, None, "assumed", f"only {len(short)} bursts within an exposure of {exposure} us")
    ramp = round(INTERVALS * float(np.median(short)))
    if ramp > LONGEST_SHARE * exposure:
        reason = f"exposures of {exposure} us cannot tell a ramp of {ramp} us from a clock offset"
        return Quantity(0, None, "assumed", reason)
    evidence = f"{len(short)} intervals of events of one sign, median {np.median(short):.0f} us"
    return Quantity(ramp, None, METHOD, evidence)
