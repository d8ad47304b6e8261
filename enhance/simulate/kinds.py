"""The kinds of scene, each drawn at random from a generator, and the factory that makes them."""

from __future__ import annotations

from collections.abc import Callable

import cv2
import numpy as np

from enhance.simulate.cutout import blades, disc_drop, polygon, thin_sheet
from enhance.simulate.label import label_line
from enhance.simulate.motion import Fall, Motion
from enhance.simulate.scene import Cloth, Layer, LayeredScene, Part, Still, Surface
from enhance.simulate.texture import make_texture
from enhance.simulate.veil import Sheet, dye, highlight, pane

Size = tuple[int, int]
Rng = np.random.Generator


def make_scene(
    kind: str, size: Size, rng: Rng, speed_px_s: float, color: bool = False, textures: str = "train"
) -> LayeredScene:
    """Draw a scene of one kind; everything random comes from the generator.

    Parameters
    ----------
    kind : str
        One of `KINDS`.
    size : tuple of int
        Width, height in pixels.
    rng : numpy.random.Generator
    speed_px_s : float
        The speed that the fastest part of the picture reaches, pixels a second; the scene's own `speed_px_s` is a
        bound on it and may stand a little higher. A fluid keeps to it too, but its fastest part reaches half to four
        fifths of it.
    color : bool
        R, G, B instead of grey.
    textures : str
        ``train`` or ``test``: which photographs may be used.

    Returns
    -------
    LayeredScene
        A `Scene`.

    Raises
    ------
    ValueError
        For an unknown kind, or textures other than train and test.

    Examples
    --------
    >>> make_scene("drops", (64, 48), np.random.default_rng(1), 300.0).render(0.1).shape
    (48, 64)
    """
    if kind not in KINDS:
        raise ValueError(f"{kind!r} is no kind of scene; expected one of {', '.join(KINDS)}")
    if textures not in ("train", "test"):
        raise ValueError(f'{textures!r} is no set of textures; expected "train" or "test"')
    if kind == "label":
        return label_line(size, rng, speed_px_s, color)
    layers = _BUILDERS[kind](size, rng, speed_px_s, color, textures)
    return LayeredScene(kind, size, tuple(layers), color)


def _side(size: Size) -> int:
    """Texels of a texture that shows little repetition in a frame: a power of two of about three frame widths."""
    return int(np.clip(2 ** round(np.log2(3 * max(size))), 256, 2048))


def _surface(size: Size, rng: Rng, color: bool, textures: str, motion: Motion, recipe: str = "") -> Surface:
    return Surface(make_texture(_side(size), rng, textures, color, recipe), motion)


def _backdrop(size: Size, rng: Rng, color: bool, textures: str) -> Still:
    shift = tuple(rng.uniform(0, 4 * max(size), 2))
    return _surface(size, rng, color, textures, Motion(origin=shift, angle=rng.uniform(0, 0.3))).still(size)


def _out_of_focus(backdrop: Still, size: Size) -> Still:
    """Blur a background as it is where drops and smoke are filmed: far behind them."""
    soft = cv2.GaussianBlur(backdrop.image, (0, 0), 0.06 * max(size)).reshape(backdrop.image.shape)
    return Still(np.asarray(soft, dtype=np.float32))


def _curve(size: Size, rng: Rng, speed: float, heading: float) -> Motion:
    """Choose a bent path that speeds up and slows down, bounded by `speed` all through."""
    shares = rng.dirichlet([10.0, 2.0, 1.0])
    rate, swing_rate = rng.uniform(6.0, 16.0), rng.uniform(4.0, 10.0)
    sway = shares[1] * speed / rate / np.sqrt(2)
    return Motion(
        origin=(size[0] / 2, size[1] / 2),
        velocity=(shares[0] * speed * np.cos(heading), shares[0] * speed * np.sin(heading)),
        sway=(sway, sway),
        sway_rate=(rate, rate * rng.uniform(0.7, 1.0)),
        sway_phase=(rng.uniform(0, 6.28), rng.uniform(0, 6.28)),
        swing=shares[2] * speed / swing_rate / (np.hypot(*size) / 2),
        swing_rate=swing_rate,
    )


def _texture(size: Size, rng: Rng, speed: float, color: bool, textures: str) -> list[Layer]:
    """Make one textured surface along a curved, accelerating path."""
    return [_surface(size, rng, color, textures, _curve(size, rng, speed, rng.uniform(0, 2 * np.pi)))]


