"""Trust maps: the expected error of each pixel of a still, on the still's own scale."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from enhance.errors import WriteError
from enhance.write.stills import write_levels

#: What a map shows and on which scale, for its PNG text.
MEANING = (
    "Expected error of each pixel of the still of the same name against the sharp, noise-free scene, estimated by the "
    "tool itself; not a measurement"
)
SCALE = "level = expected error in code values / full scale x 65535, the scale of the still; colour: RMS of R, G, B"


def write_trust(path: Path, error: NDArray[np.float32], text: Mapping[str, str]) -> None:
    """Write a trust map as a 16-bit grey PNG; the same input gives the same bytes.

    Parameters
    ----------
    path : Path
        Ends in ``.png``.
    error : ndarray of float32, shape (H, W)
        Expected squared error, in code values over full scale.
    text : mapping of str to str
        PNG text; meaning and scale of the map are put behind it.

    Raises
    ------
    WriteError
        If a value is negative or not finite, or the file cannot be written.
    """
    right = np.isfinite(error) & (error >= 0)
    if not right.all():
        row, column = np.argwhere(~right)[0]
        raise WriteError(
            f"{path}: the expected squared error at row {row}, column {column} is {error[row, column]}; expected a "
            "finite number, 0 or above. Run the job again with output.trust = false, and report it."
        )
    # level = sqrt(expected squared error) x 65535
    levels = np.clip(np.rint(np.sqrt(error.astype(np.float64)) * 65535.0), 0, 65535).astype(np.uint16)
    write_levels(path, levels, {**text, "Meaning": MEANING, "Scale": SCALE})
