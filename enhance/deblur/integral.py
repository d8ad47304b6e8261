"""The event-based double integral of one frame.

References
----------
Pan, Scheerlinck, Yu, Hartley, Liu, Dai, "Bringing a Blurry Frame Alive at High Frame-Rate with an Event Camera",
CVPR 2019.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from enhance.kernels.double_integral import log_blur_ratio
from enhance.recording import Contrast, Events


def deblur(
    image: NDArray[np.float32],
    events: Events,
    start_us: int,
    end_us: int,
    time_us: int,
    contrast: Contrast,
) -> NDArray[np.float32]:
    """Recover the sharp picture at one instant from one blurred frame.

    Parameters
    ----------
    image : ndarray of float32, shape (H, W) or (H, W, 3)
        Linear light. Colour: every channel is changed by the same ratio, the one light changes by.
    events : Events
        Those of the exposure, up to `time_us` if it lies outside, and with a ramp those up to `ramp_us` before
        and twice that after.
    start_us, end_us, time_us : int
        The exposure and the instant.
    contrast : Contrast

    Returns
    -------
    ndarray of float32, same shape
        ``L(f) = B / mean(exp(S(t) - S(f)))``.
    """
    ratio = np.exp(-log_blur_ratio(events, start_us, end_us, time_us, contrast, image.shape[:2])).astype(np.float32)
    return image * (ratio if image.ndim == 2 else ratio[..., None])
