"""Textures that repeat without a seam: open photographs, overlapping shapes, prints and their mixtures.

Photographs are those inside scikit-image's data folder that are free to use (CC0 or public domain, "no known
restrictions" for coins and ihc). Training and test never share one: a figure measured on the test half says
something about surfaces the network has not seen.
"""

from __future__ import annotations

import importlib.util
from collections.abc import Callable
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.light import Image, decode, luma

PHOTOGRAPHS = {
    "train": (
        "brick.png",
        "grass.png",
        "camera.png",
        "chelsea.png",
        "retina.jpg",
        "coins.png",
        "microaneurysms.png",
        "clock_motion.png",
        "hubble_deep_field.jpg",
    ),
    "test": ("coffee.png", "gravel.png", "rocket.jpg", "ihc.png"),
}

#: Radiance of the darkest and the brightest surface; within it the logarithm of light stays tame.
DARKEST, BRIGHTEST = 0.03, 0.95

#: Gaussian, in texels: with two texels a pixel, what is left above the frame's Nyquist frequency is under 1 %.
BAND_LIMIT = 1.0

Rng = np.random.Generator


def make_texture(side: int, rng: Rng, textures: str = "train", color: bool = False, recipe: str = "") -> Image:
    """Make a texture that repeats without a seam.

    Parameters
    ----------
    side : int
        Texels along each side, a power of two.
    rng : numpy.random.Generator
    textures : str
        ``train`` or ``test``: which photographs may be used.
    color : bool
        R, G, B instead of grey.
    recipe : str
        One of `RECIPES`; drawn if left out.

    Returns
    -------
    ndarray of float32, shape (side, side, C)
        Linear radiance between `DARKEST` and `BRIGHTEST`; C is 1 or 3.
    """
    if not recipe:
        recipe = str(rng.choice(["photograph", "leaves", "mixed", "plates"], p=[0.5, 0.2, 0.2, 0.1]))
    signal = RECIPES[recipe](side, rng, textures, color)
    lit = signal * (1.0 + 0.2 * cloud(side, rng, 2.5)[..., None])
    return finish(lit, rng)


def finish(signal: Image, rng: Rng) -> Image:
    """Turn a picture signal (about 0 to 1, display-like) into band-limited radiance, shape kept."""
    low, high = rng.uniform(DARKEST, 0.07), rng.uniform(0.6, BRIGHTEST)
    linear = low + (high - low) * np.clip(signal, 0.0, 1.0) ** np.float32(2.2)
    return soften(linear.astype(np.float32))


def soften(linear: Image) -> Image:
    """Take away what is finer than the frame can show, across the seam as well; shape (S, S, C) kept."""
    margin = 8
    padded = np.pad(linear, ((margin, margin), (margin, margin), (0, 0)), mode="wrap")
    blurred = cv2.GaussianBlur(padded, (0, 0), BAND_LIMIT).reshape(padded.shape)
    return np.ascontiguousarray(blurred[margin:-margin, margin:-margin])


def cloud(side: int, rng: Rng, slope: float) -> Image:
    """Seamless noise whose amplitude falls as frequency to the power -slope / 1.0.

    Returns
    -------
    ndarray of float32, shape (side, side)
        Mean 0, standard deviation 1.
    """
    # The spectrum is drawn on a quarter of the texels at most: finer detail than that is below the band limit.
    small = min(side, 512)
    fy, fx = np.fft.fftfreq(small)[:, None], np.fft.rfftfreq(small)[None, :]
    radius = np.hypot(fx, fy)
    radius[0, 0] = 1.0
    spectrum = np.fft.rfft2(rng.standard_normal((small, small))) * radius**-slope
    spectrum[0, 0] = 0.0
    noise = np.fft.irfft2(spectrum, s=(small, small)).astype(np.float32)
    noise /= noise.std()
    if small == side:
        return noise
    margin = 4
    padded = np.pad(noise, margin, mode="wrap")
    factor = side // small
    grown = cv2.resize(padded, None, fx=factor, fy=factor, interpolation=cv2.INTER_CUBIC)
    return np.ascontiguousarray(grown[margin * factor : -margin * factor, margin * factor : -margin * factor])


def _photograph(side: int, rng: Rng, textures: str, color: bool) -> Image:
    """Take a photograph, mirrored so that its edges meet."""
    folder = _photograph_folder()
    names = [name for name in PHOTOGRAPHS[textures] if folder and (folder / name).is_file()]
    if not names or folder is None:
        return _leaves(side, rng, textures, color)
    codes = np.asarray(cv2.imread(str(folder / names[rng.integers(len(names))]), cv2.IMREAD_COLOR))
    picture = decode("srgb", codes[..., ::-1].astype(np.float32) / 255.0)
    picture = picture if color else luma(picture)[..., None]
    # Shrinking to well under the file's own pixels leaves detail that is crisp at the frame's scale.
    shrink = rng.uniform(0.5, 1.2) * 512 / min(picture.shape[:2])
    resized = cv2.resize(picture, None, fx=shrink, fy=shrink, interpolation=cv2.INTER_AREA)
    picture = resized.reshape(*resized.shape[:2], -1).astype(np.float32)
    if rng.random() < 0.5:
        picture = picture.transpose(1, 0, 2)
    stretched = picture / max(float(np.percentile(picture, 99.5)), 1e-3)
    return _mirrored(np.clip(stretched, 0.0, 1.0) ** np.float32(1 / 2.2), side)


