"""The event double integral in log light: what deblurring, calibration and measuring all rest on.

References
----------
Pan, Scheerlinck, Yu, Hartley, Liu, Dai, "Bringing a Blurry Frame Alive at High Frame-Rate with an Event Camera",
CVPR 2019.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from enhance.kernels.event_integral import event_counts, exponential_mean
from enhance.recording import Events


def log_sum(events: Events, contrast: tuple[float, float], shape: tuple[int, int]) -> NDArray[np.float64]:
    """Log-light change of each pixel over some events.

    Parameters
    ----------
    events : Events
    contrast : tuple of float
        Thresholds, positive and negative.
    shape : tuple of int
        H, W.

    Returns
    -------
    ndarray of float64, shape (H, W)
        ``c+ N+ - c- N-``.
    """
    positive, negative = event_counts(events.x, events.y, events.polarity, shape)
    return contrast[0] * positive - contrast[1] * negative


def log_blur_ratio(
    events: Events, start_us: int, end_us: int, time_us: int, contrast: tuple[float, float], shape: tuple[int, int]
) -> NDArray[np.float64]:
    """How much brighter the average over an exposure is than one instant, in log light.

    Parameters
    ----------
    events : Events
        Those of the exposure and, for an instant outside it, those between; others are ignored.
    start_us, end_us : int
        The exposure. Equal: a sharp frame at that time.
    time_us : int
        The instant f, anywhere.
    contrast : tuple of float
        Thresholds, positive and negative.
    shape : tuple of int
        H, W.

    Returns
    -------
    ndarray of float64, shape (H, W)
        ``ln B - ln L(f) = ln( (1/T) * integral of exp(S(t) - S(f)) dt )``.
    """
    # ln B - ln L(f) = [ln mean(exp(S))] - S(f), both counted from the start of the exposure
    ratio = np.zeros(shape)
    if end_us > start_us:
        seen = events.between(start_us, end_us)
        mean, _ = exponential_mean(seen.t_us, seen.x, seen.y, seen.polarity, (start_us, end_us), contrast, shape)
        ratio = np.log(mean)
    if time_us >= start_us:
        return ratio - log_sum(events.between(start_us, time_us), contrast, shape)
    return ratio + log_sum(events.between(time_us, start_us), contrast, shape)
