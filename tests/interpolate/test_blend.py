"""The analytic blend and the colour that rides along."""

from dataclasses import replace

import numpy as np
import pytest

from enhance.interpolate import Span, analytic_blend, with_colour
from enhance.interpolate.weighing import carried_by_events, weigh_warps
from enhance.light import luma
from enhance.recording import Contrast, Events
from enhance.simulate import Camera, EventSensor, make_scene, simulate

SPAN_US = 33_000


def parts(seed, color=False):
    scene = make_scene("parts", (128, 96), np.random.default_rng(seed), 300.0, color=color, textures="test")
    camera = Camera(rate_hz=30.0, exposure_us=1_000, start_us=0)
    simulated = simulate(scene, camera, EventSensor(0.2, 0.22, mismatch=0.03, noise_hz=1.0), SPAN_US * 1e-6, seed)
    keys = simulated.truth(0), simulated.truth(SPAN_US)
    return Span(*keys, (0, SPAN_US), simulated.recording.events.events, Contrast(0.2, 0.22, 800)), simulated


@pytest.fixture(scope="module")
def colourful():
    return parts(3, color=True)


def mse(picture, truth):
    return float(np.mean((picture - truth) ** 2))


@pytest.mark.parametrize("seed", [1, 2])
def test_the_blend_is_better_than_carrying_alone_on_parts_that_cross(seed):
    span, simulated = parts(seed)
    for time_us in (8_000, 16_500, 25_000):
        candidates, truth = span.at(time_us), simulated.truth(time_us)
        picture = analytic_blend(candidates)
        assert mse(picture, truth) < 0.8 * mse(candidates.carried, truth)
        # and than the frames alone
        w = candidates.weight
        assert mse(picture, truth) < 0.5 * mse((1 - w) * span.left + w * span.right, truth)


def test_weights_of_the_warps_are_shares(colourful):
    candidates = colourful[0].at(12_000)
    weights, share = weigh_warps(candidates.stack[2:], candidates.carried, candidates.stack[:2])
    assert weights.shape == (5, 96, 128)
    assert weights.dtype == share.dtype == np.float32
    assert weights.min() >= 0
    np.testing.assert_allclose(weights.sum(axis=0), 1, rtol=1e-5)
    assert 0 < share.min() <= share.max() <= 1


def test_a_warp_that_does_not_fit_gets_little_weight(colourful):
    candidates = colourful[0].at(12_000)
    stack = candidates.stack.copy()
    stack[3] += 0.3
    weights, _ = weigh_warps(stack[2:], candidates.carried, stack[:2])
    assert weights[1].mean() < 0.05


def test_the_carried_pair_is_weighed_by_events_and_without_them_by_time():
    pair = np.stack([np.full((4, 5), 0.2), np.full((4, 5), 0.6)]).astype(np.float32)
    none, many = np.zeros((2, 4, 5), np.float32), np.zeros((2, 4, 5), np.float32)
    many[0] = 1e6
    np.testing.assert_allclose(carried_by_events(pair, none, 0.25), 0.3, rtol=1e-6)
    # all of the span's events lie before the instant: the right key is as it was
    np.testing.assert_allclose(carried_by_events(pair, many, 0.25), 0.6, rtol=1e-5)


def test_a_key_is_not_blended(colourful):
    candidates = colourful[0].at(12_000)
    key = np.full(candidates.mismatch.shape, 0.3, np.float32)
    assert analytic_blend(replace(candidates, key=key)) is key


@pytest.mark.parametrize("value", [-0.01, 0.0, 0.4, 1.3])
def test_a_constant_is_blended_into_itself(value):
    key = np.full((40, 50), value, np.float32)
    picture = analytic_blend(Span(key, key, (0, 100), Events.none(), Contrast(0.2, 0.2)).at(30))
    # what is below black counts as black where logarithms are taken
    np.testing.assert_allclose(picture, value, atol=0.011 if value < 0 else 1e-5)
    assert picture.dtype == np.float32


def test_a_grey_picture_stays_as_it_is():
    key = np.full((40, 50), 0.4, np.float32)
    span = Span(key, key, (0, 100), Events.none(), Contrast(0.2, 0.2))
    picture = np.random.default_rng(1).uniform(0, 1, (40, 50)).astype(np.float32)
    assert with_colour(picture, span, span.at(50)) is picture


def test_grey_in_three_channels_stays_grey():
    span, _ = parts(2)
    three = Span(
        *(np.repeat(key[..., None], 3, axis=2) for key in (span.left, span.right)),
        span.interval_us,
        span.events,
        span.contrast,
    )
    candidates = three.at(12_000)
    grey = analytic_blend(candidates)
    picture = with_colour(grey, three, candidates)
    assert picture.shape == (96, 128, 3)
    assert picture.dtype == np.float32
    np.testing.assert_allclose(picture, np.repeat(grey[..., None], 3, axis=2), atol=2e-5)


def test_colour_keeps_the_light_of_the_picture(colourful):
    span, _ = colourful
    candidates = span.at(12_000)
    light = np.maximum(analytic_blend(candidates), 0)
    np.testing.assert_allclose(luma(with_colour(light, span, candidates)), light, atol=2e-3)


def test_colour_is_carried_along_with_what_moves(colourful):
    span, simulated = colourful
    time_us = 16_500
    candidates, truth = span.at(time_us), simulated.truth(time_us)
    picture = with_colour(luma(truth), span, candidates)
    w = candidates.weight
    still = (1 - w) * span.left + w * span.right
    # the colour alone: light is the truth's in both
    plain = still * (luma(truth) / luma(still))[..., None]
    moving = np.abs(luma(span.left) - luma(span.right)) > 0.05
    assert mse(picture[moving], truth[moving]) < 0.6 * mse(plain[moving], truth[moving])


def test_colour_of_dark_noisy_keys_stays_finite():
    rng = np.random.default_rng(5)
    left, right = rng.normal(0, 0.01, (2, 40, 50, 3)).astype(np.float32)
    span = Span(left, right, (0, 100), Events.none(), Contrast(0.2, 0.2))
    candidates = span.at(50)
    picture = with_colour(rng.normal(0, 0.01, (40, 50)).astype(np.float32), span, candidates)
    assert picture.dtype == np.float32
    assert np.isfinite(picture).all()
    assert np.abs(picture).max() < 0.2
