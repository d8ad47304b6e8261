"""The multi-frame double integral: neighbouring latents tied by the events between them.

Per pixel, the log latents l of successive keys obey two kinds of evidence: each key's own double integral,
``l_i = d_i``, and the events between two keys, ``l_{i+1} - l_i = s_i``. Least squares gives a tridiagonal system
(diagonal 2, 3, ..., 3, 2, off-diagonal -1 where all weights are 1). Its coupling decays by 0.382 a key, so that
a window of 8 keys either side leaves 0.0004 of anything outside.

References
----------
Pan, Hartley, Scheerlinck, Liu, Yu, Dai, "High Frame Rate Video Reconstruction Based on an Event Camera",
IEEE TPAMI 44(5), 2022.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

#: Keys on either side that still matter: 0.382^8 = 0.0004.
WINDOW = 8

Array = NDArray[np.float64]


def couple(
    own: Sequence[Array],
    change: Sequence[Array],
    at: int,
    own_weight: Sequence[Array | float] | None = None,
    change_weight: Sequence[Array | float] | None = None,
) -> Array:
    """Solve for one key's log latent from its window of keys.

    Parameters
    ----------
    own : sequence of K ndarrays, shape (H, W)
        Each key's log latent by its own double integral.
    change : sequence of K-1 ndarrays, shape (H, W)
        Log change from each key to the next, by the events.
    at : int
        The key asked for.
    own_weight, change_weight : sequences, optional
        How far each piece of evidence is trusted (inverse variances, per pixel or one number). All 1 if left out.

    Returns
    -------
    ndarray of float64, shape (H, W)
        The log latent of key `at`.
    """
    count = len(own)
    own_weight = own_weight or [1.0] * count
    change_weight = change_weight or [1.0] * (count - 1)
    # Elimination from both ends meets at the key asked for: what lies beyond it acts like one measurement
    # of it, with a precision (weight) and a value.
    precision, value = _gather(own, own_weight, change, change_weight, range(at))
    after_precision, after_value = _gather(
        own[::-1],
        own_weight[::-1],
        [-c for c in change[::-1]],
        change_weight[::-1],
        range(count - 1 - at),
    )
    total = own_weight[at] + precision + after_precision
    return (own_weight[at] * own[at] + precision * value + after_precision * after_value) / total


def _gather(
    own: Sequence[Array],
    own_weight: Sequence[Array | float],
    change: Sequence[Array],
    change_weight: Sequence[Array | float],
    keys: range,
) -> tuple[Array | float, Array | float]:
    """Carry the evidence of the keys before one along the chain to it: (precision, value)."""
    precision: Array | float = 0.0
    value: Array | float = 0.0
    for i in keys:
        total = own_weight[i] + precision
        value = (own_weight[i] * own[i] + precision * value) / total + change[i]
        # Two uncertainties in a row add: 1/p' = 1/total + 1/w
        precision = total * change_weight[i] / (total + change_weight[i])
    return precision, value
