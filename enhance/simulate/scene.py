"""What a scene is: layers over a background, drawn at any instant."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Protocol, runtime_checkable

import numpy as np
from numpy.typing import NDArray

from enhance.light import Image
from enhance.simulate.motion import Motion
from enhance.simulate.sampling import OVERSAMPLE, paint_part, paint_texture, paint_warped


@runtime_checkable
class Scene(Protocol):
    """Linear radiance at any instant.

    Anything with these four members can be recorded: tests bring scenes of their own.
    """

    @property
    def name(self) -> str:
        """What it shows."""
        ...

    @property
    def size(self) -> tuple[int, int]:
        """Width, height."""
        ...

    @property
    def speed_px_s(self) -> float:
        """Upper bound of image motion, pixels a second."""
        ...

    def render(self, t_s: float) -> Image:
        """Draw the scene at `t_s` seconds: float32, (H, W) or (H, W, 3), linear radiance above 0.

        1 is the camera's full scale; highlights may lie above, where frames clip and the event sensor does not.
        """
        ...


class Layer(Protocol):
    """One thing that draws itself over what lies behind it."""

    def paint(self, out: Image, t_s: float) -> None:
        """Draw over `out`, shape (H, W, C), as at `t_s`."""
        ...

    def speed(self, size: tuple[int, int]) -> float:
        """Upper bound of the speed of a point in a frame of `size`, pixels a second."""
        ...


@dataclass(frozen=True)
class LayeredScene:
    """Layers painted back to front.

    Parameters
    ----------
    name : str
    size : tuple of int
        Width, height.
    layers : tuple of Layer
        The first covers the whole frame.
    color : bool
    """

    name: str
    size: tuple[int, int]
    layers: tuple[Layer, ...]
    color: bool = False
    speed_px_s: float = field(init=False)

    def __post_init__(self) -> None:
        # frozen: the derived bound is set once, here
        object.__setattr__(self, "speed_px_s", float(max(layer.speed(self.size) for layer in self.layers)))

    def render(self, t_s: float) -> Image:
        """Draw the scene at `t_s` seconds; see `Scene`."""
        width, height = self.size
        out = np.empty((height, width, 3 if self.color else 1), dtype=np.float32)
        for layer in self.layers:
            layer.paint(out, t_s)
        return out if self.color else out[..., 0]


@dataclass(frozen=True)
class Still:
    """A background that does not move, drawn once: `image` is (H, W, C)."""

    image: Image

    def paint(self, out: Image, t_s: float) -> None:
        """Copy the background."""
        out[:] = self.image

    def speed(self, size: tuple[int, int]) -> float:
        """Nothing moves."""
        return 0.0


@dataclass(frozen=True)
class Surface:
    """A repeating texture, (S, S, C), that fills the frame and moves as one."""

    texture: Image
    motion: Motion

    def paint(self, out: Image, t_s: float) -> None:
        """Fill the frame."""
        paint_texture(out, self.texture, self.motion.matrix(t_s, (0.0, 0.0)))

    def speed(self, size: tuple[int, int]) -> float:
        """Upper bound over the frame's corners; the motion's origin is taken to be the frame's centre."""
        return self.motion.speed(float(np.hypot(*size)) / 2)

    def still(self, size: tuple[int, int]) -> Still:
        """Freeze it as at time zero."""
        out = np.empty((size[1], size[0], self.texture.shape[2]), dtype=np.float32)
        self.paint(out, 0.0)
        return Still(out)


@dataclass(frozen=True)
class Part:
    """A cut-out with soft edges, (h, w, C + 1) with coverage last, that moves over what is behind it.

    `reach` is how far it extends from its centre, pixels; half of its diagonal if left out.
    """

    texels: Image
    motion: Motion
    reach: float | None = None

    @property
    def radius(self) -> float:
        """How far it extends from its centre, pixels."""
        rows, columns = self.texels.shape[:2]
        return self.reach or float(np.hypot(rows, columns)) / 2 / OVERSAMPLE

    def paint(self, out: Image, t_s: float) -> None:
        """Draw inside the box the cut-out can touch."""
        x, y = self.motion.position(t_s)
        reach = self.radius * self.motion.scale(t_s) + 3.0
        height, width = out.shape[:2]
        x0, x1 = max(0, int(x - reach)), min(width, int(x + reach) + 2)
        y0, y1 = max(0, int(y - reach)), min(height, int(y + reach) + 2)
        if x0 < x1 and y0 < y1:
            rows, columns = self.texels.shape[:2]
            matrix = self.motion.matrix(t_s, ((columns - 1) / 2, (rows - 1) / 2))
            paint_part(out, self.texels, matrix, (x0, y0, x1, y1))

    def speed(self, size: tuple[int, int]) -> float:
        """Upper bound over the cut-out."""
        return self.motion.speed(self.radius)


@dataclass(frozen=True)
class Cloth:
    """A texture carried by waves that bend it: displacement and shading are sums of travelling waves.

    Parameters
    ----------
    texture : ndarray of float32, shape (S, S, C)
    drift : tuple of float
        Pixels a second (x, y).
    amplitude : float
        Of each wave, pixels.
    waves : ndarray of float64, shape (K, 4)
        Wave vector (x, y) in radians a pixel, direction of displacement in radians, radians a second.
    """

    texture: Image
    drift: tuple[float, float]
    amplitude: float
    waves: NDArray[np.float64]
    size: tuple[int, int]
    _basis: Image = field(init=False, repr=False)
    _grid: Image = field(init=False, repr=False)

    def __post_init__(self) -> None:
        width, height = self.size
        y, x = np.mgrid[:height, :width].astype(np.float64)
        phase = self.waves[:, 0, None, None] * x + self.waves[:, 1, None, None] * y
        basis = np.stack([np.sin(phase), np.cos(phase)], axis=1).astype(np.float32)
        object.__setattr__(self, "_basis", basis)  # (K, 2, H, W)
        object.__setattr__(self, "_grid", np.stack([x, y]).astype(np.float32))

    def paint(self, out: Image, t_s: float) -> None:
        """Fill the frame."""
        turn = self.waves[:, 3] * t_s
        # sin(k x - w t) = sin(k x) cos(w t) - cos(k x) sin(w t): two fixed fields a wave, no sine a pixel
        weights = np.stack([np.cos(turn), -np.sin(turn)], axis=1)
        away = np.stack([np.cos(self.waves[:, 2]), np.sin(self.waves[:, 2]), np.full(len(turn), 0.04)])
        mix = (away[:, :, None] * weights).astype(np.float32)  # (3, K, 2)
        fields = np.tensordot(mix, self._basis, axes=([1, 2], [0, 1]))  # (3, H, W)
        u = OVERSAMPLE * (self._grid[0] - np.float32(self.drift[0] * t_s) - np.float32(self.amplitude) * fields[0])
        v = OVERSAMPLE * (self._grid[1] - np.float32(self.drift[1] * t_s) - np.float32(self.amplitude) * fields[1])
        paint_warped(out, self.texture, u, v, np.float32(0.9) + fields[2])

    def speed(self, size: tuple[int, int]) -> float:
        """Upper bound: the drift, and every wave at its fastest at once, over the stretch the waves cause."""
        steep = float(np.sum(np.hypot(self.waves[:, 0], self.waves[:, 1]))) * self.amplitude
        swing = self.amplitude * float(np.sum(np.abs(self.waves[:, 3])))
        # u = x - a(x, t): a texel moves with (drift + a_t) / (1 - a_x); the waves are built with steep < 1
        return (float(np.hypot(*self.drift)) + swing) / (1.0 - min(steep, 0.9))
