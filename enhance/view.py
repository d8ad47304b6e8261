"""Where two sensors look: the map from event pixels to frame pixels, lenses included.

An event pixel is undistorted by its lens, moved by a 3x3 matrix between the two undistorted pictures, and distorted by
the frame's lens; without lenses the matrix is all. Frame pixels are those of the whole frame, before any crop.

References
----------
Hartley, Zisserman, "Multiple View Geometry in Computer Vision", 2nd edition, 2004: the matrix (a homography; exact for
a splitter, a far scene or a flat one). The lens model is OpenCV's, radial and tangential.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

#: A lens' polynomial folds back far outside the picture it was fitted on: points must return this exactly, in pixels.
FOLDED_PX = 0.1
#: Two shapes are one view where their ratios of width and height differ by no more than this.
SAME_SHAPE = 0.03


@dataclass(frozen=True)
class Lens:
    """A lens as OpenCV's calibration describes it.

    Parameters
    ----------
    focal, centre : tuple of float
        fx, fy and cx, cy of its camera matrix, pixels.
    distortion : tuple of float
        k1, k2, p1, p2[, k3[, k4, k5, k6[, s1, s2, s3, s4[, tx, ty]]]].
    """

    focal: tuple[float, float]
    centre: tuple[float, float]
    distortion: tuple[float, ...]

    @property
    def camera(self) -> Array:
        """The camera matrix, shape (3, 3)."""
        (fx, fy), (cx, cy) = self.focal, self.centre
        return np.array([[fx, 0.0, cx], [0.0, fy, cy], [0.0, 0.0, 1.0]])

    def undistort(self, points: Array) -> Array:
        """Move pixels, shape (N, 2), to where a lens without distortion would show them."""
        import cv2

        # OpenCV's own 5 steps leave 0.1 pixel at strong distortion
        stop = (cv2.TERM_CRITERIA_COUNT | cv2.TERM_CRITERIA_EPS, 50, 1e-10)
        there = np.ascontiguousarray(points, np.float64).reshape(-1, 1, 2)
        found = cv2.undistortPoints(there, self.camera, np.array(self.distortion), None, np.eye(3), self.camera, stop)
        return np.asarray(found, np.float64).reshape(-1, 2)

    def distort(self, points: Array) -> Array:
        """Move undistorted pixels, shape (N, 2), to where this lens shows them; NaN where it shows them nowhere."""
        import cv2

        ideal = (np.asarray(points, np.float64) - self.centre) / self.focal
        solid = np.column_stack([ideal, np.ones(len(ideal))])
        none = np.zeros(3)
        shown, _ = cv2.projectPoints(solid, none, none, self.camera, np.array(self.distortion))
        shown = np.asarray(shown, np.float64).reshape(-1, 2)
        away = np.abs(self.undistort(shown) - points).max(axis=1)
        return np.where((away < FOLDED_PX)[:, None], shown, np.nan)


@dataclass(frozen=True)
class View:
    """The map from the event sensor's pixels to the whole frame's.

    Parameters
    ----------
    matrix : ndarray of float64, shape (3, 3)
        Event pixel (x, y, 1) to frame pixel, up to a factor; pixel centres at integers.
    frame_lens, event_lens : Lens, optional
    """

    matrix: Array
    frame_lens: Lens | None = None
    event_lens: Lens | None = None

    @property
    def shift(self) -> tuple[int, int] | None:
        """Whole pixels (x, y) that the map moves by, where that is all it does; else None."""
        if self.frame_lens is not None or self.event_lens is not None:
            return None
        scaled = self.matrix / self.matrix[2, 2] if self.matrix[2, 2] else self.matrix
        x, y = (int(round(float(v))) if abs(v) < 1e6 else 0 for v in scaled[:2, 2])
        return (x, y) if np.array_equal(scaled, _moved(x, y)) else None

    def to_frame(self, points: Array) -> Array:
        """Map event pixels, shape (N, 2), to frame pixels; NaN where they are seen nowhere."""
        ideal = self.event_lens.undistort(points) if self.event_lens else np.asarray(points, np.float64)
        moved = project(self.matrix, ideal)
        return self.frame_lens.distort(moved) if self.frame_lens else moved

    def to_event(self, points: Array) -> Array:
        """Map frame pixels, shape (N, 2), to event pixels; NaN where they are seen nowhere."""
        ideal = self.frame_lens.undistort(points) if self.frame_lens else np.asarray(points, np.float64)
        moved = project(np.asarray(np.linalg.inv(self.matrix), np.float64), ideal)
        return self.event_lens.distort(moved) if self.event_lens else moved

    def pitch(self, sensor_size: tuple[int, int]) -> float:
        """Frame pixels that an event pixel is wide, at the sensor's centre."""
        x, y = (sensor_size[0] - 1) / 2, (sensor_size[1] - 1) / 2
        at = self.to_frame(np.array([[x, y], [x + 1, y], [x, y + 1]]))
        return float(np.sqrt(abs(np.linalg.det(at[1:] - at[0]))))

    def lookup(
        self, sensor_size: tuple[int, int], frame_size: tuple[int, int], origin: tuple[int, int] = (0, 0)
    ) -> NDArray[np.int32]:
        """Find the event pixel that each frame pixel's centre falls into.

        Parameters
        ----------
        sensor_size, frame_size : tuple of int
            Width, height; of the frame after its crop.
        origin : tuple of int
            Corner of the crop.

        Returns
        -------
        ndarray of int32, shape (H, W)
            Event pixels counted row by row; -1 where the sensor does not look.
        """
        width, height = frame_size
        y, x = np.mgrid[:height, :width].reshape(2, -1).astype(np.float64)
        seen = np.nan_to_num(self.to_event(np.column_stack([x + origin[0], y + origin[1]])), nan=-9.0)
        at = np.rint(np.clip(seen, -9, 1e6)).astype(np.int64)
        inside = (at >= 0).all(axis=1) & (at < sensor_size).all(axis=1)
        return np.where(inside, at[:, 1] * sensor_size[0] + at[:, 0], -1).astype(np.int32).reshape(height, width)


