"""Events as they would be under steady light, and frames brought to one brightness: a lamp's flicker taken out."""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from enhance.calibrate.flicker import Lamp, find_flicker, fit_lamp, look_windows
from enhance.kernels.flicker import long_differences, steady_steps
from enhance.recording import Events, EventSource
from enhance.rig import STEADY_PARTS, Quantity, Rig

#: Swing of a lamp, in thresholds, below which what scenes do by themselves (labels that pass, waves) looks alike.
LEAST_SWING = 0.4
#: Length of the pieces the events are worked on in, and how far before each the pixels' state is run in.
PIECE_US, RUN_IN_US = 250_000, 150_000
#: Time in which what is left of a threshold fades, and how long before an event its change began at the most.
FORGET_US, REACH_US = 60_000.0, 20_000.0
#: Pieces kept.
KEPT = 3
#: Counts that the lamp's full share, and the recording's usual ratio of thresholds, are worth at a pixel.
SHARE_PRIOR, RATIO_PRIOR = 30.0, 12.0
#: A pixel that follows the lamp less than this does not see it; no pixel follows it more than this.
LEAST_SHARE, MOST_SHARE = 0.25, 1.3


def flicker_of(source: EventSource) -> Quantity:
    """Find the frequency of a lamp whose flicker is worth taking out.

    Parameters
    ----------
    source : EventSource
        In the sensor's own world.

    Returns
    -------
    Quantity
        Hertz; None, with the reason, where no flicker shows, or one that hardly fires events of its own.
    """
    found = find_flicker(source)
    if found.value is None:
        return found
    swing = SteadyEvents(source, float(found.value)).lamp.swing
    if swing >= LEAST_SWING:
        return found
    reason = f"{found.value:.1f} Hz shows in the events, but swings by {swing:.2f} thresholds only: left alone"
    return Quantity(None, None, found.method, reason)


def in_steady_light(source: EventSource, rig: Rig) -> EventSource:
    """Take a lamp's flicker out of events, where the rig knows of one; else they stay as they are."""
    if rig.flicker_hz.value is None or isinstance(source, SteadyEvents):
        return source
    return SteadyEvents(source, float(rig.flicker_hz.value))


@dataclass(frozen=True)
class _Pixels:
    """How each pixel, counted row by row, sees the lamp: its share and its own two thresholds; shape (P,) each."""

    share: NDArray[np.float64]
    thresholds: tuple[NDArray[np.float64], NDArray[np.float64]]


