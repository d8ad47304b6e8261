"""What one can see through: dye or smoke carried by a flow, and glass with a texture of its own and highlights."""

from __future__ import annotations

from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.light import Image
from enhance.simulate.cutout import cut, mask_of
from enhance.simulate.motion import Motion
from enhance.simulate.sampling import OVERSAMPLE, paint_dye, paint_sheet
from enhance.simulate.texture import cloud, make_texture, soften

Rng = np.random.Generator

#: Light of the brightest highlight, against the camera's full scale: it clips the frames, the event sensor sees it.
HIGHLIGHT = 2.5


@dataclass(frozen=True)
class Flow:
    """A stirred liquid: a drift, and on it shears whose waves travel; where each particle is has a closed form.

    A shear shifts each line along itself, so it changes no area; nor do several, one after the other, each in its own
    direction. A family of maps without change of area is the motion of a flow without divergence (Arnold,
    "Mathematical Methods of Classical Mechanics", section 16: Liouville's theorem), and unlike a sum of waves this one
    stretches and folds what it carries.

    Parameters
    ----------
    drift : tuple of float
        Pixels a second (x, y), before the shears: they bend it into a meandering stream.
    waves : ndarray of float64, shape (K, 5)
        Of each shear: direction in radians, radians a pixel across it, amplitude in pixels, phase in radians, radians a
        second. The first acts last.
    """

    drift: tuple[float, float]
    waves: NDArray[np.float64]

    def shears(self, t_s: float) -> NDArray[np.float64]:
        """Describe the shears at `t_s` for `paint_dye`, shape (K, 5)."""
        direction, wave, amplitude, phase, rate = self.waves.T
        return np.stack([np.cos(direction), np.sin(direction), wave, amplitude, phase - rate * t_s], axis=1)

    def carried(self, places: NDArray[np.float64], t_s: float) -> NDArray[np.float64]:
        """Tell where particles are at `t_s` that an unmoved dye would have at `places`, both shape (N, 2), pixels."""
        now = places + np.array(self.drift) * t_s
        for ex, ey, wave, amplitude, phase in self.shears(t_s)[::-1]:
            across = ex * now[:, 1] - ey * now[:, 0]
            now = now + (amplitude * np.sin(wave * across + phase))[:, None] * np.array([ex, ey])
        return now

    @property
    def speed_px_s(self) -> float:
        """Upper bound of any particle's speed, pixels a second."""
        bound = float(np.hypot(*self.drift))
        for _, wave, amplitude, _, rate in self.waves[::-1]:
            steep = abs(wave * amplitude)
            # v = dS/dt + (dS/dx) v', and a shear [[1, s], [0, 1]] lengthens by s / 2 + sqrt(1 + s^2 / 4) at most
            bound = bound * (steep / 2 + float(np.sqrt(1 + steep**2 / 4))) + abs(amplitude * rate)
        return bound

    def at_most(self, speed_px_s: float) -> Flow:
        """Give the same flow, run at the rate at which its bound on speed is `speed_px_s`."""
        rate = speed_px_s / self.speed_px_s
        waves = self.waves * np.array([1.0, 1.0, 1.0, 1.0, rate])
        return Flow((self.drift[0] * rate, self.drift[1] * rate), waves)


@dataclass(frozen=True)
class Dye:
    """Dye or smoke in a flow, over whatever is behind; two clouds of it come and go by turns.

    Parameters
    ----------
    density : ndarray of float32, shape (S, S, 2)
        Coverage of both clouds, 0 to 1.
    tones : ndarray of float32, shape (2, C)
        Light of the thinnest and of the thickest dye.
    flow : Flow
    turn : tuple of float
        Radians at time zero, and radians a second, of the change from one cloud to the other.
    """

    density: Image
    tones: Image
    flow: Flow
    turn: tuple[float, float]

    def paint(self, out: Image, t_s: float) -> None:
        """Lay the dye over the frame."""
        share = 0.5 + 0.5 * np.sin(self.turn[0] + self.turn[1] * t_s)
        weights = np.array([share, 1.0 - share], dtype=np.float32)
        shift = np.array(self.flow.drift) * t_s
        paint_dye(out, self.density, self.flow.shears(t_s), shift, weights, self.tones)

    def speed(self, size: tuple[int, int]) -> float:
        """Upper bound of the flow."""
        return self.flow.speed_px_s


@dataclass(frozen=True)
class Sheet:
    """A half-transparent sheet without end: `texels` is (S, S, C + 1), light times coverage, then coverage."""

    texels: Image
    motion: Motion

    def paint(self, out: Image, t_s: float) -> None:
        """Lay the sheet over the frame; what is behind shows through where it does not cover."""
        paint_sheet(out, self.texels, self.motion.matrix(t_s, (0.0, 0.0)))

    def speed(self, size: tuple[int, int]) -> float:
        """Upper bound over the frame's corners; the motion's origin is taken to be the frame's centre."""
        return self.motion.speed(float(np.hypot(*size)) / 2)


