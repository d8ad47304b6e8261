"""Our invented scenario: bottles with printed labels ride a conveyor past a labelling wheel and fixed machine parts."""

from __future__ import annotations

from dataclasses import replace

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.light import Image
from enhance.simulate.cutout import MARGIN, cut, mask_of
from enhance.simulate.motion import Motion
from enhance.simulate.sampling import OVERSAMPLE
from enhance.simulate.scene import Layer, LayeredScene, Part, Still
from enhance.simulate.texture import cloud, print_row

Rng = np.random.Generator
Size = tuple[int, int]


def label_line(size: Size, rng: Rng, speed_px_s: float, color: bool) -> LayeredScene:
    """Draw the labelling line.

    Parameters
    ----------
    size : tuple of int
        Width, height in pixels.
    rng : numpy.random.Generator
    speed_px_s : float
        Of the bottles at their fastest, pixels a second.
    color : bool

    Returns
    -------
    LayeredScene
    """
    width, height = size
    bottle = (0.20 * height, 0.62 * height)
    # 9/10 of the speed is steady, the drive's unevenness adds the rest at its fastest
    rate, jolt = 2 * np.pi * rng.uniform(2.0, 4.0), 0.1 * speed_px_s
    pitch = 1.6 * bottle[0]
    count = int(np.ceil((width + 2 * bottle[0]) / pitch)) + 1
    low, high = -bottle[0], -bottle[0] + count * pitch
    base = 0.80 * height
    layers: list[Layer] = [Still(_machine(size, rng, color))]
    wheel = 0.17 * height
    layers.append(Part(_wheel(wheel, rng, color), _turning(size, wheel, speed_px_s), wheel))
    ride = Motion(velocity=(0.9 * speed_px_s, 0.0), sway=(jolt / rate, 0.0), sway_rate=(rate, 0.0))
    start = rng.uniform(0, pitch)
    for index in range(count):
        motion = replace(
            ride, origin=(low + start + index * pitch, base - bottle[1] / 2), wrap=(low, high, -height, 2 * height)
        )
        layers.append(Part(_bottle(bottle, rng, color), motion))
    layers += _belt(size, base, ride, rng, color)
    layers.append(Part(_rail(size, rng, color), Motion(origin=(width / 2, 0.40 * height))))
    return LayeredScene("label", size, tuple(layers), color)


def _turning(size: Size, radius: float, speed: float) -> Motion:
    """Run the labelling wheel's rim at the bottles' steady speed, as a real one must."""
    return Motion(origin=(0.70 * size[0], 0.14 * size[1]), spin=-0.9 * speed / radius)


def _tinted(grey: NDArray[np.floating], color: bool, tint: tuple[float, float, float]) -> Image:
    """Grey light (h, w) as (h, w, C)."""
    return (grey[..., None] * np.array(tint if color else (1.0,))).astype(np.float32)


