"""Whether two figures put the same pictures in the same order."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from enhance.errors import MeasureError

#: Of fewer pictures an order says next to nothing.
FEWEST = 5


def rank_correlation(one: Sequence[float], two: Sequence[float]) -> float | None:
    """Spearman's rank correlation; equal values share their mean rank.

    Parameters
    ----------
    one, two : sequence of float, length N
        Figures of the same pictures; infinity ranks last, NaN has no rank.

    Returns
    -------
    float or None
        -1 (opposite order) to 1 (same order); None for fewer than `FEWEST` pictures, or where all of one are equal.

    Raises
    ------
    MeasureError
        If the lengths differ or a value is NaN.

    References
    ----------
    C. Spearman, "The Proof and Measurement of Association between Two Things", Am. J. Psychology 15, 1904.
    """
    a, b = np.asarray(one, np.float64), np.asarray(two, np.float64)
    if a.ndim != 1 or a.shape != b.shape:
        raise MeasureError(f"Ranks of {a.shape} and {b.shape} figures; expected two lists of one length.")
    if np.isnan(a).any() or np.isnan(b).any():
        raise MeasureError("A figure that is to be ranked is not a number; leave its picture out of both lists.")
    if len(a) < FEWEST or (a == a[0]).all() or (b == b[0]).all():
        return None
    a, b = _centred_ranks(a), _centred_ranks(b)
    # rho = Pearson's correlation of the ranks
    return float((a @ b) / np.sqrt((a @ a) * (b @ b)))


def _centred_ranks(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Ranks less their mean; equal values get the mean of the ranks they take up."""
    _, place, count = np.unique(values, return_inverse=True, return_counts=True)
    last = np.cumsum(count)
    ranks = last - 0.5 * (count - 1)
    return np.asarray(ranks[place] - 0.5 * (len(values) + 1), dtype=np.float64)
