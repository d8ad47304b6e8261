"""Candidates for a picture between two keys: what each says the light is at one instant.

========  =================================================================================================
carried   a key's log light plus the events since (or less those until): right where events tell all, late
          by a part-filled threshold at slow or faint edges, wrong by every stray event
moved     a key warped by the motion between it and the *carried* picture of that very instant: the events
          inform the motion, so curved and accelerating paths are followed; sharp and free of event noise,
          wrong where something is hidden or light itself changes
straight  a key warped along a straight line by the frames' own flow: the best there is where the two keys
          are close and the events few
========  =================================================================================================

Each kind from both sides. Motion is worked out on luma; colour rides along with the warps.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from enhance.kernels.double_integral import log_sum
from enhance.kernels.event_integral import event_counts
from enhance.kernels.optical_flow import flow_between, warp
from enhance.light import LOG_FLOOR, Image, log_light, luma
from enhance.recording import Contrast, Events

#: Order of the candidates in every stack.
NAMES = (
    "carried from the left",
    "carried from the right",
    "moved from the left",
    "moved from the right",
    "straight from the left",
    "straight from the right",
)


@dataclass(frozen=True)
class Candidates:
    """What is known about one instant.

    Parameters
    ----------
    stack : ndarray of float32, shape (6, H, W)
        Luma in linear light, in the order of `NAMES`.
    weight : float
        Position in the span, 0 at the left key, 1 at the right one.
    counts : ndarray of float32, shape (2, H, W)
        Events between the left key and the instant, and between the instant and the right key.
    change : ndarray of float32, shape (2, H, W)
        Their sums in log light.
    mismatch : ndarray of float32, shape (H, W)
        By how much the events of the whole span miss the keys' log difference.
    flows : tuple of ndarray of float32, shape (H, W, 2)
        From the instant to the left and to the right key.
    """

    stack: NDArray[np.float32]
    weight: float
    counts: NDArray[np.float32]
    change: NDArray[np.float32]
    mismatch: NDArray[np.float32]
    flows: tuple[NDArray[np.float32], NDArray[np.float32]]


class Span:
    """The stretch between two keys, prepared once for all its instants.

    Parameters
    ----------
    left, right : ndarray of float32, shape (H, W) or (H, W, 3)
        The sharp keys, linear light.
    interval_us : tuple of int
        Their times.
    events : Events
        Those between the keys, and with a ramp those up to `ramp_us` before and twice that after.
    contrast : Contrast
    """

    def __init__(
        self, left: Image, right: Image, interval_us: tuple[int, int], events: Events, contrast: Contrast
    ) -> None:
        self.left, self.right = left, right
        self.interval_us = interval_us
        self.events, self.contrast = events, contrast
        self.luma = (luma(left), luma(right))
        self._log = tuple(log_light(side) for side in self.luma)
        self._total, self._count = self._sums(interval_us[1])
        self.mismatch = self._log[1] - self._log[0] - self._total
        self._straight = (flow_between(*self.luma), flow_between(*self.luma[::-1]))

    def weight(self, time_us: int) -> float:
        """Position of an instant in the span, 0 to 1."""
        start, end = self.interval_us
        return (time_us - start) / (end - start)

    def at(self, time_us: int) -> Candidates:
        """Make all candidates of one instant.

        Parameters
        ----------
        time_us : int
            Between the keys.

        Returns
        -------
        Candidates
        """
        weight = np.float32(self.weight(time_us))
        before, count = self._sums(time_us)
        carried = (
            np.exp(self._log[0] + before) - LOG_FLOOR,
            np.exp(self._log[1] - (self._total - before)) - LOG_FLOOR,
        )
        # What the carried pictures agree on is where the keys are sought. The two errors of a mis-set threshold have
        # opposite signs and nearly cancel in the blend.
        target = (1 - weight) * carried[0] + weight * carried[1]
        flows = (flow_between(target, self.luma[0]), flow_between(target, self.luma[1]))
        moved = [warp(side, flow, "cubic") for side, flow in zip(self.luma, flows, strict=True)]
        straight = [
            warp(self.luma[0], weight * self._straight[1], "cubic"),
            warp(self.luma[1], (1 - weight) * self._straight[0], "cubic"),
        ]
        return Candidates(
            stack=np.stack([*carried, *moved, *straight]),
            weight=float(weight),
            counts=np.stack([count, self._count - count]),
            change=np.stack([before, self._total - before]),
            mismatch=self.mismatch,
            flows=flows,
        )

    def _sums(self, time_us: int) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """Log change since the left key, and the number of events, shape (H, W) each."""
        shape = self.luma[0].shape
        start = self.interval_us[0]
        change = log_sum(self.events, start, time_us, self.contrast, shape)
        seen = self.events.between(start, time_us)
        count = event_counts(seen.x, seen.y, seen.polarity, shape).sum(axis=0)
        return change.astype(np.float32), count.astype(np.float32)