def _photograph_folder() -> Path | None:
    """Folder of scikit-image's pictures, found without importing the package."""
    spec = importlib.util.find_spec("skimage")
    return Path(spec.origin).parent / "data" if spec and spec.origin else None


def _mirrored(picture: Image, side: int) -> Image:
    """Tile a picture and its mirror images over (side, side, C)."""
    tile = np.concatenate([picture, picture[:, ::-1]], axis=1)
    tile = np.concatenate([tile, tile[::-1]], axis=0)
    rows, columns = tile.shape[:2]
    # Whole tiles must fit the side, else the seam would show: the tile is stretched to the nearest divisor.
    tall, wide = max(1, round(side / rows)), max(1, round(side / columns))
    fitted = cv2.resize(tile, (side // wide, side // tall), interpolation=cv2.INTER_LINEAR)
    fitted = fitted.reshape(side // tall, side // wide, -1)
    whole = np.tile(fitted, (tall + 1, wide + 1, 1))
    return np.ascontiguousarray(whole[:side, :side])


def _leaves(side: int, rng: Rng, textures: str, color: bool) -> Image:
    """Draw opaque polygons, discs and bars of many sizes over each other, each with its own grain."""
    channels = 3 if color else 1
    canvas = np.full((side, side, channels), 128, dtype=np.uint8)
    for size in np.geomspace(side / 6, 7.0, 600):
        _shape(canvas, rng, size, _tone(rng, color))
    grain = cloud(side, rng, 1.2)[..., None] * cv2.GaussianBlur(np.abs(cloud(side, rng, 2.0)), (0, 0), 3.0)[..., None]
    return canvas.astype(np.float32) / 255.0 * (1.0 + 0.10 * grain)


def _plates(side: int, rng: Rng, textures: str, color: bool) -> Image:
    """Draw machined plates: large panels, slots, rows of bolts, hatching."""
    channels = 3 if color else 1
    canvas = np.full((side, side, channels), int(rng.integers(70, 170)), dtype=np.uint8)
    for size in np.geomspace(side / 4, side / 24, 26):
        _shape(canvas, rng, size, _tone(rng, color), corners=4)
    for _ in range(14):
        at, along = rng.uniform(0, side, 2), rng.uniform(0, 2 * np.pi)
        pitch, tone = rng.uniform(14, 40), _tone(rng, color)
        for k in range(int(rng.integers(4, 12))):
            spot = at + k * pitch * np.array([np.cos(along), np.sin(along)])
            _everywhere(canvas, lambda c, s, p=spot, r=pitch / 4, v=tone: _disc(c, p + s, r, v))
    brushed = cv2.GaussianBlur(rng.standard_normal((side, side)).astype(np.float32), (0, 0), 1.0, sigmaY=12.0)
    return canvas.astype(np.float32) / 255.0 * (1.0 + 0.35 * brushed[..., None])


def _mixed(side: int, rng: Rng, textures: str, color: bool) -> Image:
    """Put photograph, shapes and stripes side by side, divided by soft-edged regions."""
    photograph = _photograph(side, rng, textures, color)
    shapes = (_leaves if rng.random() < 0.6 else _plates)(side, rng, textures, color)
    first = (cloud(side, rng, 2.2) > 0.2)[..., None]
    second = (cloud(side, rng, 2.2) > 1.1)[..., None]
    mixed = np.where(first, photograph, shapes)
    return np.where(second, _stripes(side, rng, textures, color), mixed).astype(np.float32)


def _stripes(side: int, rng: Rng, textures: str, color: bool) -> Image:
    """Draw a grating whose period the frame resolves, with uneven contrast."""
    # whole numbers of waves over the side: no seam; 5 to 24 pixels a wave
    count = side / (2 * rng.uniform(5.0, 24.0))
    turn = rng.uniform(0, np.pi)
    waves = np.round([count * np.cos(turn), count * np.sin(turn)]) * 2 * np.pi / side
    axis = np.arange(side)
    phase = waves[0] * axis[None, :] + waves[1] * axis[:, None] + rng.uniform(0, 2 * np.pi)
    wave = np.tanh(rng.uniform(1.0, 5.0) * np.sin(phase)) * (0.6 + 0.2 * np.tanh(cloud(side, rng, 2.2)))
    colour = np.array(_tone(rng, color), dtype=np.float32) / 255.0
    return np.clip(0.25 + 0.6 * colour + 0.35 * wave[..., None], 0.0, 1.0).astype(np.float32)


def _glyphs(side: int, rng: Rng, textures: str, color: bool) -> Image:
    """Print rows of invented characters, dark on light or light on dark."""
    channels = 3 if color else 1
    paper, ink = int(rng.integers(170, 250)), int(rng.integers(10, 70))
    if rng.random() < 0.4:
        paper, ink = ink, paper
    canvas = np.full((side, side, channels), paper, dtype=np.uint8)
    size = 2 ** int(np.clip(round(np.log2(side / 40)), 4, 6))
    for top in range(0, side, 2 * size):
        print_row(canvas, rng, (0, top + size // 2), size, side, (ink,) * channels)
    grain = cloud(side, rng, 1.0)[..., None]
    return canvas.astype(np.float32) / 255.0 * (1.0 + 0.04 * grain)


def print_row(canvas: NDArray[np.uint8], rng: Rng, at: tuple[int, int], size: int, width: int, ink: tuple) -> None:
    """Print a row of invented characters.

    Parameters
    ----------
    canvas : ndarray of uint8, shape (h, w, C)
        Written.
    rng : numpy.random.Generator
    at : tuple of int
        Left, top of the row.
    size : int
        Height of a character, texels; its cell is 0.75 as wide.
    width : int
        Length of the row.
    ink : tuple of int
        One value a channel.
    """
    cell = size * 3 // 4
    grid = np.array([(i * (cell - cell // 4) // 2, j * size // 3) for j in range(4) for i in range(3)])
    pen = max(1, size // 8)
    for left in range(at[0], at[0] + width - cell + 1, cell):
        if rng.random() < 0.15:
            continue
        # a character is a short walk over a 3 x 4 grid of dots: strokes like writing, but no known letter
        walk = grid[rng.choice(12, size=int(rng.integers(3, 6)), replace=False)] + (left + pen, at[1])
        cv2.polylines(canvas, [walk.reshape(-1, 1, 2).astype(np.int32)], False, ink, pen, cv2.LINE_AA)


def _tone(rng: Rng, color: bool) -> tuple[int, ...]:
    """Draw a surface's signal: grey, or a muted colour."""
    value = rng.uniform(25, 240)
    if not color:
        return (int(value),)
    hue = rng.dirichlet([2.0, 2.0, 2.0]) * 3.0
    return tuple(int(v) for v in np.clip(value * (0.5 + 0.5 * hue), 10, 250))


def _shape(canvas: NDArray[np.uint8], rng: Rng, size: float, tone: tuple[int, ...], corners: int = 0) -> None:
    """Draw one polygon, disc or bar of about `size` texels, wrapped around the seam."""
    at = rng.uniform(0, canvas.shape[0], 2)
    kind = rng.random()
    if not corners and kind < 0.3:
        _everywhere(canvas, lambda c, s: _disc(c, at + s, size * 0.5, tone))
        return
    count = corners or int(rng.integers(3, 8))
    stretch = np.array([1.0, rng.uniform(0.15, 1.0) if kind > 0.6 else 1.0])
    turn = rng.uniform(0, 2 * np.pi)
    angles = 2 * np.pi * (np.arange(count) + (0.0 if corners else 0.6) * rng.random(count)) / count
    ring = size * 0.6 * np.stack([np.cos(angles), np.sin(angles)], axis=1) * stretch
    spin = np.array([[np.cos(turn), np.sin(turn)], [-np.sin(turn), np.cos(turn)]])
    points = at + ring @ spin

    def draw(c: NDArray[np.uint8], s: NDArray[np.float64]) -> None:
        cv2.fillPoly(c, [np.round((points + s) * 16).astype(np.int32)], tone, cv2.LINE_AA, 4)

    _everywhere(canvas, draw, points)


def _disc(canvas: NDArray[np.uint8], at: NDArray[np.float64], radius: float, tone: tuple[int, ...]) -> None:
    """Draw a disc at sub-texel precision."""
    centre = tuple(int(v) for v in np.round(at * 16))
    cv2.circle(canvas, centre, max(1, round(radius * 16)), tone, cv2.FILLED, cv2.LINE_AA, 4)


def _everywhere(
    canvas: NDArray[np.uint8], draw: Callable[..., None], points: NDArray[np.float64] | None = None
) -> None:
    """Draw something and those of its copies one side away that the canvas can show."""
    side = canvas.shape[0]
    for dx in (-side, 0, side):
        for dy in (-side, 0, side):
            shift = np.array([dx, dy], dtype=np.float64)
            if points is not None:
                low, high = (points + shift).min(axis=0), (points + shift).max(axis=0)
                if (high < 0).any() or (low > side).any():
                    continue
            draw(canvas, shift)


RECIPES: dict[str, Callable[[int, Rng, str, bool], Image]] = {
    "photograph": _photograph,
    "leaves": _leaves,
    "plates": _plates,
    "mixed": _mixed,
    "stripes": _stripes,
    "glyphs": _glyphs,
}
