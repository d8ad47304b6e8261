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
from numpy.typing import NDArray

from enhance.calibrate import evenly_lit
from enhance.clock import middle_us
from enhance.deblur import (
    WINDOW,
    Evidence,
    at_least,
    change_evidence,
    couple,
    latent_at_one_instant,
    log_noise,
    own_evidence,
    row_change,
)
from enhance.interpolate import (
    Candidates,
    Span,
    analytic_blend,
    in_colour,
    key_candidates,
    rows_at_one_instant,
)
from enhance.interpolate.trust import TrustModel, cause_maps
from enhance.kernels.event_integral import event_counts
from enhance.light import LOG_FLOOR, Image, encode, log_light, luma
from enhance.recording import By, Events, Frame, FrameSource, Kind, Picture
from enhance.rig import Rig, RiggedEvents
from enhance.rows import FrameEvents, events_in_row_time, frames_in_row_time, row_delays_us

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
    trust : TrustModel, optional
        Without it no error is expected of any picture.
    """

    def __init__(
        self,
        frames: FrameSource,
        indices: Sequence[int],
        events: RiggedEvents | None,
        rig: Rig,
        network: FusionNetwork | None = None,
        trust: TrustModel | None = None,
    ) -> None:
        row_time, height = float(rig.row_time_us.value or 0), frames.shape[0]
        self.frames = frames_in_row_time(evenly_lit(frames, events, rig), row_time)
        self.indices, self.events, self.rig = list(indices), events, rig
        # For what is compared with a frame's own exposure; between pictures of one instant the scene's own time holds.
        self._rowed = None if events is None else events_in_row_time(events, row_time, height)
        self.delays_us, self.rolling = row_delays_us(row_time, height), row_time != 0
        self.network, self.trust = network, trust
        self.times_us = [_time(self.frames, index) for index in indices]
        self._kept = Evidences(OrderedDict(), OrderedDict())
        self._carried_rows: OrderedDict[int, NDArray[np.float32]] = OrderedDict()
        self._integrals: OrderedDict[int, Picture] = OrderedDict()
        self._pictures: OrderedDict[int, Picture] = OrderedDict()

    def __len__(self) -> int:
        return len(self.indices)

    @property
    def seen(self) -> NDArray[np.bool_] | None:
        """Pixels the event sensor looks at, (H, W); None: all of them."""
        return None if self.events is None else self.events.seen

    def covered(self, key: int) -> bool:
        """Whether the events cover the key's exposure."""
        index = self.indices[key]
        start, end = int(self.frames.start_us[index]), int(self.frames.end_us[index])
        slack = (end - start) // SLACK
        return self._rowed is not None and self._rowed.covers(start + slack, end - slack)

    def span_covered(self, key: int) -> bool:
        """Whether the events cover the span from a key to the next."""
        return self.events is not None and self.events.covers(self.times_us[key], self.times_us[key + 1])

    def span_events(self, key: int) -> Events:
        """Events of the span from a key to the next, and as far beyond either end as ramps reach."""
        return self._near(self.times_us[key], self.times_us[key + 1], self.events)

    def exposed(self, key: int) -> np.ndarray:
        """Count the events of each pixel that part a key from its frame, float32, shape (H, W).

        Those within the exposure, and for a rolling shutter those from the row's own instant to the key's.
        """
        index = self.indices[key]
        shape = (self.frames.shape[0], self.frames.shape[1])
        if self._rowed is None:
            return np.zeros(shape, np.float32)
        seen = self._rowed.between(int(self.frames.start_us[index]), int(self.frames.end_us[index]))
        count = event_counts(seen.x, seen.y, seen.polarity, shape).sum(axis=0).astype(np.float32)
        return count + self._row_change(key)[1].astype(np.float32) if self.rolling else count

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
        candidates = self.candidates(key) if self.network or self.trust else None
        if candidates is None:
            return picture
        made = fused(self.network, candidates)
        error = self.expected_error("deblurred", made, candidates, (key - 1, key))
        return Picture(in_colour(picture.image, made.light), picture.time_us, Kind.DEBLURRED, made.by, error)

    def expected_error(
        self, kind: str, made: Fused, candidates: Candidates, steps: Sequence[int]
    ) -> NDArray[np.float32] | None:
        """Expect each pixel's squared error, (H, W); the steps between keys at the picture tell how far events miss."""
        if self.trust is None:
            return None
        maps = cause_maps(candidates, made.light, made.spread, self.miss(steps), self.frames.light, self.rig)
        return self.trust.kinds[f"{kind} by {made.by}"].error_map(maps)

    def candidates(self, key: int) -> Candidates | None:
        """Make what is known of a deblurred key by its neighbours; None where no neighbour can tell."""
        picture = self.integral(key)
        ends = self._ends(key)
        if picture.kind is not Kind.DEBLURRED or ends[0] == ends[1]:
            return None
        left, right = (luma(self.integral(end).image) for end in ends)
        interval = (self.times_us[ends[0]], self.times_us[ends[1]])
        span = Span(left, right, interval, self._near(*interval, self.events), self.rig.contrast)
        captured = luma(self.frames.frame(self.indices[key]).image)
        own = self._own(key).value
        if self.rolling:
            moved, _ = self._row_change(key)
            captured = np.exp(log_light(captured) + moved).astype(np.float32) - LOG_FLOOR
            own = own + moved
        alone = np.exp(own).astype(np.float32) - LOG_FLOOR
        return key_candidates(luma(picture.image), captured, alone, picture.time_us, span, self.exposed(key))

    def _ends(self, key: int) -> tuple[int, int]:
        """Give the keys beside a key that events lead to; the key itself where they do not."""
        before = key > 0 and self.span_covered(key - 1)
        after = key + 1 < len(self) and self.span_covered(key)
        return key - before, key + after

    def miss(self, steps: Sequence[int]) -> NDArray[np.float32]:
        """By how much the events miss steps from a key to the next, each key by its own double integral.

        Which is by how much the one, carried into the other's exposure and exposed again, misses that frame.

        Parameters
        ----------
        steps : sequence of int
            Keys that a step begins at; those that are none are passed over.

        Returns
        -------
        ndarray of float32, shape (H, W)
            Log light; root mean square over the steps.
        """
        own, change = self._own, self._change
        missed = [
            own(step + 1).value - own(step).value - change(step).value for step in steps if 0 <= step < len(self) - 1
        ]
        return np.sqrt(np.mean(np.square(missed), axis=0)).astype(np.float32)

    def integral(self, key: int) -> Picture:
        """Make the picture of a key by the double integral alone; as `picture` without a network."""
        return remember(self._integrals, key, lambda: self._integral(key), 5)

    def _integral(self, key: int) -> Picture:
        frame = self.frames.frame(self.indices[key])
        time_us = self.times_us[key]
        sharp = frame.exposure_us == 0 and not self.rolling
        if sharp or not self.covered(key):
            return Picture(frame.image, time_us, Kind.CAPTURED, By.FRAMES)
        # ratio of the latent to the blurred light, the same for every colour
        latent = at_least(self._log_latent(key), self._own(key).value, frame.clipped)
        change = latent.astype(np.float32) - log_light(luma(frame.image))
        ratio = np.exp(change if frame.image.ndim == 2 else change[..., None])
        image = (np.maximum(frame.image, 0) + LOG_FLOOR) * ratio - LOG_FLOOR
        if self.rolling:
            image = self._at_one_instant(key, image)
        return Picture(image, time_us, Kind.DEBLURRED, By.INTEGRAL)

    def _at_one_instant(self, key: int, image: Image) -> Image:
        """Bring a key whose rows stand at their own instants to its time."""
        ends = self._ends(key)
        interval = (self.times_us[ends[0]], self.times_us[ends[1]])
        neighbours = None if ends[0] == ends[1] else (self._carried(ends[0]), self._carried(ends[1]))
        events, contrast = self._near(*interval, self.events), self.rig.contrast
        return rows_at_one_instant(
            self._carried(key), image, self.times_us[key], neighbours, interval, events, contrast
        )

    def _carried(self, key: int) -> NDArray[np.float32]:
        """Luma of a rolling shutter's key at its time, by the events alone, shape (H, W)."""

        def make() -> NDArray[np.float32]:
            own, change, at = self._window(key)
            moved = self._row_change(key)
            times = np.diff(self.times_us[max(0, key - 1) : key + 2])
            steps = (int(times[0]), int(times[-1])) if len(times) else (1, 1)
            latent = latent_at_one_instant(own, change, at, moved, self.delays_us, steps, self.rig.contrast)
            return np.exp(latent).astype(np.float32) - LOG_FLOOR

        return remember(self._carried_rows, key, make, 5)

    def _window(self, key: int) -> tuple[list[Evidence], list[Evidence], int]:
        """Evidence of the keys near one and of the steps between them, and the place of the key among them."""
        first, last = max(0, key - WINDOW), min(len(self) - 1, key + WINDOW)
        own = [self._own(k) for k in range(first, last + 1)]
        return own, [self._change(k) for k in range(first, last)], key - first

    def _log_latent(self, key: int) -> np.ndarray:
        own, change, at = self._window(key)
        return couple(
            [e.value for e in own],
            [e.value for e in change],
            at,
            [e.weight for e in own],
            [e.weight for e in change],
        )

    def _own(self, key: int) -> Evidence:
        def make() -> Evidence:
            frame = self.frames.frame(self.indices[key])
            light = luma(frame.image)
            captured = self.rig.noise(light * np.float32(frame.scale)) / np.float32(frame.scale)
            noise = log_noise(captured, light, frame.clipped).astype(np.float64)
            interval = (frame.start_us, frame.end_us)
            if not self.covered(key):
                return _captured(frame, noise)
            events = self._near(*interval, self._rowed)
            log_image = log_light(light).astype(np.float64)
            return own_evidence(log_image, noise, events, interval, self.times_us[key], self.rig.contrast)

        return remember(self._kept.own, key, make, _KEPT)

    def _change(self, key: int) -> Evidence:
        def make() -> Evidence:
            shape = self.frames.shape[:2]
            interval = (self.times_us[key], self.times_us[key + 1])
            if self._rowed is None or not self._rowed.covers(*interval):
                return Evidence(np.zeros(shape), np.full(shape, _UNSEEN))
            events = self._near(*interval, self._rowed)
            told = change_evidence(events, interval, self.rig.contrast, (shape[0], shape[1]))
            return told if self.seen is None else Evidence(told.value, np.where(self.seen, told.weight, _UNSEEN))

        return remember(self._kept.change, key, make, _KEPT)

    def _row_change(self, key: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Log change from each row's own instant to a rolling shutter's key, and its events, shape (H, W) each."""
        time_us, delays = self.times_us[key], self.delays_us
        events = self._near(time_us + int(delays.min()), time_us + int(delays.max()), self.events)
        return row_change(events, delays, time_us, self.rig.contrast, (self.frames.shape[0], self.frames.shape[1]))

    def _near(self, start_us: int, end_us: int, events: FrameEvents | None) -> Events:
        if events is None:
            return Events.none()
        ramp = self.rig.contrast.ramp_us
        return events.between(start_us - ramp, end_us + 2 * ramp)


@dataclass(frozen=True)
class Fused:
    """A picture's luma, (H, W) linear light, what made it, and the variance of what it was made of, (H, W) signal."""

    light: NDArray[np.float32]
    by: By
    spread: NDArray[np.float32]


def fused(network: FusionNetwork | None, candidates: Candidates) -> Fused:
    """Make a picture's luma from its candidates, with the network or without."""
    if network is None:
        return Fused(analytic_blend(candidates), By.INTEGRAL, encode("srgb", candidates.stack).var(axis=0))
    # torch is loaded only where a network is used
    from enhance.interpolate.network import fuse

    light, spread = fuse(network, candidates)
    return Fused(light, By.NETWORK, spread)


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
