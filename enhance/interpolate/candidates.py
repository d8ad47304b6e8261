"""Candidates for a picture: what each says the light is at one instant between two keys.

========  =================================================================================================
carried   a key's log light plus the events since (or less those until): right where events tell all, late
          by a part-filled threshold at slow or faint edges, wrong by every stray event
moved     a key warped by the motion between it and a first blend of that very instant: the events inform
          the motion, so curved and accelerating paths are followed; sharp and free of event noise, wrong
          where something is hidden or light itself changes
straight  a key warped along a straight line by the frames' own flow: the best there is where the two keys
          are close and the events few
steadied  the carried pictures of nearby instants, brought to this one along the motion and averaged: what
          is noise of a pixel and its thresholds averages out, what moves stays; wrong where motions overlap
========  =================================================================================================

The first three from both sides. Motion is worked out on luma; colour rides along with the warps.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from enhance.interpolate.steadied import Flows, events_seen, light_change, steadied
from enhance.interpolate.weighing import blend_warps, carried_by_events
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
    "steadied",
)


@dataclass(frozen=True)
class Candidates:
    """What is known about one instant.

    Parameters
    ----------
    stack : ndarray of float32, shape (7, H, W)
        Luma in linear light, in the order of `NAMES`; for a key in that of `enhance.interpolate.key`.
    carried : ndarray of float32, shape (H, W)
        The carried pair weighed by events.
    weight : float
        Position in the span, 0 at the left key, 1 at the right one.
    counts : ndarray of float32, shape (2, H, W)
        Events between the left key and the instant, and between the instant and the right key.
    exposed : ndarray of float32, shape (2, H, W)
        Events within the two keys' exposures: how blurred each was, and so how far to trust it.
    mismatch : ndarray of float32, shape (H, W)
        By how much the events of the whole span miss the keys' log difference.
    flows : tuple of ndarray of float32, shape (H, W, 2)
        From the instant to the left and to the right key.
    key : ndarray of float32, shape (H, W), or None
        The key itself by its own double integral, where it is a key that is to be refined.
    """

    stack: NDArray[np.float32]
    carried: NDArray[np.float32]
    weight: float
    counts: NDArray[np.float32]
    exposed: NDArray[np.float32]
    mismatch: NDArray[np.float32]
    flows: Flows
    key: NDArray[np.float32] | None = None


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
    exposed : ndarray of float32, shape (2, H, W), optional
        Events within the keys' exposures; none if left out.
    """

    def __init__(
        self,
        left: Image,
        right: Image,
        interval_us: tuple[int, int],
        events: Events,
        contrast: Contrast,
        exposed: NDArray[np.float32] | None = None,
    ) -> None:
        self.left, self.right = left, right
        self.interval_us = interval_us
        self.events, self.contrast = events, contrast
        self.luma = (luma(left), luma(right))
        self.exposed = np.zeros((2, *self.luma[0].shape), np.float32) if exposed is None else exposed
        self._log = tuple(log_light(side) for side in self.luma)
        self._total, self._count = self._sums(interval_us[1])
        self.mismatch = self._log[1] - self._log[0] - self._total
        self._straight: Flows | None = None

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
        pair, counts = self.carried(time_us)
        weight = self.weight(time_us)
        carried = carried_by_events(pair, counts, weight)
        straight = self._moved_straight(np.float32(weight))
        # What the carried pictures agree on is where the keys are sought, coarsely; what they and the keys' own light
        # agree on is free of most event noise, and so good for the last pixel.
        coarse = self.flows_from(carried)
        first = blend_warps(np.concatenate([self._warped(coarse), straight]), carried, pair)
        flows = self.flows_from(first, "fine")
        steady = steadied(carried, flows, time_us, self.interval_us, self.events, self.contrast)
        return Candidates(
            stack=np.concatenate([pair, self._warped(flows), straight, steady[None]]),
            carried=carried,
            weight=weight,
            counts=counts,
            exposed=self.exposed,
            mismatch=self.mismatch,
            flows=flows,
        )

    def carried(self, time_us: int) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """Carry both keys' luma to an instant, and count the events on either side of it: (2, H, W) each."""
        before, count = self._sums(time_us)
        pair = np.stack(
            [
                np.exp(self._log[0] + before) - LOG_FLOOR,
                np.exp(self._log[1] - (self._total - before)) - LOG_FLOOR,
            ]
        )
        return pair, np.stack([count, self._count - count])

    def flows_from(self, picture: NDArray[np.float32], preset: str = "medium") -> Flows:
        """Seek both keys from a picture of an instant."""
        return flow_between(picture, self.luma[0], preset), flow_between(picture, self.luma[1], preset)

    def _warped(self, flows: Flows) -> NDArray[np.float32]:
        return np.stack([warp(side, flow, "cubic") for side, flow in zip(self.luma, flows, strict=True)])

    def _moved_straight(self, weight: np.float32) -> NDArray[np.float32]:
        if self._straight is None:
            self._straight = flow_between(*self.luma), flow_between(*self.luma[::-1])
        forward, backward = self._straight
        return self._warped((weight * backward, (1 - weight) * forward))

    def _sums(self, time_us: int) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """Log change since the left key, and the number of events, shape (H, W) each."""
        shape = self.luma[0].shape
        start = self.interval_us[0]
        change = light_change(self.events, start, time_us, self.contrast, shape)
        return change, events_seen(self.events, start, time_us, shape)
