"""Cut-outs with soft edges: parts, bladed wheels, drops, wires. Drawn large, then band-limited like textures."""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.light import Image
from enhance.simulate.sampling import OVERSAMPLE
from enhance.simulate.texture import BAND_LIMIT

Rng = np.random.Generator

#: Uncovered texels around a cut-out: the blur of its edge must die out inside.
MARGIN = 5


def cut(light: Image, cover: Image) -> Image:
    """Join light and coverage into a cut-out.

    Parameters
    ----------
    light : ndarray of float32, shape (h, w, C)
        Linear radiance of the surface.
    cover : ndarray of float32, shape (h, w)
        0 to 1.

    Returns
    -------
    ndarray of float32, shape (h, w, C + 1)
        Light times coverage, then coverage, both band-limited.
    """
    joined = np.dstack([light * cover[..., None], cover]).astype(np.float32)
    return np.asarray(cv2.GaussianBlur(joined, (0, 0), BAND_LIMIT, borderType=cv2.BORDER_CONSTANT), np.float32)


def mask_of(radius: float) -> tuple[NDArray[np.uint8], float]:
    """Empty mask for a cut-out of `radius` pixels, shape (h, w), and the texel of its centre (the same both ways)."""
    half = int(np.ceil(radius * OVERSAMPLE)) + MARGIN
    return np.zeros((2 * half + 1, 2 * half + 1), dtype=np.uint8), float(half)


def fill(mask: NDArray[np.uint8], points: NDArray[np.float64], value: int = 255) -> None:
    """Fill a polygon, shape (N, 2) in texels, at sub-texel precision."""
    cv2.fillPoly(mask, [np.round(points * 16).astype(np.int32)], value, cv2.LINE_AA, 4)


