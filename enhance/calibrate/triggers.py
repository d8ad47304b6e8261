"""The clock from trigger pulses: the event sensor's own record of when each exposure was started."""

from __future__ import annotations

import numpy as np

from enhance.errors import CalibrationError
from enhance.recording import FrameSource, Triggers
from enhance.rig import Quantity

#: Clocks further apart than this, parts per million, are not two clocks of one rig.
MOST_PPM = 1_000.0
#: A slope of fewer standard deviations is none.
SIGNIFICANT = 3.0
METHOD = "trigger table"


def clock_from_triggers(triggers: Triggers, frames: FrameSource, first_event_us: int) -> tuple[Quantity, Quantity]:
    """Fit offset and drift to the pulses and the exposures' starts.

    Parameters
    ----------
    triggers : Triggers
        One pulse a frame, at its exposure's start (row 0's, for a rolling shutter).
    frames : FrameSource
        Only its table is looked at.
    first_event_us : int
        Event time the drift counts from.

    Returns
    -------
    offset_us, drift_ppm : Quantity

    Raises
    ------
    CalibrationError
        If the two clocks run so differently that the table cannot be of these frames.
    """
    count = len(triggers.times_us)
    x = (triggers.times_us - first_event_us) / 1e6
    difference = frames.start_us - triggers.times_us
    # Counted from the first: floats would not hold epoch-sized times.
    base = int(difference[0])
    y = (difference - base).astype(np.float64)
    away = x - x.mean()
    inertia = float((away * away).sum())
    ppm = float((away * y).sum() / inertia) if count > 2 else 0.0
    # Whole microseconds are no better than this, whatever their scatter: a uniform step of 1 us in each of two clocks.
    scatter = float(np.sqrt(((y - y.mean() - ppm * away) ** 2).sum() / max(count - 2, 1)))
    sigma = max(scatter, 0.4)
    if abs(ppm) > MOST_PPM:
        raise CalibrationError(
            f"rig.clock.triggers: frames and pulses run apart by {ppm:.0f} ppm, more than two clocks of one rig do "
            f"({MOST_PPM:g}); expected times in microseconds of the event clock, one a frame. Mend the table"
        )
    evidence = "; ".join([f"{count} pulses at the exposures' starts, scatter {scatter:.1f} us", *triggers.remarks])
    sigma_ppm = sigma / np.sqrt(inertia) if count > 2 else None
    if sigma_ppm is None or abs(ppm) < SIGNIFICANT * sigma_ppm:
        drift = Quantity(0.0, sigma_ppm, METHOD, f"{ppm:+.2f} ppm is not significant, taken as 0")
        offset = base + y.mean()
    else:
        drift = Quantity(ppm, sigma_ppm, METHOD, evidence)
        offset = base + y.mean() - ppm * x.mean()
    return Quantity(round(offset), sigma / np.sqrt(count), METHOD, evidence), drift
