"""Sharpness of a deblurred edge, measured as a lens would be: the slanted edge of ISO 12233."""

from dataclasses import dataclass

import numpy as np
import pytest

from enhance.deblur import deblur
from enhance.measure import edge_sfr, mtf50
from enhance.measure.edge import edge_profile
from enhance.recording import Contrast
from enhance.simulate import Camera, EventSensor, simulate

LOW, HIGH = 0.2, 0.8
#: Pixels the edge moves while the shutter is open.
BLUR_PX = 10.0


@dataclass(frozen=True)
class SlantedEdge:
    """A step at 5 degrees from upright that pans to the right, averaged over each pixel's width."""

    speed_px_s: float
    size: tuple = (96, 64)
    name: str = "slanted edge"

    def render(self, t_s):
        y, x = np.indices(self.size[::-1])
        at = 30 + self.speed_px_s * t_s + np.tan(np.radians(5.0)) * (y - 32)
        return (LOW + (HIGH - LOW) * np.clip(x - at + 0.5, 0.0, 1.0)).astype(np.float32)


@pytest.fixture(scope="module")
def recorded():
    camera = Camera(rate_hz=50.0, exposure_us=10_000, start_us=10_000)
    sensor = EventSensor(0.2, 0.2, mismatch=0.03, noise_hz=1.0)
    return simulate(SlantedEdge(BLUR_PX / 10_000e-6), camera, sensor, 0.03, 5)


def test_the_blurred_edge_has_the_response_of_its_motion(recorded):
    # |sin(pi d f) / (pi d f)|, d = 10: first zero at 1 / d = 0.1, half at 0.0603 (textbook)
    frequency, response = edge_sfr(recorded.recording.frames.frame(0).image)
    low = frequency < 0.15
    assert frequency[low][response[low].argmin()] == pytest.approx(0.1, abs=0.004)
    assert response[low].min() < 0.02
    assert mtf50(frequency, response) == pytest.approx(0.0603, abs=0.002)


# An edge of ln 4 gives 7 events while it crosses a pixel in 1 ms: a ramp of two of their intervals, or a staircase
@pytest.mark.parametrize("ramp_us", [0, 280])
def test_the_deblurred_edge_is_nearly_as_sharp_as_a_still_one_and_hardly_overshoots(recorded, ramp_us):
    frame = recorded.recording.frames.frame(0)
    events, time_us = recorded.recording.events.events, frame.time_us
    sharp = deblur(frame.image, events, frame.start_us, frame.end_us, time_us, Contrast(0.2, 0.2, ramp_us))
    reached, ideal = (mtf50(*edge_sfr(picture)) for picture in (sharp, recorded.truth(time_us)))
    assert reached >= 0.8 * ideal
    level = (edge_profile(sharp).value - LOW) / (HIGH - LOW)
    assert level.max() < 1.08
    assert level.min() > -0.08


def test_the_deblurred_edge_stands_where_it_stood_at_that_instant(recorded):
    frame = recorded.recording.frames.frame(0)
    for time_us in (11_000, 15_000, 19_000):
        sharp = deblur(
            frame.image, recorded.recording.events.events, frame.start_us, frame.end_us, time_us, Contrast(0.2, 0.2)
        )
        # the sum over a row tells where its step stands: one pixel a millisecond
        off = (sharp - recorded.truth(time_us)).sum(axis=1).mean() / (HIGH - LOW)
        assert abs(off) < 0.35
