"""How near a picture is to a reference: PSNR and SSIM, in unrounded code values of the frames' own curve."""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.errors import MeasureError

#: 11 x 11 Gaussian window of sigma 1.5 (Wang et al. 2004); the border it cannot cover is left out.
_WINDOW, _SIGMA, _BORDER = 11, 1.5, 5
_K1, _K2 = 0.01, 0.03


def psnr(
    reference: NDArray[np.generic],
    estimate: NDArray[np.generic],
    full_scale: float,
    mask: NDArray[np.bool_] | None = None,
) -> float | None:
    """Peak signal-to-noise ratio.

    Parameters
    ----------
    reference, estimate : ndarray, shape (H, W) or (H, W, 3)
        Code values.
    full_scale : float
        MAX: the code value of full scale.
    mask : ndarray of bool, shape (H, W), optional
        Pixels that count; all of them if left out.

    Returns
    -------
    float or None
        dB; infinite for equal pictures, None where no pixel counts.

    Raises
    ------
    MeasureError
        If the shapes differ, a value is not finite, or `full_scale` is not positive.

    Examples
    --------
    >>> round(psnr(np.zeros((4, 4)), np.ones((4, 4)), 255), 4)
    48.1308
    """
    check_pair(reference, estimate, full_scale, mask)
    squared = (reference.astype(np.float64) - estimate.astype(np.float64)) ** 2
    counted = squared if mask is None else squared[mask]
    if counted.size == 0:
        return None
    # PSNR = 10 log10(MAX^2 / MSE), MSE over R, G and B alike
    mean = float(counted.mean())
    return float("inf") if mean == 0.0 else float(10.0 * np.log10(full_scale**2 / mean))


def ssim(
    reference: NDArray[np.generic],
    estimate: NDArray[np.generic],
    full_scale: float,
    mask: NDArray[np.bool_] | None = None,
) -> float | None:
    """Structural similarity: Gaussian window, population covariance, mean over the valid area and the channels.

    Parameters
    ----------
    reference, estimate : ndarray, shape (H, W) or (H, W, 3)
        Code values.
    full_scale : float
        Code value of full scale.
    mask : ndarray of bool, shape (H, W), optional
        Pixels of the similarity map that count.

    Returns
    -------
    float or None
        1 for equal pictures; None where no pixel of the valid area counts.

    Raises
    ------
    MeasureError
        If the shapes differ, a value is not finite, or a side is under 11 pixels.

    References
    ----------
    Wang, Bovik, Sheikh, Simoncelli, "Image quality assessment: from error visibility to structural similarity", IEEE
    Transactions on Image Processing 13(4), 2004.
    """
    check_pair(reference, estimate, full_scale, mask)
    if min(reference.shape[:2]) < _WINDOW:
        raise MeasureError(
            f"SSIM of a picture of {reference.shape[0]} x {reference.shape[1]} pixels: "
            f"its window needs {_WINDOW} x {_WINDOW}. Use a larger crop, or PSNR alone."
        )
    inner = (slice(_BORDER, -_BORDER), slice(_BORDER, -_BORDER))
    similarity = _similarity(reference.astype(np.float64), estimate.astype(np.float64), full_scale)[inner]
    counted = similarity if mask is None else similarity[mask[inner]]
    return float(counted.mean()) if counted.size else None


def check_pair(
    reference: NDArray[np.generic],
    estimate: NDArray[np.generic],
    full_scale: float,
    mask: NDArray[np.bool_] | None = None,
) -> None:
    """Refuse two pictures that no figure can compare.

    Parameters
    ----------
    reference, estimate : ndarray, shape (H, W) or (H, W, 3)
    full_scale : float
    mask : ndarray of bool, shape (H, W), optional

    Raises
    ------
    MeasureError
        With what was found and what was expected.
    """
    if reference.shape != estimate.shape or reference.ndim not in (2, 3):
        raise MeasureError(
            f"The pictures have the shapes {reference.shape} and {estimate.shape}; "
            "expected the same (H, W) or (H, W, 3) for both."
        )
    if mask is not None and (mask.shape != reference.shape[:2] or mask.dtype != bool):
        raise MeasureError(
            f"The mask is {mask.dtype} of shape {mask.shape}; expected bool of shape {reference.shape[:2]}."
        )
    if not full_scale > 0:
        raise MeasureError(f"Full scale is {full_scale}; expected the code value of full light, above 0.")
    for name, picture in (("reference", reference), ("estimate", estimate)):
        if not np.isfinite(picture).all():
            raise MeasureError(f"The {name} holds a value that is not finite; no figure can be given for it.")


def _similarity(a: NDArray[np.float64], b: NDArray[np.float64], full_scale: float) -> NDArray[np.float64]:
    mean_a, mean_b = _blur(a), _blur(b)
    # population covariance: E[ab] - E[a] E[b], without the factor n / (n - 1)
    variance_a, variance_b = _blur(a * a) - mean_a**2, _blur(b * b) - mean_b**2
    covariance = _blur(a * b) - mean_a * mean_b
    c1, c2 = (_K1 * full_scale) ** 2, (_K2 * full_scale) ** 2
    # SSIM = (2 ma mb + C1) (2 cov + C2) / ((ma^2 + mb^2 + C1) (va + vb + C2))
    top = (2 * mean_a * mean_b + c1) * (2 * covariance + c2)
    return top / ((mean_a**2 + mean_b**2 + c1) * (variance_a + variance_b + c2))


def _blur(image: NDArray[np.float64]) -> NDArray[np.float64]:
    blurred = cv2.GaussianBlur(image, (_WINDOW, _WINDOW), _SIGMA, borderType=cv2.BORDER_REFLECT)
    return np.asarray(blurred, dtype=np.float64)
