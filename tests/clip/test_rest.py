"""Where nothing moves an inserted picture changes nothing: it is the keys blended by time, to within frame noise."""

import cv2
import numpy as np
import pytest

from enhance.kernels.event_integral import event_counts
from enhance.light import Image
from enhance.settings import RigSettings

#: Pixels at rest: no event of the span this near, pixels.
AROUND = 9
#: Of the recording on which the fixture's scene, parts that cross a background at rest, leaves enough of it alone.
SPANS = (1, 3, 5)


def at_rest(ways, k: int) -> np.ndarray:
    """Pixels without any event around them in the span from key `k`, bool, (H, W)."""
    seen = ways.fused.keys.events.between(ways.times_us[k], ways.times_us[k + 1])
    fired = event_counts(seen.x, seen.y, seen.polarity, ways.frames.shape[:2]).sum(axis=0) > 0
    return cv2.dilate(fired.astype(np.uint8), np.ones((AROUND, AROUND), np.uint8)) == 0


def rms(values: Image) -> float:
    return float(np.sqrt(np.mean(values.astype(np.float64) ** 2)))


@pytest.mark.parametrize("use", ["fusion", "off"])
def test_pixels_at_rest_are_the_blend_of_the_keys(simulated, ways, request: pytest.FixtureRequest, use: str) -> None:
    network = request.getfixturevalue("network") if use == "fusion" else None
    made = ways(simulated, network, RigSettings(contrast=(0.2, 0.23), offset_us=-3_000, drift_ppm=0.0))
    pictures = made.fused
    light = made.frames.light
    for k in SPANS:
        still = at_rest(made, k)
        assert still.mean() > 0.1
        left, right = (pictures.keys.picture(key).image for key in (k, k + 1))
        for time_us in made.instants(k, 4):
            w = (time_us - made.times_us[k]) / (made.times_us[k + 1] - made.times_us[k])
            blend = (1 - w) * left + w * right
            difference = (light.to_codes(pictures.at(time_us).image) - light.to_codes(blend)) / light.full_scale
            # the fixture's frames are linear: light is signal
            assert rms(difference[still]) < rms(made.rig.noise(blend)[still])
