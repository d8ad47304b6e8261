"""Painting textures and parts onto a frame: compiled, bilinear, exact in position.

Textures hold `OVERSAMPLE` texels a frame pixel and nothing finer than the frame can show, so bilinear sampling neither
aliases nor changes a pattern's contrast as it glides across the pixel grid (which a sensor would see as flicker).
"""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray

from enhance.light import Image

#: Texels a frame pixel, along each axis.
OVERSAMPLE = 2


@numba.njit(cache=True, nogil=True)
def paint_texture(out: Image, texture: Image, matrix: NDArray[np.float64]) -> None:
    """Fill a frame from a texture that repeats without end.

    Parameters
    ----------
    out : ndarray of float32, shape (H, W, C)
        Written.
    texture : ndarray of float32, shape (S, S, C)
        S a power of two.
    matrix : ndarray of float64, shape (2, 3)
        Frame pixel (x, y, 1) to texel (u, v).
    """
    height, width, channels = out.shape
    mask = texture.shape[0] - 1
    for y in range(height):
        for x in range(width):
            u = matrix[0, 0] * x + matrix[0, 1] * y + matrix[0, 2]
            v = matrix[1, 0] * x + matrix[1, 1] * y + matrix[1, 2]
            left, top = int(np.floor(u)), int(np.floor(v))
            fu, fv = np.float32(u - left), np.float32(v - top)
            i0, i1, j0, j1 = left & mask, (left + 1) & mask, top & mask, (top + 1) & mask
            for c in range(channels):
                above = texture[j0, i0, c] + fu * (texture[j0, i1, c] - texture[j0, i0, c])
                below = texture[j1, i0, c] + fu * (texture[j1, i1, c] - texture[j1, i0, c])
                out[y, x, c] = above + fv * (below - above)


@numba.njit(cache=True, nogil=True)
def paint_warped(out: Image, texture: Image, map_u: Image, map_v: Image, shade: Image) -> None:
    """Fill a frame from a repeating texture through a field of positions.

    Parameters
    ----------
    out : ndarray of float32, shape (H, W, C)
        Written.
    texture : ndarray of float32, shape (S, S, C)
        S a power of two.
    map_u, map_v : ndarray of float32, shape (H, W)
        Texel of each pixel.
    shade : ndarray of float32, shape (H, W)
        Factor on the light of each pixel.
    """
    height, width, channels = out.shape
    mask = texture.shape[0] - 1
    for y in range(height):
        for x in range(width):
            u, v = map_u[y, x], map_v[y, x]
            left, top = int(np.floor(u)), int(np.floor(v))
            fu, fv = np.float32(u - left), np.float32(v - top)
            i0, i1, j0, j1 = left & mask, (left + 1) & mask, top & mask, (top + 1) & mask
            for c in range(channels):
                above = texture[j0, i0, c] + fu * (texture[j0, i1, c] - texture[j0, i0, c])
                below = texture[j1, i0, c] + fu * (texture[j1, i1, c] - texture[j1, i0, c])
                out[y, x, c] = (above + fv * (below - above)) * shade[y, x]


@numba.njit(cache=True, nogil=True)
def paint_part(out: Image, part: Image, matrix: NDArray[np.float64], box: tuple[int, int, int, int]) -> None:
    """Lay a part with soft edges over a frame.

    Parameters
    ----------
    out : ndarray of float32, shape (H, W, C)
        Changed inside `box` only.
    part : ndarray of float32, shape (h, w, C + 1)
        Light already multiplied by coverage, then coverage (0 to 1); the outermost texels are uncovered.
    matrix : ndarray of float64, shape (2, 3)
        Frame pixel (x, y, 1) to texel (u, v).
    box : tuple of int
        x0, y0, x1, y1 within the frame, half-open.
    """
    rows, columns, layers = part.shape
    channels = layers - 1
    x0, y0, x1, y1 = box
    for y in range(y0, y1):
        for x in range(x0, x1):
            u = matrix[0, 0] * x + matrix[0, 1] * y + matrix[0, 2]
            v = matrix[1, 0] * x + matrix[1, 1] * y + matrix[1, 2]
            if u < 0 or v < 0 or u >= columns - 1 or v >= rows - 1:
                continue
            i, j = int(u), int(v)
            fu, fv = np.float32(u - i), np.float32(v - j)
            w00, w01 = (np.float32(1) - fu) * (np.float32(1) - fv), fu * (np.float32(1) - fv)
            w10, w11 = (np.float32(1) - fu) * fv, fu * fv
            cover = (
                w00 * part[j, i, channels]
                + w01 * part[j, i + 1, channels]
                + w10 * part[j + 1, i, channels]
                + w11 * part[j + 1, i + 1, channels]
            )
            if cover <= 0:
                continue
            for c in range(channels):
                light = (
                    w00 * part[j, i, c]
                    + w01 * part[j, i + 1, c]
                    + w10 * part[j + 1, i, c]
                    + w11 * part[j + 1, i + 1, c]
                )
                out[y, x, c] = out[y, x, c] * (np.float32(1) - cover) + light
