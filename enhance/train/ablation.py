"""What the network would be without one of its means: for the card, to tell what each of them brings."""

from __future__ import annotations

import torch
from torch import Tensor

from enhance.interpolate.network import INPUTS, MEMBERS, START

#: No candidate that was warped; no candidate that events made (neither carried nor sought with their help); a mixture
#: alone.
ABLATIONS = ("warps", "events", "residual")

_BY_EVENTS = START - 1
_MOVED, _STRAIGHT, _STEADIED = slice(2, 4), slice(4, 6), 6
_CUES = slice(MEMBERS + 5, MEMBERS + 7)


def ablated(inputs: Tensor, without: str) -> Tensor:
    """Keep something from the network: what it must not see is replaced by what is left.

    Parameters
    ----------
    inputs : Tensor, shape (N, INPUTS, H, W)
        Channels of `network_inputs`; not changed.
    without : str
        One of `ABLATIONS`, or empty.

    Returns
    -------
    Tensor, same shape
    """
    if without not in ("warps", "events"):
        return inputs
    known = inputs.clone()
    key = known[:, INPUTS - 1 :] > 0.5
    if without == "warps":
        left, start = known[:, _BY_EVENTS : _BY_EVENTS + 1], known[:, START:MEMBERS]
        known[:, _MOVED] = known[:, _STEADIED : _STEADIED + 1] = left
        # A key's own pictures stand where others have the straight ones, and are not warped.
        known[:, _STRAIGHT] = torch.where(key, known[:, _STRAIGHT], left)
        known[:, START:MEMBERS] = torch.where(key, start, left)
    else:
        time = known[:, INPUTS - 2 : INPUTS - 1]
        pair = known[:, _STRAIGHT]
        # Of a key the captured frame is all there is left.
        left = torch.where(key, pair[:, :1], (1 - time) * pair[:, :1] + time * pair[:, 1:])
        known[:, :MEMBERS] = left
        known[:, _STRAIGHT] = torch.where(key, left, pair)
    known[:, _CUES] = 0
    return known


def mixture(inputs: Tensor, weights: Tensor) -> Tensor:
    """Mix the members without a residual: (N, INPUTS, H, W) and (N, MEMBERS, H, W) to (N, 1, H, W)."""
    return (weights * inputs[:, :MEMBERS]).sum(dim=1, keepdim=True)
