"""How far a made picture is from the truth, as far as the tool itself can see.

Each pixel's expected squared error, in the frames' own curve with 1 = full scale, is a sum of a few causes, each a map
that can be computed without the truth, times a coefficient that was fitted where the truth is known (`enhance.train`):

    expected error^2 = scale * sum over causes k of coefficient_k * map_k

and the expected PSNR is -10 log10 of its mean, so that picture and map say the same, and what a low figure comes from
can be read. The scale is one number a picture, fitted too: a product of powers of the causes' means. It is what tells a
recording where all candidates err alike from one where their disagreement is the whole of it.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.errors import ModelError
from enhance.interpolate.candidates import Candidates
from enhance.light import Light
from enhance.rig import Rig

Map = NDArray[np.float32]

#: Causes of error, in the order of the maps.
CAUSES = (
    "floor",
    "frame noise",
    "carried pictures disagree",
    "moved pictures disagree",
    "other pictures disagree",
    "picture against carried",
    "picture against moved",
    "picture against steadied",
    "picture against where it starts",
    "spread of the mixture",
    "thresholds over the events to the nearer key",
    "thresholds over the keys' exposures",
    "light that came and went",
    "edges where events fired",
    "fine detail where events fired",
    "edges and how far they move",
    "edges and how little their motion is steady",
    "neighbour re-exposed",
    "events miss the keys' difference",
)
#: The same for pictures moved by the frames' own flow.
FRAME_CAUSES = ("floor", "frame noise", "sides disagree", "edges that move")
#: Kinds of made picture, each with its causes.
KINDS = {
    "inserted by network": CAUSES,
    "inserted by integral": CAUSES,
    "inserted by frames": FRAME_CAUSES,
    "deblurred by network": CAUSES,
    "deblurred by integral": CAUSES,
}
#: Bound on the scale of a picture, either way.
MOST_SCALE = 30.0
#: Maps are averaged over this many pixels: errors are known by neighbourhoods, not pixel by pixel.
WINDOW = 7
#: Error that even a perfect picture has: a fraction of an 8-bit step.
FLOOR = np.float32(1e-6)


@dataclass(frozen=True)
class Fitted:
    """What was fitted for one kind of picture, each of shape (K,) for its K causes.

    Parameters
    ----------
    coefficients : ndarray of float64
        Of the sum; none negative.
    powers, centre : ndarray of float64
        Of the scale: ``product of (mean_k / centre_k)^power_k``, means of the causes over the picture.
    """

    coefficients: NDArray[np.float64]
    powers: NDArray[np.float64]
    centre: NDArray[np.float64]

    def error_map(self, maps: Map) -> Map:
        """Expect each pixel's squared error, shape (H, W), from maps of shape (K, H, W)."""
        means = np.maximum(maps.mean(axis=(1, 2), dtype=np.float64), FLOOR)
        scale = np.exp(np.sum(self.powers * np.log(means / self.centre)))
        # Far outside of what was fitted, powers must not run away.
        scale = np.clip(scale, 1 / MOST_SCALE, MOST_SCALE)
        return np.tensordot((scale * self.coefficients).astype(np.float32), maps, axes=1)


@dataclass(frozen=True)
class TrustModel:
    """What was fitted, by kind of picture: the keys of `KINDS`."""

    kinds: Mapping[str, Fitted]


def cause_maps(candidates: Candidates, picture: Map, spread: Map, miss: Map, light: Light, rig: Rig) -> Map:
    """Map the causes of a picture's error.

    Parameters
    ----------
    candidates : Candidates
    picture : ndarray of float32, shape (H, W)
        Luma, linear light, as it was made.
    spread : ndarray of float32, shape (H, W)
        Variance of the mixture's members, in signal squared.
    miss : ndarray of float32, shape (H, W)
        By how much a neighbour, carried here along the events and exposed again, misses a captured key, in log light.
    light : Light
        The frames' curve: errors count in code values.
    rig : Rig

    Returns
    -------
    ndarray of float32, shape (K, H, W)
        Squared, 1 = full scale, in the order of `CAUSES`.
    """
    own = own_signal(candidates.stack, light)
    made = own_signal(picture, light)
    start = own_signal(candidates.carried if candidates.key is None else candidates.key, light)
    slope = _slope(picture, light)
    lit = (np.maximum(picture, 0) * slope) ** 2
    w = np.float32(candidates.weight)
    between = w * (1 - w) * 4
    edges, fired = _edges(made), candidates.counts.sum(axis=0) > 0
    to_left, to_right = candidates.flows
    maps = [
        np.full_like(made, FLOOR),
        (rig.noise(np.clip(picture, 0, 1)) * slope) ** 2,
        (own[0] - own[1]) ** 2,
        (own[2] - own[3]) ** 2,
        (own[4] - own[5]) ** 2,
        (made - 0.5 * (own[0] + own[1])) ** 2,
        (made - 0.5 * (own[2] + own[3])) ** 2,
        (made - own[6]) ** 2,
        (made - start) ** 2,
        spread,
        lit * _of_events(candidates.counts.min(axis=0), rig.contrast.mean),
        lit * _of_events(candidates.exposed.mean(axis=0), rig.contrast.mean),
        lit * (rig.contrast.mean * np.minimum(candidates.counts.sum(axis=0), 40)) ** 2,
        edges * fired,
        (made - cv2.GaussianBlur(made, (3, 3), 0)) ** 2 * fired,
        edges * _motion(to_right - to_left),
        edges * _motion((1 - w) * to_left + w * to_right),
        lit * np.clip(miss, -2, 2) ** 2,
        between * lit * np.clip(candidates.mismatch, -2, 2) ** 2,
    ]
    return _averaged(maps)


