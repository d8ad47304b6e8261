"""The fusion network, all of it: it weighs the candidates pixel by pixel and adds a bounded residual.

It invents nothing on its own: the picture is a convex mixture of the analytic candidates plus a residual that cannot
exceed `RESIDUAL`. What it learns is *when* to believe which, from what no candidate knows about itself: event counts,
disagreement, the distance to the keys. An encoder-decoder after Ronneberger, Fischer, Brox, "U-Net: Convolutional
Networks for Biomedical Image Segmentation", MICCAI 2015, made small: it works on 2x2 pixel blocks throughout.
"""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import Any

import numpy as np
import torch
from numpy.typing import NDArray
from torch import Tensor, nn
from torch.nn import functional

from enhance.errors import ModelError
from enhance.interpolate.blend import analytic_blend
from enhance.interpolate.candidates import NAMES, Candidates
from enhance.light import decode, encode

#: Largest change the residual may make, in signal (sRGB-encoded light, 0 to 1): while it is fitted, and where it is
#: used. It is fitted on rigs told worse than a calibration tells them, and corrects too much on good ones: held back to
#: a half it loses 0.0 to 0.2 dB in the mean of 12 measured recordings, and costs less where it is wrong.
FITTED_RESIDUAL, RESIDUAL = 0.1, 0.05
#: Channels at 1/2, 1/4 and 1/8 of the size: 19.8 kMAC an output pixel in all, within the 20 a CPU night affords.
WIDTHS = (32, 48, 56)
CANDIDATES = len(NAMES)
#: What is mixed: the candidates, the carried pair weighed by events, and what the network starts from: the analytic
#: blend, or for a key its own double integral.
MEMBERS = CANDIDATES + 2
#: Members, event counts of both sides and of both exposures, mismatch, two cues of motion, time, whether it is a key.
INPUTS = MEMBERS + 9
START = MEMBERS - 1
#: Sides are padded to a multiple of this.
BLOCK = 8


def network_inputs(candidates: Candidates) -> NDArray[np.float32]:
    """Arrange what is known of one instant as the network's channels.

    Parameters
    ----------
    candidates : Candidates

    Returns
    -------
    ndarray of float32, shape (INPUTS, H, W)
        The members as signal (sRGB-encoded, so that dark and light weigh as they look), then the cues scaled to about
        one.
    """
    start = analytic_blend(candidates)
    signal = encode("srgb", np.concatenate([candidates.stack, candidates.carried[None], start[None]]))
    # A runaway event sum must not drown everything else.
    signal = np.clip(signal, -0.1, 1.3)
    told = (candidates.weight, float(candidates.key is not None))
    return np.concatenate(
        [
            signal,
            np.log1p(candidates.counts) / 2,
            np.log1p(candidates.exposed) / 2,
            np.clip(candidates.mismatch, -2, 2)[None],
            _motion_cues(candidates),
            *(np.full((1, *start.shape), value, np.float32) for value in told),
        ]
    ).astype(np.float32)


def _motion_cues(candidates: Candidates) -> NDArray[np.float32]:
    """How little the motions to either key fit one steady motion (hidden, lost, turning), and how large they are."""
    to_left, to_right = candidates.flows
    w = np.float32(candidates.weight)
    # steady motion v over the span: to_left = -w v, to_right = (1 - w) v
    apart = (1 - w) * to_left + w * to_right
    way = to_right - to_left
    return np.stack(
        [np.log1p(np.hypot(apart[..., 0], apart[..., 1])), np.log1p(np.hypot(way[..., 0], way[..., 1])) / 2]
    )


