"""The noise of a captured frame, and the score a flawless picture would read against it."""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.errors import MeasureError

#: Median absolute deviation to standard deviation of a normal distribution.
_MAD_TO_SIGMA = 1.4826
#: Standard deviation of a normal distribution cut at 3 sigma, in sigmas (computed: sqrt(1 - 6 phi(3) / 0.9973)).
_CUT, _CUT_SIGMA = 3.0, 0.98658
#: Fewer pixels tell nothing; brightness classes are as many as have this many pixels each, up to the most.
_FEWEST, _MOST_CLASSES = 400, 16


def noise_sigma(
    frame_codes: NDArray[np.generic],
    neighbour_codes: NDArray[np.generic] | None = None,
    static_mask: NDArray[np.bool_] | None = None,
    full_scale: float | None = None,
) -> float | None:
    """Root mean square noise of a captured frame.

    From the difference to a neighbouring captured frame where nothing moved: robustly, and class by class of
    brightness, as a sensor's noise grows with light. With no neighbour, or too few static pixels, from the frame
    alone, which reads fine texture as noise and is then an upper bound.

    Parameters
    ----------
    frame_codes : ndarray, shape (H, W) or (H, W, 3)
        Code values.
    neighbour_codes : ndarray, same shape, optional
        The captured frame before or after.
    static_mask : ndarray of bool, shape (H, W), optional
        Pixels without events in either exposure and between; all if left out.
    full_scale : float, optional
        Pixels at or above it, or at or below 0, show no noise and are left out; None keeps them.

    Returns
    -------
    float or None
        In code values; None for a picture with too few pixels to tell.

    Raises
    ------
    MeasureError
        If the shapes differ.

    References
    ----------
    Immerkaer, "Fast noise variance estimation", Computer Vision and Image Understanding 64(2), 1996 (one frame).
    """
    frame = np.atleast_3d(frame_codes.astype(np.float64))
    if neighbour_codes is None:
        return _one_frame(frame)
    neighbour = np.atleast_3d(neighbour_codes.astype(np.float64))
    if neighbour.shape != frame.shape or (static_mask is not None and static_mask.shape != frame.shape[:2]):
        raise MeasureError(
            f"The frame is {frame_codes.shape}, its neighbour {neighbour_codes.shape}, the static pixels "
            f"{None if static_mask is None else static_mask.shape}; expected one (H, W)."
        )
    chosen = np.ones(frame.shape[:2], bool) if static_mask is None else static_mask.copy()
    if full_scale is not None:
        both = np.concatenate([frame, neighbour], axis=2)
        chosen &= ((both > 0) & (both < full_scale)).all(axis=2)
    if chosen.sum() < _FEWEST:
        return _one_frame(frame)
    variances = [_pair_variance(frame[chosen, c], neighbour[chosen, c]) for c in range(frame.shape[2])]
    return float(np.sqrt(np.mean(variances)))


def ceiling(sigma: float | None, full_scale: float) -> float | None:
    """PSNR that a flawless picture reads against a captured frame with this noise.

    Parameters
    ----------
    sigma : float or None
        Noise in code values.
    full_scale : float
        MAX.

    Returns
    -------
    float or None
        ``20 log10(MAX / sigma)`` in dB; infinite without noise, None where the noise is not known.

    Examples
    --------
    >>> round(ceiling(5.06, 255), 2)
    34.05
    """
    if sigma is None:
        return None
    return float("inf") if sigma == 0 else float(20.0 * np.log10(full_scale / sigma))


def _pair_variance(frame: NDArray[np.float64], neighbour: NDArray[np.float64]) -> float:
    """Noise variance of one frame from a pair, shape (N,) each: mean over classes of equal size."""
    # The order by sum does not depend on the difference where both carry the same noise.
    order = np.argsort(frame + neighbour, kind="stable")
    difference = (frame - neighbour)[order]
    classes = int(np.clip(difference.size // _FEWEST, 1, _MOST_CLASSES))
    return float(np.mean([_robust_variance(part) for part in np.array_split(difference, classes)])) / 2.0


def _robust_variance(difference: NDArray[np.float64]) -> float:
    """Variance of the bulk of some differences; pixels that changed lie in the tails."""
    centred = difference - np.median(difference)
    # Whole codes make the median coarse or even 0, hence no narrower than one code, and refined within the cut.
    sigma = max(_MAD_TO_SIGMA * float(np.median(np.abs(centred))), 1.0)
    for _ in range(4):
        inside = centred[np.abs(centred) <= _CUT * sigma]
        spread = float(inside.std())
        if spread == 0.0:
            return 0.0
        sigma = spread / _CUT_SIGMA
    return sigma**2


def _one_frame(frame: NDArray[np.float64]) -> float | None:
    height, width, channels = frame.shape
    if height < 3 or width < 3 or height * width < _FEWEST:
        return None
    # difference of two Laplacians: flat ramps and straight edges cancel, noise of sigma becomes 6 sigma
    mask = np.array([[1, -2, 1], [-2, 4, -2], [1, -2, 1]], np.float64)
    sigmas = []
    for c in range(channels):
        response = cv2.filter2D(np.ascontiguousarray(frame[..., c]), cv2.CV_64F, mask)[1:-1, 1:-1]
        # sigma = sqrt(pi / 2) / 6 * mean |I * N|
        sigmas.append(np.sqrt(np.pi / 2.0) / 6.0 * np.abs(response).mean())
    return float(np.sqrt(np.mean(np.square(sigmas))))
