"""Pairs of neighbouring keys: what calibration looks at."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from enhance.calibrate.clipped import USABLE_LIGHT as USABLE_LIGHT
from enhance.calibrate.clipped import tells_light
from enhance.light import luma
from enhance.recording import Events, Frame, FrameSource

#: Keys looked at when the pairs with most change are chosen: decoding all of an hour would cost more than it tells.
LOOKED_AT = 48
#: Pairs kept. The estimates' own scatter over them is the uncertainty that is reported.
KEPT = 12
#: Keys further apart (over dropped frames) are no pair: events and search would take memory as the gap grows.
LONGEST_US = 2_000_000
#: Events of one pair at the most. Every pixel is evidence on its own, so some rows tell as much as all, sooner.
MOST_EVENTS = 60_000


@dataclass(frozen=True)
class Pair:
    """Two successive keys, luma of linear light.

    Parameters
    ----------
    first, second : Frame
        Grey.
    usable : ndarray of bool, shape (H, W)
        Pixels whose light is neither too dark nor clipped in both.
    change : ndarray of float64, shape (H, W)
        ln B2 - ln B1 less its median (a change of lamp or gain is no motion); 0 where not usable.
    """

    first: Frame
    second: Frame
    usable: NDArray[np.bool_]
    change: NDArray[np.float64]


def thinned(pair: Pair, events: Events) -> tuple[Pair, Events]:
    """Keep every n-th row of a pair and its events, so that at most about `MOST_EVENTS` are left.

    Parameters
    ----------
    pair : Pair
    events : Events

    Returns
    -------
    pair : Pair
        Of shape (ceil(H / n), W).
    events : Events
        Their rows counted anew.
    """
    step = 1 + len(events) // MOST_EVENTS
    if step == 1:
        return pair, events
    kept = events.keep(events.y % step == 0)
    first, second = (replace(frame, image=frame.image[::step]) for frame in (pair.first, pair.second))
    return Pair(first, second, pair.usable[::step], pair.change[::step]), replace(kept, y=kept.y // np.uint16(step))


def gather_pairs(frames: FrameSource, keys: Sequence[int]) -> list[Pair]:
    """Choose the pairs of successive keys in which most changes.

    Parameters
    ----------
    frames : FrameSource
    keys : sequence of int
        Indices of the frames that may be used; a held-out frame is not among them.

    Returns
    -------
    list of Pair
        In time order, at most `KEPT`.
    """
    near = [k for k in range(len(keys) - 1) if frames.end_us[keys[k + 1]] - frames.start_us[keys[k]] <= LONGEST_US]
    if not near:
        return []
    spread = np.asarray(near)[np.unique(np.linspace(0, len(near) - 1, min(len(near), LOOKED_AT)).round().astype(int))]
    strength: list[tuple[float, int]] = []
    for k in spread:
        pair = _pair(frames, keys[k], keys[k + 1])
        strength.append((float(np.abs(pair.change).mean()), int(k)))
    best = sorted(k for _, k in sorted(strength, reverse=True)[:KEPT])
    return [_pair(frames, keys[k], keys[k + 1]) for k in best]


def _pair(frames: FrameSource, first: int, second: int) -> Pair:
    one, two = _grey(frames.frame(first)), _grey(frames.frame(second))
    usable = tells_light(one) & tells_light(two)
    change = np.zeros(usable.shape)
    change[usable] = np.log(two.image[usable].astype(np.float64)) - np.log(one.image[usable])
    if usable.any():
        change[usable] -= np.median(change[usable])
    return Pair(one, two, usable, change)


def _grey(frame: Frame) -> Frame:
    return replace(frame, image=luma(frame.image))
