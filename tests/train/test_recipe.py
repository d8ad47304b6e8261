"""What is drawn for a training recording, and how it is spoiled."""

import numpy as np
import pytest

from enhance.light import encode
from enhance.recording import Events
from enhance.simulate.benchmark import FIRST_SEED
from enhance.simulate.kinds import KINDS
from enhance.train.recipe import HELD_OUT_SEED, MOST_BLUR_PX, MOST_NOISE_HZ, Violations, draw_recipe
from enhance.train.spoil import SpoiledCamera, _kept, _outside_bursts, record

DRAWN = [draw_recipe(7, index)[0] for index in range(200)]


def test_the_same_number_draws_the_same_recording_and_another_does_not() -> None:
    assert draw_recipe(7, 3)[0] == DRAWN[3]
    assert draw_recipe(7, 3)[0] != draw_recipe(7, 4)[0]
    assert draw_recipe(7, 3)[0] != draw_recipe(8, 3)[0]


def test_training_held_out_and_benchmark_never_share_a_scene() -> None:
    held_out = [draw_recipe(7, index, held_out=True)[0] for index in range(200)]
    assert max(recipe.seed for recipe in DRAWN) < HELD_OUT_SEED
    assert min(recipe.seed for recipe in held_out) >= HELD_OUT_SEED
    assert max(recipe.seed for recipe in held_out) < FIRST_SEED


def test_every_drawn_rig_is_within_what_the_card_says() -> None:
    assert all(0.1 <= c <= 0.4 for recipe in DRAWN for c in recipe.contrast)
    assert all(recipe.gap_px * recipe.exposure_share <= MOST_BLUR_PX + 1e-9 for recipe in DRAWN)
    assert all(0.5 <= recipe.gap_px <= 60 and recipe.mismatch <= 0.08 for recipe in DRAWN)
    assert all(recipe.noise_hz <= MOST_NOISE_HZ for recipe in DRAWN)
    assert 0.3 < np.mean([recipe.violations.any for recipe in DRAWN]) < 0.6


def test_most_recordings_have_little_noise_and_some_have_frames_that_are_sharp() -> None:
    noise = np.array([recipe.noise_hz for recipe in DRAWN])
    assert np.median(noise) < 0.1 * MOST_NOISE_HZ
    assert noise.max() > 0.7 * MOST_NOISE_HZ
    shares = np.array([recipe.exposure_share for recipe in DRAWN])
    # a 500 us exposure at 25 Hz is a share of 0.0125
    assert 0.08 < np.mean(shares < 0.05) < 0.35
    assert shares.min() < 0.0125


def test_kinds_of_scene_take_turns() -> None:
    assert [recipe.kind for recipe in DRAWN[: len(KINDS)]] == list(KINDS)


def test_the_truth_is_what_the_spoiled_camera_shows_sharp() -> None:
    recipe = next(r for r in DRAWN if r.violations.pedestal and r.violations.exponent == 1)
    sample = record(recipe, np.random.default_rng(1))
    truth = sample.truth(30_000)
    # pedestal p: light (1 - p) + p, hence nothing darker than p
    assert truth.min() >= recipe.violations.pedestal
    assert truth.shape == recipe.size[::-1]


def test_a_wrong_curve_bends_frames_and_truth_alike() -> None:
    recipe = next(r for r in DRAWN if r.violations.exponent != 1 and r.light_curve == "srgb")
    sample = record(recipe, np.random.default_rng(1))
    read_as = sample.recording.frames.light.curve
    assert read_as == f"gamma {2.2 * recipe.violations.exponent:.3f}"
    seen = sample.camera.seen(sample.simulated.truth(30_000))
    np.testing.assert_allclose(encode(read_as, sample.truth(30_000)), encode("srgb", seen), atol=1e-5)


def test_a_gain_clips_and_a_pedestal_lifts() -> None:
    camera = SpoiledCamera(pedestal=0.1, gain=2.0)
    # by hand: 2 * 0.3 * 0.9 + 0.1; 2 * 0.6 * 0.9 + 0.1 clips
    np.testing.assert_allclose(camera.seen(np.float32([0, 0.3, 0.6])), [0.1, 0.64, 1.0], rtol=1e-6)


def test_a_lag_makes_dark_pixels_later_and_keeps_events_sorted() -> None:
    recipe = next(r for r in DRAWN if r.violations.lag_us and not r.violations.lost and not r.violations.bursts)
    spoiled = record(recipe, np.random.default_rng(1))
    t_us = spoiled.recording.events.between(-(2**40), 2**40).t_us
    assert (np.diff(t_us) >= 0).all()
    # what a calibration sees of the lag, its mean, is part of the clock it is told
    assert spoiled.rig.offset_us.value < recipe.rig.clock_us - 2 * recipe.jitter_us


@pytest.mark.parametrize("where", ["all", "dense", "busy"])
def test_events_are_lost_where_it_is_said(where: str) -> None:
    rng = np.random.default_rng(3)
    # 9000 events in one block and half a millisecond, 1000 spread over 1000 ms and 30 blocks
    t = np.sort(np.concatenate([rng.integers(100_000, 100_500, 9000), rng.integers(0, 1_000_000, 1000)]))
    crowded = (t >= 100_000) & (t < 100_500)
    x = np.where(crowded, 3, rng.integers(16, 96, t.size)).astype(np.uint16)
    events = Events(t, x, np.full(t.size, 5, np.uint16), np.ones(t.size, np.int8))
    kept = _kept(events, Violations(lost=0.3, lost_where=where), rng)
    assert kept[crowded].mean() == pytest.approx(0.7, abs=0.03)
    assert kept[~crowded].mean() == pytest.approx(0.7 if where == "all" else 1.0, abs=0.06)


def test_a_burst_takes_every_event_of_whole_milliseconds_and_no_other() -> None:
    t = np.arange(7, 200_007, 100)
    kept = _outside_bursts(t, Violations(bursts=0.1, burst_ms=4), np.random.default_rng(5))
    # 10 % of 200 ms in bursts of 4 ms: five of them, which may overlap
    assert 0.9 <= kept.mean() <= 0.98
    whole = kept.reshape(200, 10)
    assert (whole.all(axis=1) | ~whole.any(axis=1)).all()
    edges = np.flatnonzero(np.diff(np.r_[1, whole[:, 0], 1]))
    assert (np.diff(edges)[::2] >= 4).all()


def test_the_shortest_recording_still_loses_one_burst() -> None:
    kept = _outside_bursts(np.arange(0, 3000, 10), Violations(bursts=0.02, burst_ms=5), np.random.default_rng(5))
    assert not kept.any()
