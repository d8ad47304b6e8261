"""Pictures about the work: which part of the frames the events tell of, and the evidence for a rig."""

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


def write_drawing(path: Path, drawing: NDArray[np.uint8]) -> None:
    """Write a drawing, (H, W, 3) of 8 bit, as a PNG; raises as `write_overlap`."""
    write_levels(path, drawing.astype(np.uint16) * np.uint16(257), {})
