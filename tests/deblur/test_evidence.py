"""How far each piece of evidence is trusted, against weights worked out by hand."""

import numpy as np
import pytest

from enhance.deblur import at_least, change_evidence, couple, deblur, log_noise, own_evidence
from enhance.deblur.evidence import DAMPING, MISMATCH, damped
from enhance.recording import Contrast, Events
from enhance.simulate import Camera, EventSensor, make_scene, simulate

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


def test_own_value_is_the_double_integral_less_what_steps_leave_open():
    # L(T) = B e^c T / (a + (T - a) e^c): Pan et al., CVPR 2019, worked by hand; one pixel is its own neighbourhood
    own = own_evidence(np.log([[0.5]]), np.full((1, 1), 0.01), train([2_500], [0], [1]), (0, 10_000), 10_000, C)
    ratio = np.log((2_500 + 7_500 * np.exp(0.2)) / (10_000 * np.exp(0.2)))
    kept = ratio**2 / (ratio**2 + DAMPING * C.mean**2)
    assert own.value[0, 0] == pytest.approx(np.log(0.5) - kept * ratio)


def test_real_blur_keeps_its_ratio_and_a_lone_step_fades():
    rng = np.random.default_rng(1)
    blurred = rng.normal(0, 0.5, (40, 40))
    kept = damped(blurred, 0.2)
    # variance 0.25 against 0.2^2 / 48: a third of a percent, a few where the neighbourhood happens to be faint
    assert np.abs(kept / blurred - 1).max() < 0.05
    lone = np.zeros((40, 40))
    lone[20, 20] = 0.05
    assert 0 < damped(lone, 0.2)[20, 20] < 0.02
    np.testing.assert_array_equal(damped(np.zeros((5, 5)), 0.2), 0)
    np.testing.assert_allclose(damped(-blurred, 0.2), -kept)


def test_a_slow_scene_is_spoiled_less_by_the_steps_of_its_events():
    # at most 4.8 px of blur, most of the picture far less
    scene = make_scene("zoom", (128, 96), np.random.default_rng(32), 300.0)
    simulated = simulate(scene, Camera(rate_hz=30.0, start_us=12_000), EventSensor(0.2, 0.22), 0.2, 32)
    frames, events = simulated.recording.frames, simulated.recording.events.events
    plain, made = [], []
    for k in range(1, len(frames) - 1):
        frame = frames.frame(k)
        truth = simulated.truth(frame.time_us)
        interval = (frame.start_us, frame.end_us)
        args = (events, *interval, frame.time_us, Contrast(0.2, 0.22))
        own = own_evidence(
            np.log(frame.image.astype(np.float64)), np.ones(truth.shape), events, interval, frame.time_us, args[-1]
        )
        for kept, image in ((plain, deblur(frame.image, *args)), (made, np.exp(own.value))):
            kept.append(float(np.mean((image - truth) ** 2)))
    assert np.mean(made) < 0.8 * np.mean(plain)


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


def test_a_clipped_pixel_gives_way_to_a_neighbour_that_knows_better():
    light, clipped = np.float32([[1.0, 1.0]]), np.array([[True, False]])
    noise = log_noise(np.full((1, 2), 0.004, np.float32), light, clipped).astype(np.float64)
    assert noise[0] == pytest.approx([1.0, 0.004 / (1 + 1 / 255)], rel=1e-5)
    # its neighbour says ln 3 by way of the events, with a part-filled threshold's doubt: it is believed
    own, change = [np.zeros((1, 2)), np.full((1, 2), np.log(3))], [np.zeros((1, 2))]
    weights = [1 / noise**2, np.full((1, 2), 1e4)], [np.full((1, 2), 50.0)]
    latent = couple(own, change, 0, *weights)
    assert latent[0, 0] == pytest.approx(np.log(3), rel=0.03)
    assert latent[0, 1] == pytest.approx(0, abs=0.01)


def test_a_clipped_pixel_is_at_least_as_light_as_its_ceiling():
    latent, own = np.array([[0.5, -0.5, -0.5]]), np.zeros((1, 3))
    assert at_least(latent, own, np.array([[True, True, False]])).tolist() == [[0.5, 0.0, -0.5]]
    assert at_least(latent, own, None) is latent
