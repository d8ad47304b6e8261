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

#: One turn of a sine, its start again at the end: between its entries a line is right to 3e-7, at a third of the time.
_TURN = 4096
_SINE = np.sin(np.arange(_TURN + 1) * (2 * np.pi / _TURN))


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


@numba.njit(cache=True, nogil=True)
def paint_sheet(out: Image, sheet: Image, matrix: NDArray[np.float64]) -> None:
    """Lay a half-transparent sheet that repeats without end over a frame.

    Parameters
    ----------
    out : ndarray of float32, shape (H, W, C)
        Changed.
    sheet : ndarray of float32, shape (S, S, C + 1)
        Light already multiplied by coverage, then coverage (0 to 1); S a power of two.
    matrix : ndarray of float64, shape (2, 3)
        Frame pixel (x, y, 1) to texel (u, v).
    """
    height, width, channels = out.shape
    mask = sheet.shape[0] - 1
    one = np.float32(1)
    for y in range(height):
        for x in range(width):
            u = matrix[0, 0] * x + matrix[0, 1] * y + matrix[0, 2]
            v = matrix[1, 0] * x + matrix[1, 1] * y + matrix[1, 2]
            left, top = int(np.floor(u)), int(np.floor(v))
            fu, fv = np.float32(u - left), np.float32(v - top)
            i0, i1, j0, j1 = left & mask, (left + 1) & mask, top & mask, (top + 1) & mask
            w00, w01, w10, w11 = (one - fu) * (one - fv), fu * (one - fv), (one - fu) * fv, fu * fv
            c = channels
            through = one - (
                w00 * sheet[j0, i0, c] + w01 * sheet[j0, i1, c] + w10 * sheet[j1, i0, c] + w11 * sheet[j1, i1, c]
            )
            for c in range(channels):
                light = (
                    w00 * sheet[j0, i0, c] + w01 * sheet[j0, i1, c] + w10 * sheet[j1, i0, c] + w11 * sheet[j1, i1, c]
                )
                out[y, x, c] = out[y, x, c] * through + light


@numba.njit(cache=True, nogil=True)
def paint_dye(
    out: Image,
    density: Image,
    shears: NDArray[np.float64],
    shift: NDArray[np.float64],
    weights: Image,
    tones: Image,
) -> None:
    """Lay dye or smoke over a frame, carried by a chain of shears.

    Parameters
    ----------
    out : ndarray of float32, shape (H, W, C)
        Changed.
    density : ndarray of float32, shape (S, S, 2)
        Two fields of coverage, 0 to 1, that repeat without end; S a power of two.
    shears : ndarray of float64, shape (K, 5)
        Direction (x, y) of each shift, radians a pixel across it, amplitude in pixels, phase in radians; the first is
        the last to act on the dye, so the first to be undone.
    shift : ndarray of float64, shape (2,)
        How far the dye has drifted before the shears, pixels.
    weights : ndarray of float32, shape (2,)
        How much of either field there is; their sum is at most 1.
    tones : ndarray of float32, shape (2, C)
        Light of the thinnest and of the thickest dye.
    """
    height, width, channels = out.shape
    mask = density.shape[0] - 1
    for row in range(height):
        for column in range(width):
            x, y = float(column), float(row)
            for k in range(shears.shape[0]):
                # along (ex, ey), by a sine of what lies across it: undone exactly, since the shift leaves that alone
                ex, ey = shears[k, 0], shears[k, 1]
                place = (shears[k, 2] * (ex * y - ey * x) + shears[k, 4]) * (_TURN / (2 * np.pi))
                entry = int(np.floor(place))
                low, high = _SINE[entry & (_TURN - 1)], _SINE[(entry & (_TURN - 1)) + 1]
                away = shears[k, 3] * (low + (place - entry) * (high - low))
                x, y = x - away * ex, y - away * ey
            u, v = OVERSAMPLE * (x - shift[0]), OVERSAMPLE * (y - shift[1])
            left, top = int(np.floor(u)), int(np.floor(v))
            fu, fv = np.float32(u - left), np.float32(v - top)
            i0, i1, j0, j1 = left & mask, (left + 1) & mask, top & mask, (top + 1) & mask
            cover = np.float32(0)
            for c in range(2):
                above = density[j0, i0, c] + fu * (density[j0, i1, c] - density[j0, i0, c])
                below = density[j1, i0, c] + fu * (density[j1, i1, c] - density[j1, i0, c])
                cover += weights[c] * (above + fv * (below - above))
            for c in range(channels):
                light = tones[0, c] + cover * (tones[1, c] - tones[0, c])
                out[row, column, c] += cover * (light - out[row, column, c])
