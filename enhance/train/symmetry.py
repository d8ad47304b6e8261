"""Symmetries of the data: inputs have no direction in the picture, and a recording run backward is one as well."""

from __future__ import annotations

import numpy as np
import torch
from torch import Tensor

from enhance.interpolate.network import CANDIDATES, INPUTS, MEMBERS

#: Channels of `network_inputs` by what becomes of them when time runs backward.
_COUNTS, _EXPOSED, _MISMATCH, _TIME = MEMBERS, MEMBERS + 2, MEMBERS + 4, INPUTS - 2
#: Left and right change places in every pair; what belongs to neither side stays where it is.
_OWN = slice(4, 6)
_PAIRED = [*range(0, CANDIDATES - 1, 2), _COUNTS, _EXPOSED]


def _order() -> list[int]:
    order = list(range(INPUTS))
    for first in _PAIRED:
        order[first], order[first + 1] = first + 1, first
    return order


ORDER = _order()
#: By what the events miss the right key they miss the left one the other way.
SIGN = [-1.0 if channel == _MISMATCH else 1.0 for channel in range(INPUTS)]


def reversed_in_time(inputs: Tensor) -> Tensor:
    """Give the inputs of the same instant in the recording run backward.

    Parameters
    ----------
    inputs : Tensor, shape (..., INPUTS, H, W)

    Returns
    -------
    Tensor, same shape
    """
    back = inputs[..., ORDER, :, :] * torch.tensor(SIGN, dtype=inputs.dtype)[:, None, None]
    # A key's two pictures of its own have no side.
    key = inputs[..., -1:, :, :] > 0.5
    back[..., _OWN, :, :] = torch.where(key, inputs[..., _OWN, :, :], back[..., _OWN, :, :])
    back[..., _TIME, :, :] = 1 - back[..., _TIME, :, :]
    return back


def turned(inputs: Tensor, truth: Tensor, rng: np.random.Generator) -> tuple[Tensor, Tensor]:
    """Apply one of the 16 symmetries, drawn at random: mirrored, turned by right angles, run backward.

    Parameters
    ----------
    inputs : Tensor, shape (INPUTS, S, S)
    truth : Tensor, shape (1, S, S)
    rng : numpy.random.Generator

    Returns
    -------
    inputs, truth : Tensor, same shapes
    """
    quarter, mirror, backward = int(rng.integers(4)), rng.random() < 0.5, rng.random() < 0.5
    if backward:
        inputs = reversed_in_time(inputs)
    both = torch.cat([inputs, truth])
    both = torch.rot90(both, quarter, (1, 2))
    both = both.flip(2) if mirror else both
    return both[:-1], both[-1:]
