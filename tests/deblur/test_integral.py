import numpy as np
import pytest

from enhance.deblur.integral import deblur
from enhance.kernels.double_integral import LARGEST_CHANGE, log_blur_ratio, log_sum
from enhance.recording import Contrast, Events


def one_pixel(t, polarity):
    n = len(t)
    return Events(
        np.asarray(t, np.int64), np.zeros(n, np.uint16), np.zeros(n, np.uint16), np.asarray(polarity, np.int8)
    )


def test_one_event_pixel_equals_the_worked_case():
    # L(0) = B T / (a + (T - a) e^c): Pan et al., CVPR 2019, worked by hand
    T, a, c, B = 10_000, 2_500, 0.22, np.float32(0.4)
    sharp = deblur(np.full((1, 1), B), one_pixel([a], [1]), 0, T, 0, Contrast(c, 0.3))
    assert sharp.dtype == np.float32
    assert abs(sharp[0, 0] / (B * T / (a + (T - a) * np.exp(c))) - 1) < 1e-6


def test_exact_light_staircase_is_recovered_at_any_time():
    # Light that really is a staircase: averaging it and inverting must give every step back
    c, T = Contrast(0.2, 0.3), 10_000
    events = one_pixel([1_000, 4_000, 4_500, 9_000], [1, -1, -1, 1])
    level = 0.3 * np.exp(np.cumsum([0, 0.2, -0.3, -0.3, 0.2]))
    edges = np.array([0, 1_000, 4_000, 4_500, 9_000, T])
    blurred = np.full((1, 1), (level * np.diff(edges)).sum() / T, np.float32)
    for k, time in enumerate([500, 2_000, 4_200, 6_000, 9_500]):
        assert abs(deblur(blurred, events, 0, T, time, c)[0, 0] / level[k] - 1) < 1e-6


def test_instant_outside_the_exposure_uses_the_events_between():
    c = Contrast(0.2, 0.3)
    events = one_pixel([500, 2_500, 3_500], [1, 1, -1])
    inside = log_blur_ratio(events, 1_000, 3_000, 1_000, c, (1, 1))
    assert np.isclose(log_blur_ratio(events, 1_000, 3_000, 4_000, c, (1, 1)), inside - 0.2 + 0.3)
    assert np.isclose(log_blur_ratio(events, 1_000, 3_000, 0, c, (1, 1)), inside + 0.2)


def test_sharp_frame_is_left_alone_at_its_own_time():
    image = np.linspace(0.1, 0.9, 6, dtype=np.float32).reshape(2, 3)
    events = one_pixel([100, 200], [1, 1])
    np.testing.assert_array_equal(deblur(image, events, 150, 150, 150, Contrast(0.2, 0.2)), image)


def test_colour_keeps_its_ratios():
    image = np.array([[[0.2, 0.4, 0.1]]], np.float32)
    sharp = deblur(image, one_pixel([5_000], [-1]), 0, 10_000, 9_000, Contrast(0.2, 0.3))
    np.testing.assert_allclose(sharp / sharp[..., :1], image / image[..., :1], rtol=1e-6)


def test_sum_weighs_each_polarity_by_its_own_threshold():
    assert np.isclose(log_sum(one_pixel([1, 2, 3], [1, 1, -1]), 0, 4, Contrast(0.2, 0.3), (1, 1))[0, 0], 0.1)


@pytest.mark.parametrize("ramp_us", [0, 900])
@pytest.mark.parametrize("polarity", [1, -1])
def test_a_pixel_that_fires_on_and_on_stays_finite(polarity, ramp_us):
    # 6000 events of one sign would be a change of light by e^1200: hot for a while, and not told by the calibration
    events = one_pixel(np.arange(6_000) * 5, [polarity] * 6_000)
    contrast = Contrast(0.2, 0.2, ramp_us)
    for time in (0, 15_000, 30_000, 60_000):
        assert np.isfinite(deblur(np.full((1, 1), 0.3, np.float32), events, 0, 30_000, time, contrast)).all()
    assert abs(log_sum(events, 0, 30_000, contrast, (1, 1))[0, 0]) == LARGEST_CHANGE