class SteadyEvents:
    """An `EventSource` in which the events of a flickering lamp are taken out of those of another.

    Each event tells exactly how far a pixel's log light went since its last one. Less what the lamp did meanwhile, the
    steps add up to the scene's own, and are told anew as events once they reach a threshold.

    Parameters
    ----------
    source : EventSource
        In the sensor's own world.
    frequency_hz : float
        The lamp's.
    """

    def __init__(self, source: EventSource, frequency_hz: float) -> None:
        self._source = source
        self.size, self.count, self.notes = source.size, source.count, source.notes
        self.first_us, self.last_us = source.first_us, source.last_us
        self.cover_start_us, self.cover_end_us = source.cover_start_us, source.cover_end_us
        blocks = [source.between(*window) for window in look_windows(source)]
        blocks = [block for block in blocks if len(block)]
        self.lamp, phases = fit_lamp(blocks, frequency_hz, source.size)
        self._pixels = self._seen_by(blocks, phases)
        self._pieces: OrderedDict[int, Events] = OrderedDict()
        self._lamps: dict[int, Lamp] = {}

    def between(self, start_us: int, end_us: int) -> Events:
        """Events of ``[start_us, end_us)``."""
        first, last = start_us // PIECE_US, -(-end_us // PIECE_US)
        parts = [self._piece(k) for k in range(first, last) if self._met(k)]
        if not parts:
            return Events.none()
        columns = (np.concatenate([getattr(p, c) for p in parts]) for c in ("t_us", "x", "y", "polarity"))
        return Events(*columns).between(start_us, end_us)

    def count_between(self, start_us: int, end_us: int) -> int:
        """About how many events of the source lie in ``[start_us, end_us)``."""
        return self._source.count_between(start_us, end_us)

    def close(self) -> None:
        """Release the source."""
        self._source.close()

    def lamp_at(self, time_us: int) -> Lamp:
        """Give the lamp the phase it has around an instant: mains wander."""
        piece = min(max(time_us, self.first_us), self.last_us) // PIECE_US
        if piece not in self._lamps:
            start = piece * PIECE_US
            near = self._source.between(start - RUN_IN_US, start + PIECE_US + int(REACH_US))
            self._lamps[piece] = self._tracked(near)
        return self._lamps[piece]

    def _met(self, piece: int) -> bool:
        return self.first_us < (piece + 1) * PIECE_US and piece * PIECE_US <= self.last_us

    def _piece(self, piece: int) -> Events:
        if piece not in self._pieces:
            start = piece * PIECE_US
            near = self._source.between(start - RUN_IN_US, start + PIECE_US + int(REACH_US))
            self._lamps.setdefault(piece, self._tracked(near))
            self._pieces[piece] = self._steady(near, self._lamps[piece]).between(start, start + PIECE_US)
            while len(self._pieces) > KEPT:
                self._pieces.popitem(last=False)
        return self._pieces[piece]

    def _tracked(self, near: Events) -> Lamp:
        """Give the recording's lamp the phase that these events have."""
        one, _ = fit_lamp([near], self.lamp.frequency_hz, self.size) if len(near) else (self.lamp, None)
        here, usual = (one.cosine[0] - 1j * one.sine[0]), (self.lamp.cosine[0] - 1j * self.lamp.sine[0])
        if abs(here) < 0.3 * abs(usual):
            return self.lamp
        # both counted from the lamp's own origin
        turn = 2 * np.pi * ((self.lamp.frequency_hz * 1e-6 * (one.origin_us - self.lamp.origin_us)) % 1.0)
        return self.lamp.turned(float(np.angle(here / usual) - turn))

    def _steady(self, near: Events, lamp: Lamp) -> Events:
        if not len(near):
            return near
        first, width = int(near.t_us[0]), self.size[0]
        t_us, pixel, polarity = steady_steps(
            near.t_us - first,
            near.y.astype(np.int64) * width + near.x,
            near.polarity,
            lamp.level(near.t_us),
            self._pixels.share,
            self._pixels.thresholds,
            (1.0 / STEADY_PARTS, lamp.ratio / STEADY_PARTS),
            FORGET_US,
            REACH_US,
        )
        y, x = np.divmod(pixel, width)
        return Events(t_us + first, x.astype(np.uint16), y.astype(np.uint16), polarity)

    def _seen_by(self, blocks: Sequence[Events], phases: NDArray[np.float64]) -> _Pixels:
        """How each pixel sees the lamp, from the windows looked at."""
        import cv2

        width, height = self.size
        pixels, lamp = width * height, self.lamp
        both, own, counts = np.zeros(pixels), np.zeros(pixels), np.zeros((2, pixels))
        least = round(0.4e6 / lamp.frequency_hz)
        for block, phase in zip(blocks, phases, strict=True):
            first = int(block.t_us[0])
            pixel = block.y.astype(np.int64) * width + block.x
            pixel, ends, count = long_differences(block.t_us - first, pixel, block.polarity, pixels, least)
            # each block's fit counts from its own first event
            here = Lamp(lamp.frequency_hz, first, lamp.cosine, lamp.sine, lamp.ratio).turned(float(phase))
            level = here.level(ends[:, 1] + first) - here.level(ends[:, 0] + first)
            change = count[:, 0] - lamp.ratio * count[:, 1]
            both += np.bincount(pixel, weights=level * change, minlength=pixels)
            own += np.bincount(pixel, weights=level * level, minlength=pixels)
            for k in range(2):
                counts[k] += np.bincount(pixel, weights=count[:, k], minlength=pixels)
        # neighbours are mostly lit alike, and one pixel's events are few
        near_both, near_own = (cv2.blur(a.reshape(height, width), (3, 3)).ravel() for a in (both, own))
        prior = SHARE_PRIOR * lamp.swing**2 / 8
        share = np.clip((near_both + prior) / (near_own + prior), 0.0, MOST_SHARE)
        share[share < LEAST_SHARE] = 0.0
        # N+ c+ = N- c- at each pixel, as far as its events go beyond what is usual
        ratio = (counts[0] + RATIO_PRIOR * lamp.ratio) / (counts[1] + RATIO_PRIOR)
        own_ratio = np.sqrt(np.clip(ratio / lamp.ratio, 0.7, 1.4))
        return _Pixels(share, (1.0 / own_ratio, lamp.ratio * own_ratio))