def polygon(radius: float, rng: Rng, texture: Image) -> Image:
    """Cut a part, a polygon with rounded corners or a ring, out of a texture; shape (h, w, C + 1)."""
    mask, centre = mask_of(radius)
    count = int(rng.integers(3, 9))
    angles = 2 * np.pi * (np.arange(count) + rng.uniform(-0.25, 0.25, count)) / count
    rounding = 0.15 * radius * OVERSAMPLE
    ring = (radius * OVERSAMPLE - rounding) * rng.uniform(0.65, 1.0, count)
    points = centre + ring[:, None] * np.stack([np.cos(angles), np.sin(angles)], axis=1)
    fill(mask, points)
    if rng.random() < 0.3:
        hole = 0.3 * radius * OVERSAMPLE
        cv2.circle(mask, (round(centre), round(centre)), round(hole), 0, cv2.FILLED, cv2.LINE_AA)
    soft = cv2.GaussianBlur(mask.astype(np.float32) / 255.0, (0, 0), max(rounding / 2, 0.5))
    cover = np.clip((soft - 0.5) * max(rounding, 1.0) + 0.5, 0.0, 1.0)
    rows = cover.shape[0]
    surface = np.tile(texture, (rows // texture.shape[0] + 1, rows // texture.shape[1] + 1, 1))[:rows, :rows]
    # a lit rim and a shaded one make it a solid thing rather than a hole in a curtain
    relief = cv2.GaussianBlur(cover, (0, 0), 3.0)
    slope = np.clip(cv2.Sobel(relief, cv2.CV_32F, 1, 1, ksize=3) * 2.0, -0.4, 0.4)
    return cut(np.clip(surface * (1.0 + slope[..., None]), 0.02, 0.97), cover.astype(np.float32))


def blades(radius: float, rng: Rng, count: int, texture: Image) -> Image:
    """Cut a wheel of `count` bent blades with a hub out of a texture; shape (h, w, C + 1)."""
    mask, centre = mask_of(radius)
    tone = np.zeros_like(mask)
    bend, width = rng.uniform(0.2, 0.9), 2 * np.pi / count * rng.uniform(0.3, 0.55)
    out = np.linspace(0.15, 0.98, 24) * radius * OVERSAMPLE
    for blade in range(count):
        lead = 2 * np.pi * blade / count + bend * out / out[-1]
        trail = lead + width * (0.5 + 0.5 * np.sin(np.pi * np.linspace(0.15, 0.85, 24)))
        edge = np.concatenate([lead, trail[::-1]])
        reach = np.concatenate([out, out[::-1]])
        points = centre + reach[:, None] * np.stack([np.cos(edge), np.sin(edge)], axis=1)
        fill(mask, points)
        fill(tone, points, int(rng.integers(90, 250)))
    middle = (round(centre), round(centre))
    for share, shine in ((0.22, 150), (0.12, 60), (0.06, 220)):
        cv2.circle(mask, middle, round(share * radius * OVERSAMPLE), 255, cv2.FILLED, cv2.LINE_AA)
        cv2.circle(tone, middle, round(share * radius * OVERSAMPLE), shine, cv2.FILLED, cv2.LINE_AA)
    rows = mask.shape[0]
    surface = np.tile(texture, (rows // texture.shape[0] + 1, rows // texture.shape[1] + 1, 1))[:rows, :rows]
    shade = (tone.astype(np.float32) / 255.0) ** np.float32(1.5)
    light = 0.04 + shade[..., None] * (0.25 + 0.75 * surface)
    return cut(np.clip(light, 0.03, 0.95), mask.astype(np.float32) / 255.0)


def disc_drop(radius: float, rng: Rng, color: bool) -> Image:
    """Make a drop: dark rim, bright window of the lamp, light that comes through; shape (h, w, C + 1)."""
    mask, centre = mask_of(radius)
    y, x = np.mgrid[: mask.shape[0], : mask.shape[1]].astype(np.float32)
    reach = radius * OVERSAMPLE
    away = np.hypot(x - centre, y - centre) / reach
    cover = np.clip((1.0 - away) * reach + 0.5, 0.0, 1.0)
    body, rim = rng.uniform(0.25, 0.6), rng.uniform(0.03, 0.08)
    light = rim + (body - rim) * np.clip(1.0 - away**4, 0.0, 1.0)
    spot = np.exp(-(((x - centre + 0.35 * reach) ** 2 + (y - centre + 0.35 * reach) ** 2) / (0.25 * reach) ** 2))
    light = light + (0.93 - light) * spot
    tint = rng.uniform(0.7, 1.0, 3) if color else np.ones(1)
    return cut((light[..., None] * tint).astype(np.float32), cover.astype(np.float32))


def thin_sheet(radius: float, rng: Rng, color: bool) -> Image:
    """Make crossing wires, or a grating in a frame, 1 to 2.5 pixels thick; shape (h, w, C + 1)."""
    mask, centre = mask_of(radius)
    reach = radius * OVERSAMPLE
    tone = np.full(mask.shape, int(rng.choice([20, 60, 235])), dtype=np.uint8)
    if rng.random() < 0.5:
        turn, pitch = rng.uniform(0, np.pi), rng.uniform(5.0, 14.0) * OVERSAMPLE
        for away in np.arange(-0.95 * reach, 0.95 * reach, pitch):
            half = np.sqrt(reach**2 - away**2) * 0.97
            _stroke(mask, centre, (away, turn, half), rng.uniform(1.0, 2.0) * OVERSAMPLE)
        cv2.circle(mask, (round(centre), round(centre)), int(0.97 * reach), 255, 2 * OVERSAMPLE, cv2.LINE_AA)
    else:
        for _ in range(int(rng.integers(6, 16))):
            away = rng.uniform(-0.9, 0.9) * reach
            half = np.sqrt(reach**2 - away**2) * 0.97
            _stroke(mask, centre, (away, rng.uniform(0, np.pi), half), rng.uniform(1.0, 2.5) * OVERSAMPLE)
    tint = rng.uniform(0.6, 1.0, 3) if color else np.ones(1)
    light = 0.03 + 0.9 * (tone[..., None].astype(np.float32) / 255.0) ** 2.2 * tint
    return cut(light.astype(np.float32), mask.astype(np.float32) / 255.0)


def _stroke(mask: NDArray[np.uint8], centre: float, line: tuple[float, float, float], width: float) -> None:
    """Fill a straight bar: distance from the centre, direction, half its length; texels."""
    away, turn, half = line
    along = np.array([np.cos(turn), np.sin(turn)])
    across = np.array([-along[1], along[0]])
    corners = [(-half, -width / 2), (half, -width / 2), (half, width / 2), (-half, width / 2)]
    fill(mask, np.array([centre + away * across + a * along + b * across for a, b in corners]))
