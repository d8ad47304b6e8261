"""Which part of the pictures the events tell of, where it is not all of them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from enhance.write.stills import write_levels

MEANING = "White: the event sensor looks here. Black: it does not, and inserted pictures are made from the frames alone"


def write_overlap(path: Path, seen: NDArray[np.bool_]) -> None:
    """Write the part that the event sensor sees as a grey PNG; the same input gives the same bytes.

    Parameters
    ----------
    path : Path
        Ends in ``.png``.
    seen : ndarray of bool, shape (H, W)

    Raises
    ------
    WriteError
        If it cannot be written.
    """
    write_levels(path, np.where(seen, 65_535, 0).astype(np.uint16), {"Meaning": MEANING})
