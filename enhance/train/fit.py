"""Fits the fusion network: a loss in signal and in light, an averaged network, a state that can be taken up again.

Each step draws its crops from a generator of its own, seeded by the step's number: a run that was interrupted and
taken up again sees what an uninterrupted one sees.

References
----------
Charbonnier, Blanc-Feraud, Aubert, Barlaud, "Two deterministic half-quadratic regularization algorithms for computed
imaging", ICIP 1994 (the loss). Loshchilov, Hutter, "Decoupled Weight Decay Regularization", ICLR 2019 (the optimizer).
"""

from __future__ import annotations

import csv
import json
import logging
import math
import time
from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass, field
from pathlib import Path

import numpy as np
import torch
from torch import Tensor

from enhance.errors import ModelError
from enhance.interpolate.network import FusionNetwork
from enhance.train.ablation import ablated, mixture
from enhance.train.data import Shard
from enhance.train.score import mean_over_groups, score
from enhance.train.symmetry import turned
from enhance.write.whole import whole_file

logger = logging.getLogger(__name__)

#: Error (of 1) up to which the loss is quadratic: about the noise of a good frame.
SOFTNESS = 0.02
#: Error of a crop that is good enough: below it, less is worth little.
LEAST_ERROR = 0.0005
#: Highest learning rate, reached after `WARM_UP` steps; it ends at `LAST_RATE` of it, along a cosine.
RATE, LAST_RATE, WARM_UP = 2e-3, 0.01, 100
WEIGHT_DECAY = 1e-4
#: Share of the average that stays from one step to the next.
AVERAGED = 0.998
#: Gradients longer than this are shortened: one crop with a runaway event sum must not undo a round.
LONGEST_GRADIENT = 1.0
STATE, CURVE, BEST = "state.safetensors", "curve.csv", "best.safetensors"
_COLUMNS = ("step", "seconds", "rate", "loss", "held_out_network", "held_out_start", "keys_network", "keys_start")

Progress = Callable[[int, int, str], None]


@dataclass(frozen=True)
class Settings:
    """What decides the weights, together with the data.

    Parameters
    ----------
    steps : int
        In all.
    seed : int
        Of the first weights and of all drawing.
    batch : int
        Crops a step.
    round_steps : int
        Steps between two saved states.
    threads : int
    first : int
        Steps on keys as the double integral leaves them; after these, on keys that the network itself has refined.
    without : str
        What is kept from the network, one of `enhance.train.ablation.ABLATIONS`; nothing if empty.
    """

    steps: int
    seed: int = 1
    batch: int = 8
    round_steps: int = 800
    threads: int = 1
    first: int = 0
    without: str = ""


@dataclass
class Training:
    """A training under way: everything that changes."""

    settings: Settings
    network: FusionNetwork
    average: FusionNetwork
    optimizer: torch.optim.AdamW
    step: int = 0
    seconds: float = 0.0
    best: float = -math.inf
    curve: list[dict[str, float]] = field(default_factory=list)

    @classmethod
    def begin(cls, settings: Settings) -> Training:
        """Draw the first weights."""
        torch.manual_seed(settings.seed)
        network, average = FusionNetwork(), FusionNetwork()
        average.load_state_dict(network.state_dict())
        return cls(settings, network, average.requires_grad_(False).eval(), _optimizer(network))


def _optimizer(network: FusionNetwork) -> torch.optim.AdamW:
    return torch.optim.AdamW(network.parameters(), lr=RATE, weight_decay=WEIGHT_DECAY)


class Crops:
    """All crops of many recordings, drawn from at random.

    Parameters
    ----------
    shards : sequence of Shard
    """

    def __init__(self, shards: Sequence[Shard]) -> None:
        self._shards = list(shards)
        self._ends = np.cumsum([len(shard.inputs) for shard in self._shards])

    def __len__(self) -> int:
        return int(self._ends[-1])

    def batch(self, rng: np.random.Generator, count: int) -> tuple[Tensor, Tensor]:
        """Draw crops and a symmetry for each: inputs (count, INPUTS, S, S) and truth (count, 1, S, S), float32."""
        drawn = []
        for number in rng.integers(len(self), size=count):
            at = int(np.searchsorted(self._ends, number, side="right"))
            shard, crop = self._shards[at], int(number - self._ends[at])
            inputs, truth = (torch.from_numpy(a[crop].astype(np.float32)) for a in (shard.inputs, shard.truth))
            drawn.append(turned(inputs, truth, rng))
        inputs, truth = (torch.stack(column) for column in zip(*drawn, strict=True))
        return inputs, truth