def _machine(size: Size, rng: Rng, color: bool) -> Image:
    """Back plates, posts, a panel of lamps and bolts, (H, W, C)."""
    width, height = (OVERSAMPLE * n for n in size)
    plate = np.full((height, width), 0.20, dtype=np.float32)
    plate += np.linspace(0.10, -0.04, height, dtype=np.float32)[:, None]
    for x in (0.12, 0.36, 0.58, 0.88):
        left, right = int((x - 0.03) * width), int((x + 0.03) * width)
        roll = np.sin(np.linspace(0, np.pi, right - left, dtype=np.float32))
        plate[:, left:right] = 0.10 + 0.45 * roll**2
    panel = (int(0.16 * width), int(0.05 * height), int(0.30 * width), int(0.26 * height))
    cv2.rectangle(plate, panel[:2], panel[2:], 0.07, cv2.FILLED)
    for row in range(3):
        for column in range(5):
            at = (panel[0] + 14 + column * (panel[2] - panel[0]) // 5, panel[1] + 14 + row * (panel[3] - panel[1]) // 3)
            cv2.circle(plate, at, 5, float(rng.choice([0.12, 0.35, 0.85])), cv2.FILLED)
    for x in np.linspace(0.04, 0.96, 12):
        for y in (0.33, 0.92):
            at = (int(x * width), int(y * height))
            cv2.circle(plate, at, 7, 0.10, cv2.FILLED)
            cv2.circle(plate, (at[0] - 1, at[1] - 1), 5, 0.48, cv2.FILLED)
    side = 2 ** int(np.ceil(np.log2(max(width, height))))
    plate *= 1.0 + 0.05 * cloud(side, rng, 1.0)[:height, :width]
    light = _tinted(plate, color, (0.92, 1.0, 1.05))
    blurred = cv2.GaussianBlur(light, (0, 0), 1.0).reshape(light.shape)
    small = cv2.resize(blurred, size, interpolation=cv2.INTER_AREA).reshape(size[1], size[0], -1)
    return np.clip(small, 0.03, 0.95)


def _bottle(size: tuple[float, float], rng: Rng, color: bool) -> Image:
    """One bottle: glass with a highlight, shoulder, cap, and a label that no other bottle bears."""
    wide, tall = (round(OVERSAMPLE * n) for n in size)
    shape = (tall + 2 * MARGIN, wide + 2 * MARGIN)
    mask = np.zeros(shape, dtype=np.uint8)
    neck, shoulder = wide // 5, int(0.30 * tall)
    x0, x1, y0, y1 = MARGIN, MARGIN + wide, MARGIN, MARGIN + tall
    middle = (x0 + x1) // 2
    outline = [(middle - neck, y0), (middle + neck, y0), (middle + neck, y0 + shoulder // 2), (x1, y0 + shoulder)]
    outline += [(x1, y1), (x0, y1), (x0, y0 + shoulder), (middle - neck, y0 + shoulder // 2)]
    cv2.fillPoly(mask, [np.array(outline, dtype=np.int32)], 255, cv2.LINE_AA)
    across = np.abs(np.linspace(-1, 1, wide + 2 * MARGIN, dtype=np.float32))
    glass = 0.10 + 0.22 * np.sqrt(np.clip(1.0 - across**2, 0, 1)) * np.ones(shape)
    glass[:, x0 + wide // 6 : x0 + wide // 4] += 0.35
    glass[y0 : y0 + shoulder // 4, :] = 0.60
    light = _tinted(glass, color, (0.55, 0.95, 0.65))
    top, bottom = y0 + shoulder + tall // 20, y1 - tall // 8
    light[top:bottom, x0 : x1 + 1] = _print(bottom - top, wide + 1, rng, color)
    return cut(np.clip(light, 0.03, 0.95), mask.astype(np.float32) / 255.0)


def _print(rows: int, columns: int, rng: Rng, color: bool) -> Image:
    """One label, (rows, columns, C): a band, rows of invented characters, bars, a seal; bent like the glass."""
    channels = 3 if color else 1
    paper = np.full((rows, columns, channels), 235, dtype=np.uint8)
    tone = tuple(int(v) for v in (rng.uniform(30, 190, channels)))
    cv2.rectangle(paper, (0, 0), (columns, rows // 6), tone, cv2.FILLED)
    print_row(paper, rng, (columns // 8, rows // 4), rows // 7, columns * 3 // 4, (20,) * channels)
    print_row(paper, rng, (columns // 8, rows // 4 + rows // 6), rows // 12, columns * 3 // 4, (60,) * channels)
    left = columns // 8
    while left < columns * 0.6:
        bar = int(rng.integers(2, 6))
        cv2.rectangle(paper, (left, int(0.62 * rows)), (left + bar - 1, int(0.85 * rows)), (15,) * channels, cv2.FILLED)
        left += bar + int(rng.integers(2, 6))
    cv2.circle(paper, (int(0.80 * columns), int(0.73 * rows)), columns // 9, tone, cv2.FILLED, cv2.LINE_AA)
    cv2.circle(
        paper, (int(0.80 * columns), int(0.73 * rows)), columns // 18, (225,) * channels, cv2.FILLED, cv2.LINE_AA
    )
    bend = 0.75 + 0.25 * np.sqrt(np.clip(1 - np.linspace(-0.95, 0.95, columns, dtype=np.float32) ** 2, 0, 1))
    light = 0.08 + 0.70 * (paper.astype(np.float32) / 255.0) ** np.float32(2.2) * bend[None, :, None]
    return light.astype(np.float32)


def _wheel(radius: float, rng: Rng, color: bool) -> Image:
    """Make the labelling wheel: dark rim with pads, spokes, hub."""
    mask, centre = mask_of(radius)
    reach = radius * OVERSAMPLE
    middle = (round(centre), round(centre))
    cv2.circle(mask, middle, round(reach), 255, cv2.FILLED, cv2.LINE_AA)
    tone: NDArray[np.uint8] = np.full(mask.shape, 120, dtype=np.uint8)
    cv2.circle(tone, middle, round(0.80 * reach), 200, cv2.FILLED, cv2.LINE_AA)
    for k in range(6):
        turn = 2 * np.pi * k / 6 + rng.uniform(-0.05, 0.05)
        at = (round(centre + 0.5 * reach * np.cos(turn)), round(centre + 0.5 * reach * np.sin(turn)))
        cv2.circle(tone, at, round(0.17 * reach), 60 + 20 * (k == 0), cv2.FILLED, cv2.LINE_AA)
        pad = (round(centre + 0.9 * reach * np.cos(turn + 0.5)), round(centre + 0.9 * reach * np.sin(turn + 0.5)))
        cv2.circle(tone, pad, round(0.08 * reach), 235, cv2.FILLED, cv2.LINE_AA)
    cv2.circle(tone, middle, round(0.15 * reach), 90, cv2.FILLED, cv2.LINE_AA)
    grey = 0.03 + 0.85 * (tone.astype(np.float32) / 255.0) ** np.float32(2.2)
    return cut(_tinted(grey, color, (1.0, 0.95, 0.85)), mask.astype(np.float32) / 255.0)


def _belt(size: Size, base: float, ride: Motion, rng: Rng, color: bool) -> list[Layer]:
    """Chain plates under the bottles, one cut-out each, riding with them."""
    width, height = size
    pitch, tall = 0.16 * height, 0.13 * height
    count = int(np.ceil((width + 3 * pitch) / pitch))
    plates: list[Layer] = []
    for index in range(count):
        wide, deep = round(OVERSAMPLE * pitch), round(OVERSAMPLE * tall)
        grey = np.full((deep + 2 * MARGIN, wide + 2 * MARGIN), rng.uniform(0.25, 0.40), dtype=np.float32)
        cover = np.zeros_like(grey)
        cover[MARGIN:-MARGIN, MARGIN:-MARGIN] = 1.0
        grey[:, -MARGIN - 5 :] = 0.06
        cv2.circle(grey, (MARGIN + wide // 3, MARGIN + deep // 2), deep // 6, 0.08, cv2.FILLED)
        motion = replace(
            ride, origin=(index * pitch, base + tall / 2), wrap=(-pitch, (count - 1) * pitch, -height, 2 * height)
        )
        plates.append(Part(cut(_tinted(grey, color, (1.0, 1.0, 0.95)), cover), motion))
    return plates


def _rail(size: Size, rng: Rng, color: bool) -> Image:
    """Make the guide rail in front of the bottles: a polished bar with brackets."""
    wide, deep = OVERSAMPLE * (size[0] + 2 * MARGIN), round(OVERSAMPLE * 0.045 * size[1])
    grey = np.zeros((deep + 2 * MARGIN, wide + 2 * MARGIN), dtype=np.float32)
    cover = np.zeros_like(grey)
    cover[MARGIN:-MARGIN, MARGIN:-MARGIN] = 1.0
    roll = np.sin(np.linspace(0.1, np.pi - 0.1, deep, dtype=np.float32))
    grey[MARGIN:-MARGIN] = (0.12 + 0.68 * roll**3)[:, None]
    for x in np.linspace(0.1, 0.9, 5) + rng.uniform(-0.02, 0.02, 5):
        left = int(x * wide)
        grey[MARGIN:-MARGIN, left : left + 14] = 0.09
    return cut(_tinted(grey, color, (1.0, 1.0, 1.0)), cover)
