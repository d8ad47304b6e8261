"""Keys of a rolling shutter at one instant.

In row time (`enhance.rows`) a frame is one of a global shutter, and the multi-frame double integral finds each row's
latent at the row's own instant, the middle of its exposure. The picture of one instant needs every row at the frame's
time: for each row, one more node in the chain of latents, between the key and the neighbour on whose side the instant
lies. The events from the row's own instant to the frame's tie it to the key, the rest of the step to the neighbour.

References
----------
Pan, Hartley, Scheerlinck, Liu, Yu, Dai, "High Frame Rate Video Reconstruction Based on an Event Camera",
IEEE TPAMI 44(5), 2022: the chain; the node for a row is worked out here.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from enhance.deblur.evidence import MISMATCH, Evidence
from enhance.deblur.multi_frame import couple
from enhance.kernels.event_integral import event_counts, part_filled
from enhance.recording import Contrast, Events
from enhance.rows import in_row_time

Array = NDArray[np.float64]

#: A row a microsecond away from the frame's time needs no node of its own, but no weight may be infinite.
_SHORTEST = 1e-6


def row_change(
    events: Events, delays_us: NDArray[np.int64], time_us: int, contrast: Contrast, shape: tuple[int, int]
) -> tuple[Array, Array]:
    """Log change from each row's own instant to the frame's.

    Parameters
    ----------
    events : Events
        Those from the earliest to the latest row's instant, and with a ramp those up to `ramp_us` before and twice that
        after.
    delays_us : ndarray of int64, shape (H,)
        Each row's own instant is ``time + delay``.
    time_us : int
        The frame's time.
    contrast : Contrast
    shape : tuple of int
        H, W.

    Returns
    -------
    change : ndarray of float64, shape (H, W)
        ``ln L(time) - ln L(time + delay)``.
    count : ndarray of float64, shape (H, W)
        Events between the two.
    """
    rowed = in_row_time(events, delays_us)
    change, count = np.zeros(shape), np.zeros(shape)
    before_row = events.t_us - delays_us[events.y] < time_us
    before = events.t_us < time_us
    for chosen, sign in ((before & ~before_row, 1.0), (before_row & ~before, -1.0)):
        seen = events.keep(chosen)
        positive, negative = event_counts(seen.x, seen.y, seen.polarity, shape)
        change += sign * (contrast.positive * positive - contrast.negative * negative)
        count += positive + negative
    if contrast.ramp_us:
        for seen, sign in ((events, 1.0), (rowed, -1.0)):
            change += sign * _filled(seen, time_us, contrast, shape)
    return change, count


def latent_at_one_instant(
    own: Sequence[Evidence],
    change: Sequence[Evidence],
    at: int,
    moved: tuple[Array, Array],
    delays_us: NDArray[np.int64],
    steps_us: tuple[int, int],
    contrast: Contrast,
) -> Array:
    """Solve for one key's log latent at the frame's time, every row.

    Parameters
    ----------
    own, change : sequence of Evidence
        Of a window of keys and of the steps between them, in row time.
    at : int
        The key asked for.
    moved : tuple of ndarray of float64, shape (H, W)
        As `row_change` gives it.
    delays_us : ndarray of int64, shape (H,)
    steps_us : tuple of int
        Time from the key before, and to the key after; that of the other side where there is none.
    contrast : Contrast

    Returns
    -------
    ndarray of float64, shape (H, W)
    """
    latent = np.empty(own[at].value.shape)
    for later, step_us in ((True, steps_us[0]), (False, steps_us[1])):
        rows = delays_us > 0 if later else delays_us <= 0
        if rows.any():
            share = np.clip(np.abs(delays_us[rows]) / step_us, _SHORTEST, 1 - _SHORTEST)[:, None]
            near = _Node(moved[0][rows], moved[1][rows], share, contrast)
            latent[rows] = near.solve([_rows(e, rows) for e in own], [_rows(e, rows) for e in change], at, before=later)
    return latent


class _Node:
    """The node of some rows at the frame's time, beside their key."""

    def __init__(self, change: Array, count: Array, share: Array, contrast: Contrast) -> None:
        self.change, self.count, self.share, self.contrast = change, count, share, contrast

    def solve(self, own: list[Evidence], change: list[Evidence], at: int, before: bool) -> Array:
        key_to_node = Evidence(self.change, self._weight(self.count, self.share))
        place = at if before else at + 1
        nothing = Evidence(np.zeros_like(self.change), np.zeros_like(self.change))
        own = [*own[:place], nothing, *own[place:]]
        # towards later times: from the neighbour before to the node to the key, or from the key to the node and on
        near = Evidence(-self.change, key_to_node.weight) if before else key_to_node
        if before:
            parts = [self._rest(change[at - 1], near), near] if at else [near]
            change = [*change[: max(at - 1, 0)], *parts, *change[at:]]
        else:
            parts = [near, self._rest(change[at], near)] if at < len(change) else [near]
            change = [*change[:at], *parts, *change[at + 1 :]]
        return couple(
            [e.value for e in own],
            [e.value for e in change],
            place,
            [e.weight for e in own],
            [e.weight for e in change],
        )

    def _rest(self, whole: Evidence, near: Evidence) -> Evidence:
        """Give what remains of a step between keys beyond the node."""
        c = self.contrast.mean
        # the variance of a step is c^2 / 2 + (MISMATCH c N)^2: its count of events, out of its weight
        counted = np.sqrt(np.maximum(1 / whole.weight - c**2 / 2, 0)) / (MISMATCH * c)
        return Evidence(whole.value - near.value, self._weight(np.maximum(counted - self.count, 0), 1 - self.share))

    def _weight(self, count: Array, share: Array) -> Array:
        """Weight of a part of a step: the part-filled thresholds count by its share, its events in full."""
        c = self.contrast.mean
        return 1.0 / (share * c**2 / 2 + (MISMATCH * c * count) ** 2)


def _rows(evidence: Evidence, rows: NDArray[np.bool_]) -> Evidence:
    return Evidence(evidence.value[rows], evidence.weight[rows])


def _filled(events: Events, time_us: int, contrast: Contrast, shape: tuple[int, int]) -> Array:
    near = events.between(time_us - contrast.ramp_us, time_us + 2 * contrast.ramp_us)
    return part_filled(near.t_us, near.x, near.y, near.polarity, time_us, contrast.thresholds, shape, contrast.ramp_us)