def fusion_loss(picture: Tensor, truth: Tensor) -> Tensor:
    """Mean over the crops of the logarithm of their error, (N, 1, H, W).

    The error is Charbonnier's, in signal and in linear light: dark and light both count. Its logarithm makes a tenth
    less error worth the same on an easy crop as on a hard one, as it is in dB.
    """
    error = 0.5 * (_charbonnier(picture - truth) + _charbonnier(_to_linear(picture) - _to_linear(truth)))
    return torch.log(error + LEAST_ERROR).mean()


def _charbonnier(difference: Tensor) -> Tensor:
    return (torch.sqrt(difference**2 + SOFTNESS**2) - SOFTNESS).mean(dim=(1, 2, 3))


def _to_linear(signal: Tensor) -> Tensor:
    # IEC 61966-2-1; the power never sees a number near zero, where its slope ends.
    curved = ((signal.clamp(min=0.04045) + 0.055) / 1.055) ** 2.4
    return torch.where(signal <= 0.04045, signal / 12.92, curved)


def learning_rate(step: int, steps: int) -> float:
    """Rate of one step: up along a line, down along a cosine."""
    warm = min(1.0, (step + 1) / WARM_UP)
    down = 0.5 * (1 + math.cos(math.pi * step / steps))
    return RATE * warm * (LAST_RATE + (1 - LAST_RATE) * down)


def train_step(training: Training, crops: Crops) -> float:
    """Take one step; gives its loss."""
    settings, step = training.settings, training.step
    inputs, truth = crops.batch(np.random.default_rng([settings.seed, step]), settings.batch)
    inputs = ablated(inputs, settings.without)
    for group in training.optimizer.param_groups:
        group["lr"] = learning_rate(step, settings.steps)
    picture, weights = training.network(inputs.contiguous(memory_format=torch.channels_last))
    if settings.without == "residual":
        picture = mixture(inputs, weights)
    loss = fusion_loss(picture, truth)
    training.optimizer.zero_grad()
    loss.backward()
    torch.nn.utils.clip_grad_norm_(training.network.parameters(), LONGEST_GRADIENT)
    training.optimizer.step()
    # Early on the average follows closely, so that it does not remember the first weights.
    kept = min(AVERAGED, (1 + step) / (10 + step))
    with torch.no_grad():
        for mean, weight in zip(training.average.parameters(), training.network.parameters(), strict=True):
            mean.lerp_(weight, 1 - kept)
    training.step += 1
    return float(loss.detach())


def fit(
    training: Training,
    crops: Crops,
    held_out: Sequence[Shard],
    folder: Path,
    progress: Progress | None = None,
    until: int | None = None,
) -> None:
    """Train to the end, saving the state and the curve after every round, and the weights where they are the best.

    Parameters
    ----------
    training : Training
        Changed in place.
    crops : Crops
    held_out : sequence of Shard
        Whole pictures the rounds are judged by.
    folder : Path
    progress : callable, optional
        Called with steps done, steps in all and words.
    until : int, optional
        Stop after this many steps.
    """
    last = min(until or training.settings.steps, training.settings.steps)
    torch.set_num_threads(training.settings.threads)
    # Twice as fast on a CPU as planes, with the same result.
    training.network.to(memory_format=torch.channels_last)  # type: ignore[call-overload]
    while training.step < last:
        end = min(last, training.step + training.settings.round_steps)
        began, losses = time.monotonic(), []
        while training.step < end:
            losses.append(train_step(training, crops))
        training.seconds += time.monotonic() - began
        _close_round(training, float(np.mean(losses)), held_out, folder)
        if progress:
            progress(training.step, training.settings.steps, f"loss {losses[-1]:.5f}")