def project(matrix: Array, points: Array) -> Array:
    """Apply a 3x3 matrix to points, shape (N, 2); NaN for those it sends to or beyond infinity."""
    solid = points @ matrix[:, :2].T + matrix[:, 2]
    # The sign of the third row's value tells the side: the one most of the picture lies on is in front.
    front = len(solid) == 0 or np.median(solid[:, 2]) > 0
    depth = solid[:, 2:] * (1.0 if front else -1.0)
    good = depth > 1e-9
    flat = solid[:, :2] / np.where(good, solid[:, 2:], 1.0)
    return np.where(good, flat, np.nan)


def shared_view(
    sensor_size: tuple[int, int], full_size: tuple[int, int], crop_origin: tuple[int, int], frame_size: tuple[int, int]
) -> View:
    """Tell how two sensors with one view relate.

    Parameters
    ----------
    sensor_size : tuple of int
        Width, height of the event sensor.
    full_size, crop_origin, frame_size : tuple
        The whole frame's size, the crop's corner in it and its size.

    Returns
    -------
    View
        Of sensors with the whole frame's shape, centre-aligned: 4 x + 1.5 for a sensor of a quarter of its width. A
        sensor of the crop's size sees the crop; one of any other shape is laid onto the crop's corner.
    """
    if tuple(sensor_size) == tuple(full_size):
        return View(np.eye(3))
    if tuple(sensor_size) == tuple(frame_size) or not one_shape(sensor_size, full_size):
        return View(_moved(*crop_origin))
    x, y = (float(f) / s for f, s in zip(full_size, sensor_size, strict=True))
    # a pixel centre e spans e - 1/2 .. e + 1/2, and so does the frame's
    return View(np.array([[x, 0.0, (x - 1) / 2], [0.0, y, (y - 1) / 2], [0.0, 0.0, 1.0]]))


def one_shape(sensor_size: tuple[int, int], full_size: tuple[int, int]) -> bool:
    """Whether a sensor's picture has the whole frame's shape."""
    return abs(full_size[0] * sensor_size[1] / (full_size[1] * sensor_size[0]) - 1) <= SAME_SHAPE


def _moved(x: int, y: int) -> Array:
    return np.array([[1.0, 0.0, x], [0.0, 1.0, y], [0.0, 0.0, 1.0]])
