"""How far each piece of evidence on a key's log latent is trusted.

The published multi-frame system weighs a key's own double integral and the events to its neighbours alike. Their errors
differ from pixel to pixel, so the weights here are inverse variances of the log light:

- own: the frame's noise over its light, and, where events fired in the exposure, the part-filled thresholds of the
  steps averaged over and the mismatch of the pixel's thresholds times the steps it took;
- change: the part-filled threshold at either end (also where no event fired: light may creep by almost a threshold),
  and the mismatch times the events between.
"""

from __future__ import annotations

from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.kernels.double_integral import log_blur_ratio, log_sum
from enhance.kernels.event_integral import event_counts
from enhance.light import LOG_FLOOR, Image
from enhance.recording import Contrast, Events

Array = NDArray[np.float64]

#: Relative error of a pixel's threshold: mismatch between pixels (2 to 4 %, common practice) and of the estimate.
MISMATCH = 0.05
#: Variance that a step leaves open in a log ratio, in squared thresholds, and the neighbourhood it is judged over. On
#: simulated recordings 1/48 to 1/12 gain 0 to 1.7 dB, most in slow scenes; more takes sharpness from fast ones.
DAMPING, DAMPING_PIXELS = 1 / 48, 5
#: Natural log by which light at the ceiling may exceed it, one standard deviation: it gives way to any neighbour that
#: knows better by the events between, and still holds a region together that is clipped in all of them.
CLIPPED_NOISE = np.float32(1.0)


@dataclass(frozen=True)
class Evidence:
    """A log value and its inverse variance, both of shape (H, W)."""

    value: Array
    weight: Array


def own_evidence(
    log_image: Array,
    noise: Array,
    events: Events,
    interval_us: tuple[int, int],
    time_us: int,
    contrast: Contrast,
) -> Evidence:
    """Find a key's log latent by its own double integral.

    Parameters
    ----------
    log_image : ndarray, shape (H, W)
        ln B.
    noise : ndarray, shape (H, W)
        Standard deviation of ln B by the frame's noise.
    events : Events
        Those of the exposure.
    interval_us : tuple of int
        The exposure.
    time_us : int
        The instant of the latent.
    contrast : Contrast

    Returns
    -------
    Evidence
    """
    shape = log_image.shape
    start, end = interval_us
    value = log_image - damped(log_blur_ratio(events, start, end, time_us, contrast, shape), contrast.mean)
    if end <= start:
        return Evidence(value, 1.0 / noise**2)
    seen = events.between(start, end)
    steps = event_counts(seen.x, seen.y, seen.polarity, shape).sum(axis=0)
    c = contrast.mean
    variance = noise**2 + np.where(steps > 0, c**2 / 48, 0.0) + (MISMATCH * c) ** 2 * steps
    return Evidence(value, 1.0 / variance)


def log_noise(noise: Image, light: Image, clipped: NDArray[np.bool_] | None) -> Image:
    """Tell the standard deviation of a frame's log light.

    Parameters
    ----------
    noise : ndarray of float32, shape (H, W)
        Standard deviation of the frame's light.
    light : ndarray of float32, shape (H, W)
    clipped : ndarray of bool, shape (H, W), optional
        Pixels at the frame's ceiling, which say no more than "at least".

    Returns
    -------
    ndarray of float32, shape (H, W)
    """
    relative: Image = np.asarray(noise / (np.maximum(light, 0) + LOG_FLOOR), np.float32)
    if clipped is not None:
        relative[clipped] = np.maximum(relative[clipped], CLIPPED_NOISE)
    return relative


def at_least(latent: Array, own: Array, clipped: NDArray[np.bool_] | None) -> Array:
    """Hold a log latent to the one thing a clipped pixel says: it was at least as light as by its own double integral.

    Parameters
    ----------
    latent, own : ndarray of float64, shape (H, W)
        By all evidence, and by the key's own, whose light stands at the ceiling where it is clipped.
    clipped : ndarray of bool, shape (H, W), optional

    Returns
    -------
    ndarray of float64, shape (H, W)
    """
    return latent if clipped is None else np.where(clipped, np.maximum(latent, own), latent)


def damped(ratio: Array, contrast: float) -> Array:
    """Take a log ratio back where it is no larger than what the events' steps leave open around it.

    Slow and faint edges fire a single event here and there: corrected by them, a nearly sharp frame would get the steps
    of the staircase stamped on it. Where blur is real, its ratios are large and near each other, and stay.

    Parameters
    ----------
    ratio : ndarray of float64, shape (H, W)
        ln B - ln L.
    contrast : float
        Mean threshold.

    Returns
    -------
    ndarray of float64, shape (H, W)

    References
    ----------
    Wiener, "Extrapolation, Interpolation, and Smoothing of Stationary Time Series", 1949: signal / (signal + noise).
    """
    signal = cv2.GaussianBlur(ratio**2, (DAMPING_PIXELS, DAMPING_PIXELS), 0)
    return ratio * (signal / (signal + DAMPING * contrast**2))


def change_evidence(
    events: Events, interval_us: tuple[int, int], contrast: Contrast, shape: tuple[int, int]
) -> Evidence:
    """Find the log change between two instants by the events between.

    Parameters
    ----------
    events : Events
        Those between the instants, and with a ramp those up to `ramp_us` before and twice that after.
    interval_us : tuple of int
        The instants.
    contrast : Contrast
    shape : tuple of int
        H, W.

    Returns
    -------
    Evidence
    """
    seen = events.between(*interval_us)
    count = event_counts(seen.x, seen.y, seen.polarity, shape).sum(axis=0)
    c = contrast.mean
    # A part-filled threshold at either end, each uniform over one step: 2 c^2 / 12
    variance = c**2 / 2 + (MISMATCH * c * count) ** 2
    return Evidence(log_sum(events, *interval_us, contrast, shape), 1.0 / variance)
