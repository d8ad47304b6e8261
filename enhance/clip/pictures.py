"""Pictures of one pass at any instant between its first and last key."""

from __future__ import annotations

from bisect import bisect_right
from collections import OrderedDict

import numpy as np
from numpy.typing import NDArray

from enhance.clip.keys import Keys, fused, remember
from enhance.clip.overlap import outside_by_frames
from enhance.interpolate import Span, with_colour
from enhance.interpolate.trust import frame_cause_maps
from enhance.kernels.optical_flow import flow_between, moved_sides
from enhance.light import luma
from enhance.recording import By, Kind, Picture

Flow = NDArray[np.float32]


class Pictures:
    """Makes pictures from keys; what belongs to a span is prepared once.

    Parameters
    ----------
    keys : Keys
        With their network; without one, pictures are blended analytically.
    """

    def __init__(self, keys: Keys) -> None:
        self.keys = keys
        self._spans: OrderedDict[int, Span] = OrderedDict()
        self._flows: OrderedDict[int, tuple[Flow, Flow]] = OrderedDict()

    def at(self, time_us: int) -> Picture:
        """Make the picture of one instant.

        Parameters
        ----------
        time_us : int
            Not before the first key, not after the last.

        Returns
        -------
        Picture
            A key's own where the instant is its time.
        """
        times = self.keys.times_us
        key = bisect_right(times, time_us) - 1
        if times[key] == time_us:
            return self.keys.picture(key)
        if not self.keys.span_covered(key):
            return self._by_frames(key, time_us)
        span = self.span(key)
        candidates = span.at(time_us)
        made = fused(self.keys.network, candidates)
        error = self.keys.expected_error("inserted", made, candidates, (key,))
        picture = Picture(with_colour(made.light, span, candidates), time_us, Kind.INSERTED, made.by, error)
        seen = self.keys.seen
        return picture if seen is None else outside_by_frames(picture, self._by_frames(key, time_us), seen)

    def span(self, key: int) -> Span:
        """Prepare the span from a key to the next, which the events must cover."""
        return remember(self._spans, key, lambda: self._span(key), 2)

    def _span(self, key: int) -> Span:
        interval = (self.keys.times_us[key], self.keys.times_us[key + 1])
        left, right = self.keys.picture(key).image, self.keys.picture(key + 1).image
        exposed = np.stack([self.keys.exposed(key), self.keys.exposed(key + 1)])
        return Span(left, right, interval, self.keys.span_events(key), self.keys.rig.contrast, exposed)

    def _by_frames(self, key: int, time_us: int) -> Picture:
        """Move the keys by their own flow: no event tells anything here."""
        left, right = self.keys.picture(key).image, self.keys.picture(key + 1).image
        there, back = remember(self._flows, key, lambda: (flow_between(left, right), flow_between(right, left)), 2)
        start, end = self.keys.times_us[key], self.keys.times_us[key + 1]
        w = np.float32((time_us - start) / (end - start))
        sides = moved_sides(left, right, there, back, w)
        image = (1 - w) * sides[0] + w * sides[1]
        error = None
        light, rig = self.keys.frames.light, self.keys.rig
        # Without a clock the frames' noise is not known either, and nothing can be expected.
        if self.keys.trust is not None and rig.frame_noise.value is not None:
            maps = frame_cause_maps(np.stack([luma(side) for side in sides]), there, luma(image), light, rig)
            error = self.keys.trust.kinds["inserted by frames"].error_map(maps)
        return Picture(image, time_us, Kind.INSERTED, By.FRAMES, error)
