"""The frames' noise, from pixels that stay quiet."""

import numpy as np
import pytest

from enhance.calibrate.evidence import gather_pairs
from enhance.calibrate.frame_noise import ASSUMED, estimate_frame_noise
from enhance.light import Light
from enhance.recording import EventArray, Events, FrameArray

SHAPE = (80, 100)


def noisy(full_well, read, bits, seed=1, lamp=(1.0, 1.0, 1.0)):
    """Three frames of a still wedge: Poisson electrons, normal read noise, rounding (textbook)."""
    rng = np.random.default_rng(seed)
    wedge = np.tile(np.linspace(0.05, 0.9, SHAPE[1]), (SHAPE[0], 1))
    white = 2**bits - 1
    light = [(rng.poisson(k * wedge * full_well) + rng.normal(0, read, SHAPE)) / full_well for k in lamp]
    codes = np.clip(np.rint(np.stack(light) * white), 0, white).astype(np.uint16)
    start = np.arange(3) * 40_000
    frames = FrameArray(codes, start, start + 10_000, Light("linear", 0, white))
    return gather_pairs(frames, range(3))


NO_EVENTS = EventArray(Events.none(), SHAPE[::-1], (0, 1))


@pytest.mark.parametrize(
    ("full_well", "read", "bits"), [(20_000, 5.0, 8), (2_000, 20.0, 8), (10_000, 100.0, 12), (5_000, 40.0, 16)]
)
def test_floor_and_shot_are_recovered(full_well, read, bits):
    # variance = (read / full well)^2 + (step / sqrt 12)^2 + light / full well
    floor, shot = estimate_frame_noise(noisy(full_well, read, bits), NO_EVENTS).value
    assert shot == pytest.approx(1 / full_well, rel=0.1, abs=0.25 * (read / full_well) ** 2)
    rounding = 1 / (2**bits - 1) / np.sqrt(12)
    light = np.array([0.05, 0.5, 0.9])
    expected = (read / full_well) ** 2 + rounding**2 + light / full_well
    np.testing.assert_allclose(floor**2 + shot * light, expected, rtol=0.12)


def test_what_changes_at_pixels_with_events_or_beside_them_is_no_noise():
    pairs = noisy(20_000, 5.0, 8)
    for pair in pairs:
        pair.second.image[20:40] += 0.2
    rows, columns = np.indices(SHAPE)
    moved = ((rows >= 21) & (rows < 39)).ravel()
    x, y = columns.ravel()[moved], rows.ravel()[moved]
    t = np.repeat([20_000, 60_000], len(x)).astype(np.int64)
    events = Events(t, np.tile(x, 2).astype(np.uint16), np.tile(y, 2).astype(np.uint16), np.ones(2 * len(x), np.int8))
    floor, shot = estimate_frame_noise(pairs, EventArray(events, SHAPE[::-1])).value
    assert shot == pytest.approx(1 / 20_000, rel=0.1)
    assert floor < 0.003


def test_a_lamp_that_drifts_is_no_noise():
    floor, shot = estimate_frame_noise(noisy(20_000, 5.0, 8, lamp=(1.0, 1.04, 1.02)), NO_EVENTS).value
    assert floor**2 + shot * 0.5 == pytest.approx((5 / 20_000) ** 2 + (1 / 255) ** 2 / 12 + 0.5 / 20_000, rel=0.15)


def test_the_few_pixels_that_creep_without_an_event_are_no_noise():
    pairs = noisy(20_000, 5.0, 8)
    rng = np.random.default_rng(6)
    for pair in pairs:
        # one pixel in twenty changes by part of a threshold of 0.2
        creep = (rng.random(SHAPE) < 0.05) * rng.uniform(-0.2, 0.2, SHAPE)
        pair.second.image[:] *= np.exp(creep).astype(np.float32)
    floor, shot = estimate_frame_noise(pairs, NO_EVENTS).value
    assert floor**2 + shot * 0.5 == pytest.approx((5 / 20_000) ** 2 + (1 / 255) ** 2 / 12 + 0.5 / 20_000, rel=0.4)


def test_frames_without_noise_keep_the_step_of_8_bits():
    floor, shot = estimate_frame_noise(noisy(1e9, 0.0, 16), NO_EVENTS).value
    assert floor == 0.001
    assert shot < 1e-6


@pytest.mark.parametrize("pairs_left", [0, 1])
def test_a_scene_that_moves_all_over_tells_nothing_and_says_so(pairs_left):
    pairs = noisy(20_000, 5.0, 8)[:pairs_left]
    y, x = (k.ravel().astype(np.uint16) for k in np.indices(SHAPE))
    everywhere = EventArray(Events(np.full(x.size, 20_000), x, y, np.ones(x.size, np.int8)), SHAPE[::-1])
    quantity = estimate_frame_noise(pairs, everywhere)
    assert quantity.value == list(ASSUMED)
    assert (quantity.method, quantity.uncertainty) == ("assumed", None)
    assert "too few pixels stay quiet between two keys" in quantity.evidence


def test_a_simulated_cameras_noise_is_found_beside_what_moves(found):
    # default camera: 20 000 electrons at full scale, read noise 5, 8 bits
    floor, shot = found("plain").frame_noise.value
    expected = (5 / 20_000) ** 2 + (1 / 255) ** 2 / 12 + 0.3 / 20_000
    assert floor**2 + shot * 0.3 == pytest.approx(expected, rel=0.15)
