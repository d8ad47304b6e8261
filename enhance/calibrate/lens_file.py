"""Lens files as OpenCV's calibration writes them: camera_matrix and distortion_coefficients in YAML, JSON or XML."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from enhance.errors import CalibrationError

#: Numbers of coefficients that OpenCV's lens model comes with.
COEFFICIENTS = (4, 5, 8, 12, 14)


def read_lens(path: Path, size: tuple[int, int]) -> list[float]:
    """Read a lens file.

    Parameters
    ----------
    path : Path
        .yml, .yaml, .json or .xml, as cv2.FileStorage reads them.
    size : tuple of int
        Width, height of the pictures it must be for, where it says so (image_width, image_height).

    Returns
    -------
    list of float
        fx, fy, cx, cy, then the distortion coefficients.

    Raises
    ------
    CalibrationError
        If it cannot be read, lacks a key, holds what no lens has, or is for pictures of another size.
    """
    import cv2

    if not path.is_file():
        raise CalibrationError(f"{path}: there is no such lens file; check rig.registration")
    try:
        file = cv2.FileStorage(str(path), cv2.FILE_STORAGE_READ)
        if not file.isOpened():
            raise ValueError("it opens as none")
        camera, distortion = (file.getNode(name).mat() for name in ("camera_matrix", "distortion_coefficients"))
        told = [file.getNode(name) for name in ("image_width", "image_height")]
        made_for = [int(node.real()) if not node.empty() else None for node in told]
        file.release()
    except (cv2.error, ValueError, SystemError) as error:
        raise CalibrationError(
            f"{path}: this lens file cannot be read ({' '.join(str(error).split())[:120]}); expected YAML that begins "
            f"with %YAML:1.0, JSON or XML, as cv2.FileStorage writes them"
        ) from error
    if None not in made_for and made_for != list(size):
        raise CalibrationError(
            f"{path}: this lens file is for pictures of {made_for}, these are of {list(size)} (width, height); use the "
            f"file of this camera at this size"
        )
    return _numbers(path, camera, distortion)


def _numbers(path: Path, camera: Any, distortion: Any) -> list[float]:
    for name, value, expected in (
        ("camera_matrix", camera, "a matrix of 3 x 3 numbers"),
        ("distortion_coefficients", distortion, f"a matrix of {', '.join(map(str, COEFFICIENTS[:-1]))} or 14 numbers"),
    ):
        good = value is not None and value.size in ((9,) if name == "camera_matrix" else COEFFICIENTS)
        if not good or not np.isfinite(value).all():
            found = "nothing" if value is None else f"{value.size} numbers, or some that are none"
            raise CalibrationError(f"{path}: {name}: found {found}; expected {expected}; mend the file")
    matrix = np.asarray(camera, np.float64).reshape(3, 3)
    if min(matrix[0, 0], matrix[1, 1]) <= 0:
        raise CalibrationError(
            f"{path}: camera_matrix: found focal lengths {matrix[0, 0]:g} and {matrix[1, 1]:g}; expected pixels, above "
            f"0; mend the file"
        )
    return [float(v) for v in (matrix[0, 0], matrix[1, 1], matrix[0, 2], matrix[1, 2], *np.ravel(distortion))]