def stirred(size: tuple[int, int], rng: Rng, speed_px_s: float) -> Flow:
    """Draw a flow whose fastest particle keeps to `speed_px_s`."""
    count = 3
    # directions apart, so that each shear folds what the others leave; waves of a third of the frame and more
    directions = rng.uniform(0, np.pi) + np.pi / count * np.arange(count) + rng.uniform(-0.3, 0.3, count)
    waves = 2 * np.pi / (max(size) * rng.uniform(0.35, 1.0, count))
    amplitudes = rng.uniform(0.25, 0.65, count) / waves
    rates = rng.dirichlet(np.ones(count)) * rng.uniform(0.1, 0.6) / amplitudes * rng.choice([-1, 1], count)
    heading = rng.uniform(0, 2 * np.pi)
    columns = [directions, waves, amplitudes, rng.uniform(0, 2 * np.pi, count), rates]
    return Flow((float(np.cos(heading)), float(np.sin(heading))), np.stack(columns, axis=1)).at_most(speed_px_s)


def dye(size: tuple[int, int], side: int, rng: Rng, speed_px_s: float, behind: Image) -> Dye:
    """Draw dark ink before what is bright or bright smoke before what is dark, in drifting swathes or in fine wisps.

    Parameters
    ----------
    size : tuple of int
        Width, height in pixels.
    side : int
        Texels along each side of its clouds, a power of two.
    rng : numpy.random.Generator
    speed_px_s : float
        Of its fastest particle, at most.
    behind : ndarray of float32, shape (H, W, C)
        The background.

    Returns
    -------
    Dye
    """
    thickest = rng.uniform(0.6, 0.97)
    clouds = np.dstack([_swathes(side, rng) if rng.random() < 0.5 else _wisps(side, rng) for _ in range(2)])
    # the flow may squeeze the dye to half its width: finer detail than this would alias
    soft = cv2.GaussianBlur(np.pad(clouds, ((16, 16), (16, 16), (0, 0)), mode="wrap"), (0, 0), 2.0)
    density = np.ascontiguousarray(thickest * soft[16:-16, 16:-16], dtype=np.float32)
    middle = float(np.median(behind))
    if rng.random() < (middle - 0.08) / 0.2:
        thin, thick = rng.uniform(0.03, 0.4 * middle + 0.03), rng.uniform(0.03, 0.1)
    else:
        thin, thick = rng.uniform(0.4, 0.9), rng.uniform(0.6, 0.93)
    tint = rng.uniform(0.5, 1.0, 3) if behind.shape[2] == 3 else np.ones(1)
    tones = np.array([thin * tint, thick * tint], dtype=np.float32)
    # one cloud gives way to the other while the dye moves on by 60 to 300 pixels
    turn = (rng.uniform(0, 6.28), np.pi * speed_px_s / rng.uniform(60.0, 300.0))
    return Dye(np.maximum(density, 0.0), tones, stirred(size, rng, speed_px_s), turn)


def _field(side: int, rng: Rng, slope: float) -> Image:
    """Seamless noise, (side, side), no larger in scale than about a frame: one half as long each way, twice."""
    return np.tile(cloud(side // 2, rng, slope), (2, 2))


def _swathes(side: int, rng: Rng) -> Image:
    """Soft-edged clouds, shape (side, side), 0 to 1."""
    field = _field(side, rng, rng.uniform(1.5, 2.2))
    return 0.5 + 0.5 * np.tanh(rng.uniform(1.0, 3.0) * (field - rng.uniform(-0.3, 0.6)))


def _wisps(side: int, rng: Rng) -> Image:
    """Threads where two clouds meet, thick and thin, shape (side, side), 0 to 1."""
    field, thickness = _field(side, rng, rng.uniform(1.4, 1.9)), _field(side, rng, 2.0)
    thread = np.exp(-((field / rng.uniform(0.2, 0.5)) ** 2))
    return thread * (0.6 + 0.4 * np.tanh(thickness))


def pane(side: int, rng: Rng, textures: str, color: bool) -> Image:
    """Make a textured sheet that lets a third to nearly all of the light behind it through; (side, side, C + 1)."""
    light = make_texture(side, rng, textures, color)
    cover = np.clip(rng.uniform(0.25, 0.55) + rng.uniform(0.05, 0.15) * cloud(side, rng, 1.8), 0.05, 0.67)[..., None]
    return soften(np.dstack([light * cover, cover]).astype(np.float32))


def highlight(radius: float, rng: Rng, color: bool) -> Image:
    """Make a highlight, round or long, at its middle up to `HIGHLIGHT` times full scale; shape (h, w, C + 1)."""
    mask, centre = mask_of(radius)
    y, x = np.mgrid[: mask.shape[0], : mask.shape[1]].astype(np.float32) - np.float32(centre)
    turn, slim = rng.uniform(0, np.pi), rng.uniform(0.35, 1.0)
    along, across = x * np.cos(turn) + y * np.sin(turn), y * np.cos(turn) - x * np.sin(turn)
    away = np.hypot(along, across / slim) / (radius * OVERSAMPLE)
    # falls to nothing at the radius, with no edge
    cover = np.clip(1.0 - away**2, 0.0, 1.0) ** 2
    tint = rng.uniform(0.85, 1.0, 3) if color else np.ones(1)
    light = rng.uniform(0.8, HIGHLIGHT) * np.ones_like(cover)[..., None] * tint
    return cut(light.astype(np.float32), cover.astype(np.float32))