def _parts(size: Size, rng: Rng, speed: float, color: bool, textures: str) -> list[Layer]:
    """Make textured parts that cross and hide each other over a background at rest."""
    layers: list[Layer] = [_backdrop(size, rng, color, textures)]
    for index in range(int(rng.integers(5, 10))):
        radius = rng.uniform(0.10, 0.24) * min(size)
        part = polygon(radius, rng, make_texture(512, rng, textures, color))
        # the first part uses the full speed, so that every scene really is as fast as it was asked to be
        own = speed * (1.0 if index == 0 else rng.uniform(0.4, 1.0))
        layers.append(Part(part, _to_and_fro(size, rng, own, radius), radius))
    return layers


def _to_and_fro(size: Size, rng: Rng, speed: float, radius: float) -> Motion:
    """Cross the frame again and again, turn on the way; bounded by `speed`."""
    shares = rng.dirichlet([8.0, 2.0, 1.0])
    heading, rate = rng.uniform(0, 2 * np.pi), rng.uniform(8.0, 16.0)
    reach = radius + 4.0
    sway = shares[1] * speed / rate / np.sqrt(2)
    return Motion(
        origin=tuple(rng.uniform(0, size)),
        velocity=(shares[0] * speed * np.cos(heading), shares[0] * speed * np.sin(heading)),
        sway=(sway, sway),
        sway_rate=(rate, rate),
        sway_phase=(rng.uniform(0, 6.28), rng.uniform(0, 6.28)),
        angle=rng.uniform(0, 6.28),
        spin=shares[2] * speed / radius * rng.choice([-1, 1]),
        # the jump lies just outside the frame
        wrap=(-reach, size[0] + reach, -reach, size[1] + reach),
    )


def _fan(size: Size, rng: Rng, speed: float, color: bool, textures: str) -> list[Layer]:
    """Make a bladed wheel that turns, faster and slower, over a background at rest."""
    radius = rng.uniform(0.38, 0.52) * min(size)
    wheel = blades(radius, rng, int(rng.integers(3, 8)), make_texture(1024, rng, textures, color))
    swing_rate = rng.uniform(5.0, 12.0)
    # the rim moves at speed: 4/5 of it steady, 1/5 to and fro
    motion = Motion(
        origin=tuple(np.array(size) * rng.uniform(0.4, 0.6, 2)),
        angle=rng.uniform(0, 6.28),
        spin=0.8 * speed / radius * rng.choice([-1, 1]),
        swing=0.2 * speed / radius / swing_rate,
        swing_rate=swing_rate,
    )
    return [_backdrop(size, rng, color, textures), Part(wheel, motion, radius)]


def _drops(size: Size, rng: Rng, speed: float, color: bool, textures: str) -> list[Layer]:
    """Make small round drops that fall and speed up over a soft background."""
    backdrop = _backdrop(size, rng, color, textures)
    layers: list[Layer] = [_out_of_focus(backdrop, size) if rng.random() < 0.6 else backdrop]
    height = size[1]
    for _ in range(int(rng.integers(30, 70))):
        radius = rng.uniform(1.6, 0.02 * height + 3.0)
        top, way = -2 * radius - 4, height + 4 * radius + 8
        start, sideways = rng.uniform(0.2, 0.6) * speed, rng.uniform(-0.08, 0.08) * speed
        # a fall of `way` that ends at the asked speed: v^2 = v0^2 + 2 g s, lasting 2 s / (v0 + v)
        gravity = (speed**2 - start**2) / (2 * way)
        motion = Fall(
            origin=(rng.uniform(-0.05, 1.05) * size[0], top),
            velocity=(sideways, start),
            gravity=gravity,
            period_s=2 * way / (start + speed),
            start=rng.random(),
        )
        layers.append(Part(disc_drop(radius, rng, color), motion))
    return layers


def _thin(size: Size, rng: Rng, speed: float, color: bool, textures: str) -> list[Layer]:
    """Put wires and gratings in front of a slower background."""
    heading = rng.uniform(0, 2 * np.pi)
    behind = _surface(size, rng, color, textures, _curve(size, rng, rng.uniform(0.0, 0.4) * speed, heading))
    layers: list[Layer] = [behind]
    for index in range(int(rng.integers(2, 5))):
        radius = rng.uniform(0.3, 0.55) * min(size)
        own = speed * (1.0 if index == 0 else rng.uniform(0.4, 1.0))
        layers.append(Part(thin_sheet(radius, rng, color), _to_and_fro(size, rng, own, radius), radius))
    return layers


