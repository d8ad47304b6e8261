"""The keys of one pass: the frames that are used, each turned into one sharp picture when it is asked for.

First by the multi-frame double integral; then, with a network, by what its neighbours say of it as well. Neighbours are
those of the first step: no key waits for another's second one.
"""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, TypeVar

import numpy as np

from enhance.clock import middle_us
from enhance.deblur import WINDOW, Evidence, change_evidence, couple, own_evidence
from enhance.interpolate import Candidates, Span, analytic_blend, in_colour, key_candidates
from enhance.kernels.event_integral import event_counts
from enhance.light import LOG_FLOOR, encode, log_light, luma
from enhance.recording import By, Events, Frame, FrameSource, Kind, Picture
from enhance.rig import Rig, RiggedEvents

if TYPE_CHECKING:
    from enhance.interpolate.network import FusionNetwork

T = TypeVar("T")
#: A fiftieth of an exposure without events, at either end, is still within what a measured clock leaves open.
SLACK = 50
#: Evidence kept: a window either side of a span, and a little for the steps between.
_KEPT = 2 * WINDOW + 4
#: Weight of a change the events did not see: none, but for the arithmetic.
_UNSEEN = 1e-12


@dataclass(frozen=True)
class Evidences:
    """What each key and each step between keys is known by, made once and kept while the window passes."""

    own: OrderedDict[int, Evidence]
    change: OrderedDict[int, Evidence]