def frame_cause_maps(sides: Map, flow: Map, picture: Map, light: Light, rig: Rig) -> Map:
    """Map the causes of the error of a picture that was moved by the frames' own flow, without events.

    Parameters
    ----------
    sides : ndarray of float32, shape (2, H, W)
        Luma of the left and the right key moved to the instant, linear light.
    flow : ndarray of float32, shape (H, W, 2)
        From the left key to the right one.
    picture : ndarray of float32, shape (H, W)
        Luma, linear light, as it was made.
    light : Light
    rig : Rig

    Returns
    -------
    ndarray of float32, shape (K, H, W)
        Squared, 1 = full scale, in the order of `FRAME_CAUSES`.
    """
    own, made = own_signal(sides, light), own_signal(picture, light)
    slope = _slope(picture, light)
    return _averaged(
        [
            np.full_like(made, FLOOR),
            (rig.noise(np.clip(picture, 0, 1)) * slope) ** 2,
            (own[0] - own[1]) ** 2,
            _edges(made) * _motion(flow),
        ]
    )


def load_trust(path: Path) -> TrustModel:
    """Load what was fitted.

    Parameters
    ----------
    path : Path
        JSON: ``{"kinds": {kind: {cause: [coefficient, power, centre], ...}, ...}, ...}``.

    Returns
    -------
    TrustModel

    Raises
    ------
    ModelError
        If the file is missing, damaged, or for other kinds or causes than these.
    """
    try:
        table = json.loads(path.read_text(encoding="utf-8"))["kinds"]
        return TrustModel({kind: _fitted(table[kind], causes) for kind, causes in KINDS.items()})
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise ModelError(
            f"{path}: what trust in pictures rests on cannot be read ({error!r}); reinstall the package"
        ) from error


def _fitted(rows: Mapping[str, Sequence[float]], causes: Sequence[str]) -> Fitted:
    table = np.array([[float(value) for value in rows[cause]] for cause in causes])
    coefficients, _, centre = table.T
    if len(rows) != len(causes) or not np.isfinite(table).all() or (coefficients < 0).any() or (centre <= 0).any():
        raise ValueError(f"expected a coefficient, 0 or more, a power and a centre for each of {', '.join(causes)}")
    return Fitted(*table.T)


def own_signal(linear: NDArray[np.float32], light: Light) -> NDArray[np.float32]:
    """Express linear light, any shape, as signal in the frames' own curve, 0 to 1 of full scale."""
    return np.clip(light.to_codes(linear) / np.float32(light.full_scale), 0, 1)


def _slope(linear: Map, light: Light) -> Map:
    """Own signal per linear light: how much an error of light counts."""
    step = np.float32(0.01)
    bright = np.clip(linear, 0.02, 1)
    change = light.to_codes(bright + step) - light.to_codes(bright - step)
    return change / (2 * step * np.float32(light.full_scale))


def _of_events(count: Map, contrast: float) -> Map:
    """Variance of a sum of events in log light: a part-filled threshold, and 5 % of every step."""
    variance = contrast**2 * ((count > 0) / np.float32(12) + np.float32(0.05**2) * np.minimum(count, 40) ** 2)
    return np.asarray(variance, dtype=np.float32)


def _edges(own: Map) -> Map:
    """Squared slope: what a shift of a pixel would cost."""
    dx = cv2.Sobel(own, cv2.CV_32F, 1, 0, scale=1 / 8)
    dy = cv2.Sobel(own, cv2.CV_32F, 0, 1, scale=1 / 8)
    return dx**2 + dy**2


def _motion(flow: Map) -> Map:
    """Squared length of each pixel's motion, (H, W, 2) to (H, W), pixels squared; beyond ten pixels all are as bad."""
    return np.minimum(flow[..., 0] ** 2 + flow[..., 1] ** 2, np.float32(100.0))


def _averaged(maps: Sequence[Map]) -> Map:
    return np.stack([cv2.blur(np.asarray(m, np.float32), (WINDOW, WINDOW)) for m in maps])
