"""The event double integral in log light: what deblurring, calibration and measuring all rest on.

References
----------
Pan, Scheerlinck, Yu, Hartley, Liu, Dai, "Bringing a Blurry Frame Alive at High Frame-Rate with an Event Camera",
CVPR 2019.
"""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.kernels.event_integral import event_counts, exponential_mean, part_filled
from enhance.recording import Contrast, Events

#: No change of light is larger in log: 100 dB. A pixel that fires on and on (hot for a while) stays finite by it.
LARGEST_CHANGE = 12.0
#: How much of the steps between coarse event pixels is smoothed away; 1 is about bilinear interpolation. On simulated
#: recordings of 2 and 4 frame pixels an event pixel, none costs up to 0.3 dB against this, 1 up to 0.2 dB.
SMOOTHED = 0.7


def log_sum(
    events: Events, start_us: int, end_us: int, contrast: Contrast, shape: tuple[int, int]
) -> NDArray[np.float64]:
    """Log-light change of each pixel from one instant to another.

    Parameters
    ----------
    events : Events
        Those between, and with a ramp those up to `ramp_us` before and twice that after.
    start_us, end_us : int
        The instants, in either order.
    contrast : Contrast
    shape : tuple of int
        H, W.

    Returns
    -------
    ndarray of float64, shape (H, W)
        ``c+ N+ - c- N-``, and with a ramp the part-filled thresholds at both ends; within `LARGEST_CHANGE`. Resampled
        smoothly to the frame's pixels where those of the events are wider.
    """
    return _resampled(_log_sum(events, start_us, end_us, contrast, shape), contrast)


def _log_sum(
    events: Events, start_us: int, end_us: int, contrast: Contrast, shape: tuple[int, int]
) -> NDArray[np.float64]:
    if end_us < start_us:
        return -_log_sum(events, end_us, start_us, contrast, shape)
    seen = events.between(start_us, end_us)
    positive, negative = event_counts(seen.x, seen.y, seen.polarity, shape)
    change: NDArray[np.float64] = contrast.positive * positive - contrast.negative * negative
    if contrast.ramp_us:
        change += _filled(events, end_us, contrast, shape) - _filled(events, start_us, contrast, shape)
    return np.clip(change, -LARGEST_CHANGE, LARGEST_CHANGE)


def log_blur_ratio(
    events: Events, start_us: int, end_us: int, time_us: int, contrast: Contrast, shape: tuple[int, int]
) -> NDArray[np.float64]:
    """How much brighter the average over an exposure is than one instant, in log light.

    Parameters
    ----------
    events : Events
        Those of the exposure, for an instant outside it those between, and with a ramp those up to `ramp_us`
        before and twice that after.
    start_us, end_us : int
        The exposure. Equal: a sharp frame at that time.
    time_us : int
        The instant f, anywhere.
    contrast : Contrast
    shape : tuple of int
        H, W.

    Returns
    -------
    ndarray of float64, shape (H, W)
        ``ln B - ln L(f) = ln( (1/T) * integral of exp(S(t) - S(f)) dt )``; within `LARGEST_CHANGE`.
    """
    if end_us <= start_us:
        return -log_sum(events, start_us, time_us, contrast, shape)
    ramp = contrast.ramp_us
    seen = events.between(start_us - ramp, end_us + 2 * ramp)
    interval = (start_us, end_us)
    mean = exponential_mean(seen.t_us, seen.x, seen.y, seen.polarity, interval, contrast.thresholds, shape, ramp)
    # The mean counts from the last event before the exposure: what was part-filled at its start is in it already.
    ratio = np.log(mean) - _log_sum(events, start_us, time_us, contrast, shape)
    if ramp:
        ratio -= _filled(events, start_us, contrast, shape)
    return _resampled(np.clip(ratio, -LARGEST_CHANGE, LARGEST_CHANGE), contrast)


def _resampled(change: NDArray[np.float64], contrast: Contrast) -> NDArray[np.float64]:
    """Take the steps between coarse event pixels out of a map on the frame's pixels.

    Each frame pixel holds its event pixel's value: a box as wide as that pixel. Smoothing by as much again would make
    about the tent of bilinear interpolation.
    """
    if contrast.pitch <= 1.0:
        return change
    # variance of a box less that of the frame pixel's own
    sigma = SMOOTHED * np.sqrt((contrast.pitch**2 - 1) / 12)
    return np.asarray(cv2.GaussianBlur(change, (0, 0), sigma)) if sigma > 0.1 else change


def _filled(events: Events, time_us: int, contrast: Contrast, shape: tuple[int, int]) -> NDArray[np.float64]:
    ramp = contrast.ramp_us
    near = events.between(time_us - ramp, time_us + 2 * ramp)
    return part_filled(near.t_us, near.x, near.y, near.polarity, time_us, contrast.thresholds, shape, ramp)