class FusionNetwork(nn.Module):
    """Weights of the candidates and a bounded residual from the channels of `network_inputs`."""

    def __init__(self) -> None:
        super().__init__()
        a, b, c = WIDTHS
        self.enter = nn.Conv2d(4 * INPUTS, a, 3, padding=1)
        self.at_half = nn.ModuleList([nn.Conv2d(a, a, 3, padding=1) for _ in range(2)])
        self.to_quarter = nn.Conv2d(a, b, 3, stride=2, padding=1)
        self.at_quarter = nn.Conv2d(b, b, 3, padding=1)
        self.to_eighth = nn.Conv2d(b, c, 3, stride=2, padding=1)
        self.at_eighth = nn.ModuleList([nn.Conv2d(c, c, 3, padding=1) for _ in range(2)])
        self.up_quarter = nn.Conv2d(c, b, 1)
        self.back_quarter = nn.Conv2d(b, b, 3, padding=1)
        self.up_half = nn.Conv2d(b, a, 1)
        self.back_half = nn.Conv2d(a, a, 3, padding=1)
        self.leave = nn.Conv2d(a, 4 * (MEMBERS + 1), 3, padding=1)
        # Training begins with no residual and nearly all weight on what the network starts from.
        nn.init.zeros_(self.leave.weight)
        bias = torch.zeros(4 * (MEMBERS + 1))
        bias[4 * START : 4 * (START + 1)] = 3.0
        self.leave.bias = nn.Parameter(bias)

    def forward(self, inputs: Tensor) -> tuple[Tensor, Tensor]:
        """Fuse: (N, INPUTS, H, W), H and W multiples of `BLOCK`, to the picture and the weights.

        Returns
        -------
        picture : Tensor, shape (N, 1, H, W)
            Signal.
        weights : Tensor, shape (N, MEMBERS, H, W)
            Sum 1.
        """
        members = inputs[:, :MEMBERS]  # (N, 9, H, W)
        # Disagreement is what matters: every member but the last enters as its difference from that.
        start = members[:, START:]  # (N, 1, H, W)
        x = torch.cat([4 * (members[:, :START] - start), inputs[:, START:]], dim=1)  # (N, INPUTS, H, W)
        x = functional.relu(self.enter(functional.pixel_unshuffle(x, 2)))  # (N, 32, H/2, W/2)
        for layer in self.at_half:
            x = functional.relu(layer(x))
        half = x
        quarter = functional.relu(self.at_quarter(functional.relu(self.to_quarter(half))))  # (N, 48, H/4, W/4)
        x = functional.relu(self.to_eighth(quarter))  # (N, 56, H/8, W/8)
        for layer in self.at_eighth:
            x = x + functional.relu(layer(x))
        x = quarter + functional.interpolate(self.up_quarter(x), scale_factor=2.0)  # (N, 48, H/4, W/4)
        x = functional.relu(self.back_quarter(x))
        x = half + functional.interpolate(self.up_half(x), scale_factor=2.0)  # (N, 32, H/2, W/2)
        x = functional.relu(self.back_half(x))
        x = functional.pixel_shuffle(self.leave(x), 2)  # (N, 10, H, W)
        weights = x[:, :MEMBERS].softmax(dim=1)  # (N, 9, H, W)
        bound = FITTED_RESIDUAL if self.training else RESIDUAL
        residual = bound * torch.tanh(x[:, MEMBERS:])  # (N, 1, H, W)
        return (weights * members).sum(dim=1, keepdim=True) + residual, weights


def macs_per_pixel(network: nn.Module | None = None) -> float:
    """Multiply-accumulates an output pixel, counted layer by layer."""
    network = network or FusionNetwork()
    scale = {"enter": 2, "at_half": 2, "back_half": 2, "leave": 2, "to_eighth": 8, "at_eighth": 8, "up_quarter": 8}
    return sum(
        layer.weight.numel() / scale.get(name.split(".")[0], 4) ** 2
        for name, layer in network.named_modules()
        if isinstance(layer, nn.Conv2d)
    )


def load_network(path: Path) -> FusionNetwork:
    """Load the fusion network's weights.

    Parameters
    ----------
    path : Path
        A safetensors file; its card, a JSON file of the same name, states its checksum.

    Returns
    -------
    FusionNetwork
        Ready to run.

    Raises
    ------
    ModelError
        If the file is missing, damaged, or not for this network.
    """
    import json

    from safetensors import SafetensorError
    from safetensors.torch import load

    # One thread always: how many there are must not decide the bytes.
    torch.set_num_threads(1)
    without = 'to go on without it, set network.use = "off"'
    try:
        data = path.read_bytes()
        card: dict[str, Any] = json.loads(path.with_suffix(".json").read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise ModelError(f"{path}: the fusion network's weights or card cannot be read ({error}); {without}") from error
    found, expected = hashlib.sha256(data).hexdigest(), card.get("sha256")
    if found != expected:
        raise ModelError(f"{path}: sha256 {found} found, {expected} expected by its card; reinstall it, or {without}")
    network = FusionNetwork()
    try:
        network.load_state_dict(load(data))
    except (SafetensorError, RuntimeError, KeyError) as error:
        raise ModelError(f"{path}: these weights are not for this network ({error}); {without}") from error
    return network.eval()


@torch.inference_mode()
def fuse(network: FusionNetwork, candidates: Candidates) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Make one picture.

    Parameters
    ----------
    network : FusionNetwork
    candidates : Candidates

    Returns
    -------
    picture : ndarray of float32, shape (H, W)
        Luma, linear light.
    spread : ndarray of float32, shape (H, W)
        How far the members of the mixture are apart: their variance under its weights, in signal squared.
    """
    inputs = torch.from_numpy(network_inputs(candidates))[None]  # (1, INPUTS, H, W)
    height, width = inputs.shape[-2:]
    padded = functional.pad(inputs, (0, -width % BLOCK, 0, -height % BLOCK), mode="replicate")
    picture, weights = network(padded)
    members = padded[:, :MEMBERS]
    mean = (weights * members).sum(dim=1, keepdim=True)
    spread = (weights * (members - mean) ** 2).sum(dim=1)
    light = decode("srgb", picture[0, 0, :height, :width].numpy())
    return light, spread[0, :height, :width].numpy()
