"""How good the network is on recordings it was not fitted on, beside what is there without it."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

import cv2
import numpy as np
import torch
from numpy.typing import NDArray

from enhance.interpolate.candidates import NAMES
from enhance.interpolate.network import MEMBERS, START, FusionNetwork
from enhance.light import decode, encode
from enhance.train.data import Shard

#: What is scored: the network; its mixture without the residual; what it starts from (the analytic blend, or a key's
#: own double integral); the two carried candidates blended by time; the best single candidate of each picture, chosen
#: with the truth in hand.
SCORED = ("network", "without_residual", "start", "carried", "best_single")
#: A pixel is at rest if no event falls into the square of this side around it during the whole span.
REST_PIXELS = 9

Signal = NDArray[np.float32]
Table = dict[str, dict[str, float]]


@torch.inference_mode()
def pictures_of(network: FusionNetwork, inputs: Signal) -> tuple[dict[str, Signal], Signal]:
    """Make every scored picture of one instant but the best single.

    Parameters
    ----------
    network : FusionNetwork
    inputs : ndarray of float32, shape (INPUTS, H, W)
        H and W multiples of `BLOCK`.

    Returns
    -------
    pictures : dict of ndarray, shape (H, W)
        Signal; candidates under their names.
    weights : ndarray, shape (MEMBERS, H, W)
    """
    known = torch.from_numpy(inputs)[None]
    fused, weighed = network(known)
    weights = weighed[0].numpy()
    time = inputs[-2]
    made = {
        "network": fused[0, 0].numpy(),
        "without_residual": (weights * inputs[:MEMBERS]).sum(axis=0),
        "start": inputs[START],
        "carried": (1 - time) * inputs[0] + time * inputs[1],
    }
    return made | dict(zip(NAMES, inputs, strict=False)), weights


def score_shard(network: FusionNetwork, shard: Shard, keys: bool = False) -> dict[str, list[float]]:
    """Score the inserted pictures of one recording, or its keys.

    Parameters
    ----------
    network : FusionNetwork
    shard : Shard
        Whole pictures.
    keys : bool
        Which of the two.

    Returns
    -------
    dict of list of float
        PSNR in dB of each picture, under the names of `SCORED`; in the frames' own curve, clipped to full scale.
    """
    found: dict[str, list[float]] = {name: [] for name in SCORED}
    curve = shard.recipe["read_as"]
    for inputs, truth in zip(shard.inputs, shard.truth, strict=True):
        if bool(inputs[-1, 0, 0]) != keys:
            continue
        sharp = _in_curve(curve, truth[0].astype(np.float32))
        made, _ = pictures_of(network, inputs.astype(np.float32))
        psnr = {name: _psnr(_in_curve(curve, picture), sharp) for name, picture in made.items()}
        psnr["best_single"] = max(psnr[name] for name in NAMES)
        for name in SCORED:
            found[name].append(psnr[name])
    return found


def kind_of(shard: Shard) -> str:
    """Kind of scene."""
    return str(shard.recipe["kind"])


def score(
    network: FusionNetwork, shards: Sequence[Shard], group: Callable[[Shard], str] = kind_of, keys: bool = False
) -> Table:
    """Score many recordings, group by group.

    Parameters
    ----------
    network : FusionNetwork
    shards : sequence of Shard
    group : callable
        Name of a recording's group.
    keys : bool
        Score keys instead of inserted pictures.

    Returns
    -------
    dict of dict of float
        Group: mean PSNR in dB under the names of `SCORED`, and the number of ``pictures``.
    """
    by_group: dict[str, dict[str, list[float]]] = {}
    for shard in shards:
        for name, values in score_shard(network, shard, keys).items():
            by_group.setdefault(group(shard), {}).setdefault(name, []).extend(values)
    return {
        name: {scored: float(np.mean(found[scored])) for scored in SCORED} | {"pictures": float(len(found["network"]))}
        for name, found in sorted(by_group.items())
        if found["network"]
    }


def mean_over_groups(table: Mapping[str, Mapping[str, float]]) -> dict[str, float]:
    """Average a table over its groups, each counting the same; not a number where there are none."""
    if not table:
        return dict.fromkeys(SCORED, float("nan"))
    return {name: float(np.mean([row[name] for row in table.values()])) for name in SCORED}


def weigh(network: FusionNetwork, shards: Sequence[Shard]) -> dict[str, float]:
    """Average the weight that each member of the mixture gets, over all pixels of all inserted pictures."""
    means = [
        pictures_of(network, inputs.astype(np.float32))[1].mean(axis=(1, 2))
        for shard in shards
        for inputs in shard.inputs
        if not inputs[-1, 0, 0]
    ]
    names = [*NAMES, "carried pair weighed by events", "start"]
    return {name: float(weight) for name, weight in zip(names, np.mean(means, axis=0), strict=True)}


def at_rest(network: FusionNetwork, shards: Sequence[Shard]) -> dict[str, float]:
    """Measure what becomes of pixels where nothing happens, in 8-bit steps of signal.

    Returns
    -------
    dict of float
        Root mean square error against the truth of the ``network`` and of the ``keys`` blended by time, and of one
        against the other (``changed``).
    """
    names = ("network", "keys", "changed")
    square, pixels = np.zeros(len(names)), 0
    around = np.ones((REST_PIXELS, REST_PIXELS), np.uint8)
    for shard in shards:
        for known, truth in zip(shard.inputs, shard.truth, strict=True):
            inputs, sharp = known.astype(np.float32), truth[0].astype(np.float32)
            if inputs[-1, 0, 0]:
                continue
            # logarithms of counts plus one stand after the members
            seen = (inputs[MEMBERS : MEMBERS + 2].sum(axis=0) > 0).astype(np.uint8)
            rest = cv2.dilate(seen, around) == 0
            made, _ = pictures_of(network, inputs)
            # Without events a carried key is the key.
            fused, keys = made["network"], made["carried"]
            for index, difference in enumerate((fused - sharp, keys - sharp, fused - keys)):
                square[index] += np.square(difference[rest], dtype=np.float64).sum()
            pixels += int(rest.sum())
    return {name: float(255 * np.sqrt(s / max(pixels, 1))) for name, s in zip(names, square, strict=True)}


def _in_curve(curve: str, signal: Signal) -> Signal:
    return encode(curve, decode("srgb", np.clip(signal, 0, 1)))


def _psnr(estimate: Signal, reference: Signal) -> float:
    # 10 log10(1 / MSE), full scale 1
    return float(-10 * np.log10(max(np.mean((estimate - reference) ** 2, dtype=np.float64), 1e-12)))
