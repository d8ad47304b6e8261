"""How far each piece of evidence is trusted, against weights worked out by hand."""

import numpy as np
import pytest

from enhance.deblur import change_evidence, own_evidence
from enhance.deblur.evidence import MISMATCH
from enhance.recording import Contrast, Events

C = Contrast(0.2, 0.3)
BASE_US = 1_589_163_147_364_965


def train(t, x, polarity):
    n = len(t)
    return Events(
        np.asarray(t, np.int64), np.asarray(x, np.uint16), np.zeros(n, np.uint16), np.asarray(polarity, np.int8)
    )


def test_a_pixel_without_events_is_known_by_its_frame_alone():
    log_image, noise = np.full((1, 3), -1.0), np.array([[0.01, 0.02, 0.1]])
    own = own_evidence(log_image, noise, Events.none(), (0, 10_000), 5_000, C)
    np.testing.assert_allclose(own.value, log_image, atol=1e-12)
    np.testing.assert_allclose(own.weight, 1 / noise**2)


def test_steps_in_the_exposure_cost_trust_by_part_filled_thresholds_and_mismatch():
    # variance = noise^2 + c^2 / 48 + (mismatch c)^2 n, with c the mean threshold
    own = own_evidence(
        np.zeros((1, 2)), np.full((1, 2), 0.01), train([100, 200, 300], [1] * 3, [1, 1, -1]), (0, 1_000), 500, C
    )
    expected = 0.01**2 + 0.25**2 / 48 + (MISMATCH * 0.25) ** 2 * 3
    assert own.weight[0, 1] == pytest.approx(1 / expected)
    assert own.weight[0, 1] < own.weight[0, 0]


def test_own_value_is_the_double_integral():
    # L(T) = B e^c T / (a + (T - a) e^c): Pan et al., CVPR 2019, worked by hand
    own = own_evidence(np.log([[0.5]]), np.full((1, 1), 0.01), train([2_500], [0], [1]), (0, 10_000), 10_000, C)
    latent = 0.5 * np.exp(0.2) * 10_000 / (2_500 + 7_500 * np.exp(0.2))
    assert np.exp(own.value[0, 0]) == pytest.approx(latent)


def test_a_sharp_frame_is_trusted_as_far_as_its_noise():
    own = own_evidence(np.zeros((1, 2)), np.full((1, 2), 0.02), train([5, 6], [0, 0], [1, 1]), (5, 5), 5, C)
    np.testing.assert_array_equal(own.value, 0)
    np.testing.assert_allclose(own.weight, 1 / 0.02**2)


def test_events_outside_the_exposure_cost_no_trust():
    near, far = train([100, 900], [0, 0], [1, -1]), train([-50, 100, 900, 1_000, 1_500], [0] * 5, [1, 1, -1, 1, 1])
    noise = np.full((1, 1), 0.01)
    one, other = (own_evidence(np.zeros((1, 1)), noise, events, (0, 1_000), 500, C) for events in (near, far))
    np.testing.assert_array_equal(one.weight, other.weight)
    np.testing.assert_array_equal(one.value, other.value)


@pytest.mark.parametrize("base", [0, BASE_US])
def test_change_is_the_sum_of_thresholds_trusted_less_for_every_event(base):
    t = base + np.array([10, 20, 30, 999, 1_000])
    change = change_evidence(train(t, [1, 1, 1, 1, 1], [1, -1, -1, 1, 1]), (base, base + 1_000), C, (1, 2))
    # half-open: the event at the end belongs to the next span
    np.testing.assert_allclose(change.value, [[0.0, 2 * 0.2 - 2 * 0.3]], atol=1e-12)
    # variance = c^2 / 2 + (mismatch c n)^2: also where no event fired, light may creep by almost a threshold
    np.testing.assert_allclose(change.weight, [[2 / 0.25**2, 1 / (0.25**2 / 2 + (MISMATCH * 0.25 * 4) ** 2)]])


def test_a_ramp_moves_part_of_a_step_over_the_border():
    # half of the ramp that leads to the event at 1 200 lies before 1 000
    ramp = Contrast(0.2, 0.3, 400)
    events = train([1_200], [0], [1])
    before = change_evidence(events, (0, 1_000), ramp, (1, 1)).value
    after = change_evidence(events, (1_000, 2_000), ramp, (1, 1)).value
    np.testing.assert_allclose([before[0, 0], after[0, 0]], [0.1, 0.1], atol=1e-12)


def test_an_event_exactly_at_a_border_is_counted_once_with_a_ramp_too():
    ramp = Contrast(0.2, 0.3, 400)
    events = train([1_000], [0], [1])
    before = change_evidence(events, (0, 1_000), ramp, (1, 1)).value
    after = change_evidence(events, (1_000, 2_000), ramp, (1, 1)).value
    # the light has arrived at the border
    np.testing.assert_allclose([before[0, 0], after[0, 0]], [0.2, 0.0], atol=1e-12)