def _close_round(training: Training, loss: float, held_out: Sequence[Shard], folder: Path) -> None:
    inserted, keys = (mean_over_groups(score(training.average, held_out, keys=keys)) for keys in (False, True))
    mean = float(np.nanmean([inserted["network"], keys["network"]]))
    training.curve.append(
        {
            "step": training.step,
            "seconds": round(training.seconds, 1),
            "rate": learning_rate(training.step - 1, training.settings.steps),
            "loss": loss,
            "held_out_network": inserted["network"],
            "held_out_start": inserted["start"],
            "keys_network": keys["network"],
            "keys_start": keys["start"],
        }
    )
    logger.info(
        "step %d of %d: loss %.5f, held out %.2f dB (analytic blend %.2f), keys %.2f dB (double integral %.2f)",
        training.step, training.settings.steps, loss,
        inserted["network"], inserted["start"], keys["network"], keys["start"],
    )  # fmt: skip
    if mean > training.best:
        training.best = mean
        save_weights(training.average, folder / BEST)
    save_state(training, folder)
    with whole_file(folder / CURVE) as path, open(path, "w", newline="", encoding="utf-8") as file:
        table = csv.DictWriter(file, _COLUMNS, lineterminator="\n")
        table.writeheader()
        table.writerows(training.curve)


def save_weights(network: FusionNetwork, path: Path) -> None:
    """Write a network's weights as safetensors."""
    from safetensors.torch import save

    weights = {name: weight.contiguous() for name, weight in network.state_dict().items()}
    with whole_file(path) as partial:
        partial.write_bytes(save(weights))


def save_state(training: Training, folder: Path) -> None:
    """Write all that is needed to take a training up again, as one file."""
    from safetensors.torch import save

    moments = training.optimizer.state_dict()["state"]
    tensors = {f"network.{name}": weight for name, weight in training.network.state_dict().items()}
    tensors |= {f"average.{name}": weight for name, weight in training.average.state_dict().items()}
    tensors |= {f"moments.{k}.{name}": value for k, each in moments.items() for name, value in each.items()}
    plain = {name: tensor.detach().clone(memory_format=torch.contiguous_format) for name, tensor in tensors.items()}
    told = {
        "settings": asdict(training.settings),
        "step": training.step,
        "seconds": training.seconds,
        "best": training.best,
        "curve": training.curve,
    }
    with whole_file(folder / STATE) as partial:
        partial.write_bytes(save(plain, {"training": json.dumps(told)}))


def load_state(folder: Path) -> Training:
    """Take a training up where it was last saved.

    Parameters
    ----------
    folder : Path

    Returns
    -------
    Training

    Raises
    ------
    ModelError
        If there is no state, or it cannot be read.
    """
    from safetensors import SafetensorError, safe_open

    path = folder / STATE
    try:
        with safe_open(path, framework="pt") as file:
            told = json.loads((file.metadata() or {})["training"])
            tensors = {name: file.get_tensor(name) for name in file.keys()}  # noqa: SIM118 - not a mapping
        training = Training.begin(Settings(**told.pop("settings")))
        for part in ("network", "average"):
            getattr(training, part).load_state_dict(_part(tensors, part))
        moments: dict[int, dict[str, Tensor]] = {}
        for name, value in _part(tensors, "moments").items():
            number, moment = name.split(".")
            moments.setdefault(int(number), {})[moment] = value
        training.optimizer.load_state_dict(training.optimizer.state_dict() | {"state": moments})
    except (OSError, SafetensorError, KeyError, ValueError, RuntimeError, TypeError) as error:
        raise ModelError(
            f"{path}: no training can be taken up from it ({error}); begin anew in another folder, without --resume"
        ) from error
    for name, value in told.items():
        setattr(training, name, value)
    return training


def _part(tensors: dict[str, Tensor], name: str) -> dict[str, Tensor]:
    return {key.removeprefix(f"{name}."): value for key, value in tensors.items() if key.startswith(f"{name}.")}
