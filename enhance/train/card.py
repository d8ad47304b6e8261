"""The card of a weights file: what the network is, what it was fitted on, how good it is, and what it cannot do."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from torch import nn

from enhance import __version__
from enhance.interpolate.network import INPUTS, MEMBERS, RESIDUAL, FusionNetwork, load_network, macs_per_pixel
from enhance.simulate.benchmark import FIRST_SEED
from enhance.train import fit, recipe, score
from enhance.train.data import CROP, CROPS, INSTANTS, KEYS, Shard
from enhance.write.whole import whole_file

WEIGHTS = "fusion.safetensors"

DATA = (
    "Recordings of the package's own simulator, all kinds of scene in turn, textures of the training half: procedural "
    "ones and free photographs. 192 to 256 x 160 to 192 pixels, 5 or 6 keys, 0.5 to 60 px of motion from key to key, "
    f"exposures of 0.1 to 90 % of that time with up to {recipe.MOST_BLUR_PX:g} px of blur, 2 to 120 keys a second; "
    f"thresholds 0.1 to 0.4 a polarity, mismatch to 8 %, noise to {recipe.MOST_NOISE_HZ:g} Hz a pixel, refractory time "
    "to 300 us, leak to 0.2 Hz, latency spread 5 to 300 us, hot pixels; full well 1000 to 30 000 electrons, read noise "
    "to 12, 8 to 12 bits, linear or sRGB.",
    f"The rig told is disturbed: thresholds by -5 to +20 % and 5 % a polarity, the clock by 2 % of the exposure or "
    f"300 us, any ramp, hot pixels partly unknown; {recipe.BADLY_RIGGED:.0%} of the rigs are off by 30 % and 5 %.",
    f"{recipe.VIOLATED:.0%} of the recordings break the event model in one way or two: events lost where they come "
    "thick, lag that grows in the dark, light added to the frames alone, clipped highlights, frames read with a curve "
    "that is not theirs.",
)
LIMITS = (
    "Fitted on simulated recordings alone; figures on real ones must be measured there, with held-out frames.",
    "It mixes candidates: what none of them shows, it cannot show. Its residual is bounded to "
    f"{RESIDUAL:g} of full scale, half of what it was fitted with.",
    "Light that flickers, rolling shutters, sensors that do not share one view pixel by pixel: not trained on.",
    "Luma alone is fused; colour rides along with the warps.",
    "Held-out recordings choose which round's weights are kept, so their figures are a little flattering; the "
    "benchmark's scenes had no part in that.",
)


def write_card(
    training: fit.Training,
    held_out: Sequence[Shard],
    recordings: int,
    minutes: float,
    folder: Path,
    ablations: Mapping[str, Any] | None = None,
) -> Path:
    """Write the best weights with their card, for machines and for readers.

    Parameters
    ----------
    training : Training
        Finished.
    held_out : sequence of Shard
    recordings : int
        Trained on.
    minutes : float
        Asked for.
    folder : Path
        Holds the best weights; gets ``fusion.safetensors``, ``fusion.json``, ``fusion.md``.
    ablations : mapping, optional
        As `measure_ablations` of this package gives them.

    Returns
    -------
    Path
        The weights.
    """
    data = (folder / fit.BEST).read_bytes()
    path = folder / WEIGHTS
    # The network that is scored is the one on the disk.
    network = _stored(data, path)
    card = describe(network, training, held_out, recordings, minutes) | {"sha256": hashlib.sha256(data).hexdigest()}
    card["ablations"] = dict(ablations or {})
    _write_json(card, path)
    with whole_file(path.with_suffix(".md")) as partial:
        partial.write_text(readable(card), encoding="utf-8")
    return path


def write_weights(network: FusionNetwork, path: Path) -> None:
    """Write a network with as much of a card as loading it needs."""
    path.parent.mkdir(parents=True, exist_ok=True)
    fit.save_weights(network, path)
    _stored(path.read_bytes(), path)


def _stored(data: bytes, path: Path) -> FusionNetwork:
    with whole_file(path) as partial:
        partial.write_bytes(data)
    # The checksum alone makes it loadable.
    _write_json({"sha256": hashlib.sha256(data).hexdigest()}, path)
    return load_network(path)


def _write_json(card: Mapping[str, Any], path: Path) -> None:
    with whole_file(path.with_suffix(".json")) as partial:
        partial.write_text(json.dumps(card, indent=2, sort_keys=True) + "\n", encoding="utf-8")


def describe(
    network: FusionNetwork, training: fit.Training, held_out: Sequence[Shard], recordings: int, minutes: float
) -> dict[str, Any]:
    """Gather a card's facts; held-out recordings are scored anew.

    Parameters
    ----------
    network : FusionNetwork
    training, held_out, recordings, minutes
        As in `write_card`.

    Returns
    -------
    dict
        What JSON can hold.
    """
    by_kind, keys = score.score(network, held_out), score.score(network, held_out, keys=True)
    settings = training.settings
    return {
        "name": "fusion",
        "made_by": f"enhance {__version__}",
        "architecture": {
            "layers": _layers(network),
            "inputs": INPUTS,
            "members": MEMBERS,
            "residual": RESIDUAL,
            "parameters": sum(weight.numel() for weight in network.parameters()),
            "macs_per_pixel": round(macs_per_pixel(network)),
        },
        "data": {
            "recipe": list(DATA),
            "recordings": recordings,
            "seed": settings.seed,
            "scene_seeds": f"trained on: below {recipe.HELD_OUT_SEED}; held out: from there to {FIRST_SEED}",
            "crops": f"{(INSTANTS + KEYS) * CROPS} a recording, {CROP} x {CROP} pixels",
        },
        "training": {
            "steps": training.step,
            "first_steps": settings.first,
            "kept_step": _kept_step(training),
            "batch": settings.batch,
            "rate": fit.RATE,
            "weight_decay": fit.WEIGHT_DECAY,
            "averaged": fit.AVERAGED,
            "softness": fit.SOFTNESS,
            "threads": settings.threads,
            "minutes": round(training.seconds / 60, 1),
        },
        "held_out": {
            "definition": "Mean PSNR in dB of whole pictures against the sharp truth, in the frames' own curve",
            "by_kind": _rounded(by_kind),
            "mean": _rounded({"all kinds": score.mean_over_groups(by_kind)})["all kinds"],
            "keys_by_kind": _rounded(keys),
            "keys_mean": _rounded({"all kinds": score.mean_over_groups(keys)})["all kinds"],
            "by_model": _rounded(score.score(network, held_out, _by_model)),
            "weights": {name: round(value, 3) for name, value in score.weigh(network, held_out).items()},
            "at_rest": {name: round(value, 2) for name, value in score.at_rest(network, held_out).items()},
        },
        "limits": list(LIMITS),
        "command": f"enhance train FOLDER --minutes {minutes:g} --recordings {recordings} --seed {settings.seed}",
    }


def _kept_step(training: fit.Training) -> float:
    """Find the round whose weights are the best, among those judged on refined keys."""
    judged = [row for row in training.curve if row["step"] > training.settings.first]
    return max(judged, key=lambda row: np.nansum([row["held_out_network"], row["keys_network"]]))["step"]


def _layers(network: FusionNetwork) -> list[dict[str, Any]]:
    return [
        {"name": name, "shape": list(layer.weight.shape), "stride": layer.stride[0]}
        for name, layer in network.named_modules()
        if isinstance(layer, nn.Conv2d)
    ]


def _by_model(shard: Shard) -> str:
    violated = recipe.Violations(**shard.recipe["violations"]).any
    return "event model violated" if violated else "as modelled"


def _rounded(table: Mapping[str, Mapping[str, float]]) -> score.Table:
    return {group: {name: round(value, 2) for name, value in row.items()} for group, row in table.items()}


def readable(card: Mapping[str, Any]) -> str:
    """Turn a card's facts into Markdown."""
    net, data, fitted, held = (card[name] for name in ("architecture", "data", "training", "held_out"))
    inserted = {**held["by_kind"], "**all kinds**": held["mean"], **held["by_model"]}
    keys = {**held["keys_by_kind"], "**all kinds**": held["keys_mean"]}
    rest = held["at_rest"]
    weights = ", ".join(f"{name} {value:.2f}" for name, value in held["weights"].items())
    lines = [
        "# The fusion network",
        "",
        "Weighs the candidates of an inserted picture, or of a key, pixel by pixel and adds a bounded residual.",
        f"`{WEIGHTS}`, sha256 `{card['sha256']}`, {card['made_by']}. Drawn from `fusion.json`.",
        "",
        "## Architecture",
        "",
        f"{net['parameters']} parameters, {net['macs_per_pixel'] / 1000:.1f} thousand multiply-accumulates an output "
        f"pixel; {net['inputs']} input channels, {net['members']} of them members of the mixture; residual at most "
        f"{net['residual']:g} of full scale.",
        "",
        "| layer | weights | stride |",
        "|---|---|---|",
        *(f"| {one['name']} | {' x '.join(map(str, one['shape']))} | {one['stride']} |" for one in net["layers"]),
        "",
        "## Data",
        "",
        *(f"- {line}" for line in data["recipe"]),
        f"- {data['recordings']} recordings, seed {data['seed']}, {data['crops']}; scene seeds {data['scene_seeds']}.",
        "",
        "## Training",
        "",
        f"{fitted['steps']} steps of {fitted['batch']} crops in {fitted['minutes']:g} minutes on {fitted['threads']} "
        f"thread; AdamW, rate {fitted['rate']:g} along a cosine, decay {fitted['weight_decay']:g}, weights averaged "
        f"({fitted['averaged']:g}), those after step {fitted['kept_step']} kept. The first {fitted['first_steps']} "
        "steps see keys as the double integral leaves them, the others other recordings, whose keys the network of "
        "then has refined. The loss is the logarithm of each crop's Charbonnier error (softness "
        f"{fitted['softness']:g}) in sRGB signal and in linear light alike. Again (steps are "
        "timed to fit the minutes, so another machine takes more or fewer):",
        "",
        f"    {card['command']}",
        "",
        "## Held-out recordings",
        "",
        f"{held['definition']}. Inserted pictures:",
        "",
        *_table(inserted),
        "",
        "Keys:",
        "",
        *_table(keys),
        "",
        "*Without residual*: the mixture alone. *Start*: what stands in where no network is used: the analytic blend; "
        "for a key, its own double integral. *Carried*: both neighbours carried along the events and blended by time. "
        "*Best single*: the best candidate of each picture, chosen with the truth in hand.",
        "",
        *_ablations(card["ablations"]),
        f"Mean weights: {weights}.",
        "",
        f"Where nothing happens, error in 8-bit steps of signal: network {rest['network']:.2f}, keys blended by time "
        f"{rest['keys']:.2f}, one against the other {rest['changed']:.2f}.",
        "",
        "## Limits",
        "",
        *(f"- {line}" for line in card["limits"]),
    ]
    return "\n".join(lines) + "\n"


def _table(rows: Mapping[str, Mapping[str, float]]) -> list[str]:
    return [
        f"| scenes | {' | '.join(name.replace('_', ' ') for name in score.SCORED)} |",
        f"|---|{'---|' * len(score.SCORED)}",
        *(f"| {name} | {' | '.join(f'{row[one]:.2f}' for one in score.SCORED)} |" for name, row in rows.items()),
    ]


def _ablations(found: Mapping[str, Any]) -> list[str]:
    if not found:
        return []
    return [
        "## Ablations",
        "",
        f"Each fitted alone, {found['steps']} steps; held-out recordings, dB (without a network: the column *start*).",
        "",
        "| without | inserted | keys |",
        "|---|---|---|",
        *(f"| {name} | {row['inserted']:.2f} | {row['keys']:.2f} |" for name, row in found["networks"].items()),
        "",
    ]