class Keys:
    """The keys of one pass over a recording.

    Parameters
    ----------
    frames : FrameSource
    indices : sequence of int
        Which frames are keys, rising.
    events : RiggedEvents or None
        In the frames' world; None where the clock is not known: then every key stays as captured.
    rig : Rig
    network : FusionNetwork, optional
        Refines the keys; without it they stay as the double integral has them.
    """

    def __init__(
        self,
        frames: FrameSource,
        indices: Sequence[int],
        events: RiggedEvents | None,
        rig: Rig,
        network: FusionNetwork | None = None,
    ) -> None:
        self.frames, self.indices, self.events, self.rig = frames, list(indices), events, rig
        self.network = network
        self.times_us = [_time(frames, index) for index in indices]
        self._kept = Evidences(OrderedDict(), OrderedDict())
        self._integrals: OrderedDict[int, Picture] = OrderedDict()
        self._pictures: OrderedDict[int, Picture] = OrderedDict()

    def __len__(self) -> int:
        return len(self.indices)

    def covered(self, key: int) -> bool:
        """Whether the events cover the key's exposure."""
        index = self.indices[key]
        start, end = int(self.frames.start_us[index]), int(self.frames.end_us[index])
        slack = (end - start) // SLACK
        return self.events is not None and self.events.covers(start + slack, end - slack)

    def span_covered(self, key: int) -> bool:
        """Whether the events cover the span from a key to the next."""
        return self.events is not None and self.events.covers(self.times_us[key], self.times_us[key + 1])

    def span_events(self, key: int) -> Events:
        """Events of the span from a key to the next, and as far beyond either end as ramps reach."""
        return self._near(self.times_us[key], self.times_us[key + 1])

    def exposed(self, key: int) -> np.ndarray:
        """Count the events of each pixel within a key's exposure, float32, shape (H, W)."""
        index = self.indices[key]
        shape = (self.frames.shape[0], self.frames.shape[1])
        if self.events is None:
            return np.zeros(shape, np.float32)
        seen = self.events.between(int(self.frames.start_us[index]), int(self.frames.end_us[index]))
        return event_counts(seen.x, seen.y, seen.polarity, shape).sum(axis=0).astype(np.float32)

    def picture(self, key: int) -> Picture:
        """Make the sharp picture of a key at its own time; one that events do not cover stays as captured.

        Parameters
        ----------
        key : int
            Position among the keys.

        Returns
        -------
        Picture
        """
        return remember(self._pictures, key, lambda: self._picture(key), 4)

    def _picture(self, key: int) -> Picture:
        picture = self.integral(key)
        candidates = self.candidates(key) if self.network else None
        if candidates is None:
            return picture
        light, by, _ = fused(self.network, candidates)
        return Picture(in_colour(picture.image, light), picture.time_us, Kind.DEBLURRED, by)

    def candidates(self, key: int) -> Candidates | None:
        """Make what is known of a deblurred key by its neighbours; None where no neighbour can tell."""
        picture = self.integral(key)
        before = key > 0 and self.span_covered(key - 1)
        after = key + 1 < len(self) and self.span_covered(key)
        if picture.kind is not Kind.DEBLURRED or not (before or after):
            return None
        ends = (key - before, key + after)
        left, right = (luma(self.integral(end).image) for end in ends)
        interval = (self.times_us[ends[0]], self.times_us[ends[1]])
        span = Span(left, right, interval, self._near(*interval), self.rig.contrast)
        captured = luma(self.frames.frame(self.indices[key]).image)
        alone = np.exp(self._own(key).value).astype(np.float32) - LOG_FLOOR
        return key_candidates(luma(picture.image), captured, alone, picture.time_us, span, self.exposed(key))

    def miss(self, key: int) -> np.ndarray:
        """By how much the events miss the step from a key to the next, each by its own double integral.

        Which is by how much the one, carried into the other's exposure and exposed again, misses that frame.

        Returns
        -------
        ndarray of float32, shape (H, W)
            Log light.
        """
        step = self._change(key).value
        return np.asarray(self._own(key + 1).value - self._own(key).value - step, dtype=np.float32)

    def integral(self, key: int) -> Picture:
        """Make the picture of a key by the double integral alone; as `picture` without a network."""
        return remember(self._integrals, key, lambda: self._integral(key), 5)

    def _integral(self, key: int) -> Picture:
        frame = self.frames.frame(self.indices[key])
        time_us = self.times_us[key]
        if frame.exposure_us == 0 or not self.covered(key):
            return Picture(frame.image, time_us, Kind.CAPTURED, By.FRAMES)
        # ratio of the latent to the blurred light, the same for every colour
        change = self._log_latent(key).astype(np.float32) - log_light(luma(frame.image))
        ratio = np.exp(change if frame.image.ndim == 2 else change[..., None])
        image = (np.maximum(frame.image, 0) + LOG_FLOOR) * ratio - LOG_FLOOR
        return Picture(image, time_us, Kind.DEBLURRED, By.INTEGRAL)

    def _log_latent(self, key: int) -> np.ndarray:
        first, last = max(0, key - WINDOW), min(len(self) - 1, key + WINDOW)
        own = [self._own(k) for k in range(first, last + 1)]
        change = [self._change(k) for k in range(first, last)]
        return couple(
            [e.value for e in own],
            [e.value for e in change],
            key - first,
            [e.weight for e in own],
            [e.weight for e in change],
        )

    def _own(self, key: int) -> Evidence:
        def make() -> Evidence:
            frame = self.frames.frame(self.indices[key])
            light = luma(frame.image)
            noise = self.rig.noise(light) / (np.maximum(light, 0) + LOG_FLOOR)
            interval = (frame.start_us, frame.end_us)
            if not self.covered(key):
                return _captured(frame, noise)
            events = self._near(*interval)
            log_image = log_light(light).astype(np.float64)
            return own_evidence(log_image, noise, events, interval, self.times_us[key], self.rig.contrast)

        return remember(self._kept.own, key, make, _KEPT)

    def _change(self, key: int) -> Evidence:
        def make() -> Evidence:
            shape = self.frames.shape[:2]
            if not self.span_covered(key):
                return Evidence(np.zeros(shape), np.full(shape, _UNSEEN))
            interval = (self.times_us[key], self.times_us[key + 1])
            return change_evidence(self.span_events(key), interval, self.rig.contrast, (shape[0], shape[1]))

        return remember(self._kept.change, key, make, _KEPT)

    def _near(self, start_us: int, end_us: int) -> Events:
        if self.events is None:
            return Events.none()
        ramp = self.rig.contrast.ramp_us
        return self.events.between(start_us - ramp, end_us + 2 * ramp)


def fused(network: FusionNetwork | None, candidates: Candidates) -> tuple[np.ndarray, By, np.ndarray]:
    """Make a picture's luma from its candidates: the light, what made it, and the spread of what it was made of."""
    if network is None:
        light = analytic_blend(candidates)
        return light, By.INTEGRAL, encode("srgb", candidates.stack).var(axis=0)
    # torch is loaded only where a network is used
    from enhance.interpolate.network import fuse

    light, spread = fuse(network, candidates)
    return light, By.NETWORK, spread


def _captured(frame: Frame, noise: np.ndarray) -> Evidence:
    """Evidence of a key that no events tell about: its blur is unknown, so it says little."""
    weight = _UNSEEN if frame.exposure_us else 1.0 / noise**2
    return Evidence(log_light(luma(frame.image)).astype(np.float64), np.broadcast_to(weight, frame.image.shape[:2]))


def _time(frames: FrameSource, index: int) -> int:
    return middle_us(int(frames.start_us[index]), int(frames.end_us[index]))


def remember(store: OrderedDict[int, T], key: int, make: Callable[[], T], most: int) -> T:
    """Look a value up or make it; the oldest go when there are more than `most`."""
    if key not in store:
        store[key] = make()
        while len(store) > most:
            store.popitem(last=False)
    store.move_to_end(key)
    return store[key]