def _zoom(size: Size, rng: Rng, speed: float, color: bool, textures: str) -> list[Layer]:
    """Make a surface that grows, shrinks and turns about the frame's middle."""
    corner = np.hypot(*size) / 2
    share, rate, zoom = rng.uniform(0.2, 0.8), rng.uniform(8.0, 14.0), 0.0
    # the scale stays within 20 %: a stronger shrink would alias
    zoom = min(0.2, share * speed / corner / rate)
    motion = Motion(
        origin=(size[0] / 2, size[1] / 2),
        zoom=zoom,
        zoom_rate=rate,
        angle=rng.uniform(0, 6.28),
        spin=(speed / corner / np.exp(zoom) - zoom * rate) * rng.choice([-1, 1]),
    )
    return [_surface(size, rng, color, textures, motion)]


def _cloth(size: Size, rng: Rng, speed: float, color: bool, textures: str) -> list[Layer]:
    """Make a surface bent by waves that travel through it."""
    count, amplitude = 3, 0.012 * max(size)
    heading = rng.uniform(0, 2 * np.pi, count)
    # wavelengths of a third of the frame and more: the fold's steepness stays well under 1
    waves = 2 * np.pi / (max(size) * rng.uniform(0.6, 1.4, count))
    steep = float(waves.sum()) * amplitude
    share = rng.uniform(0.3, 0.7)
    room = speed * (1.0 - steep)
    rates = rng.uniform(0.5, 1.0, count)
    rates *= share * room / amplitude / rates.sum()
    vectors = np.stack([waves * np.cos(heading), waves * np.sin(heading), rng.uniform(0, 6.28, count), rates], axis=1)
    along = rng.uniform(0, 2 * np.pi)
    drift = ((1 - share) * room * np.cos(along), (1 - share) * room * np.sin(along))
    return [Cloth(make_texture(_side(size), rng, textures, color), drift, amplitude, vectors, size)]


def _text(size: Size, rng: Rng, speed: float, color: bool, textures: str) -> list[Layer]:
    """Make printed rows of invented characters that scroll past, a little askew."""
    heading = rng.choice([0.0, np.pi / 2, np.pi, 1.5 * np.pi]) + rng.normal(0, 0.15)
    return [_surface(size, rng, color, textures, _curve(size, rng, speed, heading), "glyphs")]


def _fluid(size: Size, rng: Rng, speed: float, color: bool, textures: str) -> list[Layer]:
    """Make dye or smoke that a stirred flow carries over a background at rest."""
    backdrop = _backdrop(size, rng, color, textures)
    behind = _out_of_focus(backdrop, size) if rng.random() < 0.4 else backdrop
    return [behind, dye(size, _side(size), rng, speed, behind.image)]


def _glass(size: Size, rng: Rng, speed: float, color: bool, textures: str) -> list[Layer]:
    """Make a surface seen through a moving textured pane, on which highlights glide."""
    own = speed * rng.uniform(0.1, 0.9) * (rng.random() < 0.7)
    behind = _surface(size, rng, color, textures, _curve(size, rng, own, rng.uniform(0, 2 * np.pi)))
    front = _curve(size, rng, speed, rng.uniform(0, 2 * np.pi))
    layers: list[Layer] = [behind, Sheet(pane(_side(size), rng, textures, color), front)]
    for _ in range(int(rng.integers(3, 9))):
        radius = rng.uniform(2.0, 8.0)
        motion = _to_and_fro(size, rng, speed * rng.uniform(0.2, 1.0), radius)
        layers.append(Part(highlight(radius, rng, color), motion, radius))
    return layers


def _specks(size: Size, rng: Rng, speed: float, color: bool, textures: str) -> list[Layer]:
    """Make many small textured things, each with its own speed and heading, over a textured background at rest."""
    layers: list[Layer] = [_backdrop(size, rng, color, textures)]
    sheet = make_texture(1024, rng, textures, color)
    for index in range(int(rng.integers(20, 50))):
        # 3 to 12 pixels across
        radius = rng.uniform(1.5, 6.0)
        corner = rng.integers(0, sheet.shape[0] - 64, 2)
        surface = sheet[corner[0] : corner[0] + 64, corner[1] : corner[1] + 64] * np.float32(rng.uniform(0.3, 2.0))
        own = speed * (1.0 if index == 0 else rng.uniform(0.2, 1.0))
        layers.append(Part(polygon(radius, rng, surface), _to_and_fro(size, rng, own, radius), radius))
    return layers


Builder = Callable[[Size, Rng, float, bool, str], list[Layer]]

_BUILDERS: dict[str, Builder] = {
    "texture": _texture,
    "parts": _parts,
    "fan": _fan,
    "drops": _drops,
    "thin": _thin,
    "zoom": _zoom,
    "cloth": _cloth,
    "text": _text,
    "fluid": _fluid,
    "glass": _glass,
    "specks": _specks,
}

#: Every kind of scene.
KINDS: tuple[str, ...] = (*_BUILDERS, "label")
