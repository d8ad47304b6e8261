"""Candidates between two sharp keys, against the truth of a simulated motion."""

from dataclasses import dataclass, replace

import cv2
import numpy as np
import pytest

from enhance.interpolate.candidates import NAMES, Span
from enhance.recording import Contrast, Events
from enhance.simulate import Camera, EventSensor, simulate

SIZE = (128, 96)
SPAN_US = 40_000
MIDDLE_US = SPAN_US // 2
C = Contrast(0.15, 0.15)
EPOCH_US = 1_589_163_147_364_965


@dataclass(frozen=True)
class Path:
    """A random surface drawn along x(t) = v t + a t^2 / 2 pixels."""

    velocity: float
    acceleration: float = 0.0
    size: tuple = SIZE
    name: str = "path"

    @property
    def speed_px_s(self):
        return max(self.velocity, self.velocity + self.acceleration * SPAN_US * 1e-6)

    def render(self, t_s):
        height, width = self.size[::-1]
        x = 5 + self.velocity * t_s + 0.5 * self.acceleration * t_s**2
        columns = np.tile(np.arange(width, dtype=np.float32) + np.float32(x), (height, 1))
        rows = np.tile(np.arange(height, dtype=np.float32)[:, None], (1, width))
        return cv2.remap(surface(), columns, rows, cv2.INTER_CUBIC)


def surface():
    noise = np.random.default_rng(2).standard_normal((SIZE[1], SIZE[0] + 40)).astype(np.float32)
    return np.clip(0.3 * np.exp(1.4 * cv2.GaussianBlur(noise, (0, 0), 2.0) * 3), 0.04, 0.9)


def span_of(scene, contrast=C, sensor=None, base=0):
    sensor = sensor or EventSensor(0.15, 0.15, mismatch=0.03, noise_hz=1.0)
    camera = Camera(rate_hz=25.0, exposure_us=1_000, start_us=0)
    simulated = simulate(scene, camera, sensor, SPAN_US * 1e-6, 3)
    events = simulated.recording.events.events
    moved = replace(events, t_us=events.t_us + base)
    keys = simulated.truth(0), simulated.truth(SPAN_US)
    return Span(*keys, (base, base + SPAN_US), moved, contrast), simulated


@pytest.fixture(scope="module")
def steady():
    return span_of(Path(250.0))


@pytest.fixture(scope="module")
def accelerating():
    # 12 pixels in the span, 3 of them before its middle: a straight line is 3 pixels off there
    return span_of(Path(0.0, 15_000.0))


def errors(span, simulated, time_us):
    """Root mean square error of each candidate, by name, and of the plain blend; borders that nothing saw aside."""
    candidates = span.at(time_us)
    truth = simulated.truth(time_us)
    inside = np.s_[8:-8, 16:-16]
    rms = {name: np.sqrt(np.mean((s - truth)[inside] ** 2)) for name, s in zip(NAMES, candidates.stack, strict=True)}
    rms["carried"] = np.sqrt(np.mean((candidates.carried - truth)[inside] ** 2))
    w = candidates.weight
    rms["blend"] = np.sqrt(np.mean(((1 - w) * span.left + w * span.right - truth)[inside] ** 2))
    return rms


@pytest.mark.parametrize("share", [0.25, 0.5, 0.8])
def test_a_key_moved_with_the_events_beats_the_blend_of_a_translating_texture(steady, share):
    rms = errors(*steady, round(share * SPAN_US))
    assert max(rms["moved from the left"], rms["moved from the right"]) < 0.5 * rms["blend"]


def test_an_accelerating_motion_is_followed_by_the_events_not_by_a_straight_line(accelerating):
    rms = errors(*accelerating, MIDDLE_US)
    for side in ("left", "right"):
        assert rms[f"moved from the {side}"] < 0.6 * rms[f"straight from the {side}"]


@pytest.mark.parametrize("share", [0.2, 0.5, 0.7])
def test_a_steady_motion_is_followed_by_a_straight_line_too(steady, share):
    rms = errors(*steady, round(share * SPAN_US))
    assert rms["straight from the left"] < 0.5 * rms["blend"]
    assert rms["straight from the right"] < 0.5 * rms["blend"]


@pytest.mark.parametrize("share", [0.25, 0.5, 0.8])
def test_steadying_takes_noise_from_what_moves(steady, share):
    rms = errors(*steady, round(share * SPAN_US))
    # seven steps of which neighbours still share part of their noise
    assert rms["steadied"] < 0.8 * rms["carried"]


def test_what_does_not_move_is_not_steadied_away(steady):
    rng = np.random.default_rng(8)
    key = rng.uniform(0.2, 0.8, (40, 50)).astype(np.float32)
    candidates = Span(key, key, (0, SPAN_US), Events.none(), C).at(MIDDLE_US)
    np.testing.assert_allclose(candidates.stack[NAMES.index("steadied")], key, atol=1e-5)


def test_a_carried_key_is_within_part_filled_thresholds_of_the_truth(steady):
    span, simulated = steady
    carried = span.at(MIDDLE_US).stack[:2]
    off = np.abs(np.log(carried / simulated.truth(MIDDLE_US)))
    # a threshold may be part-filled at either end, for either sign
    assert np.quantile(off, 0.95) < 0.3
    assert np.median(off) < 0.12


def test_at_the_keys_the_carried_candidates_are_the_keys(steady):
    span, _ = steady
    np.testing.assert_allclose(span.at(0).stack[0], span.left, atol=2e-6)
    np.testing.assert_allclose(span.at(SPAN_US).stack[1], span.right, atol=2e-6)


def test_counts_and_changes_of_both_sides_add_up_to_the_span(steady):
    span, _ = steady
    one, other = span.at(10_000), span.at(33_333)
    np.testing.assert_array_equal(one.counts.sum(axis=0), other.counts.sum(axis=0))
    assert one.counts.sum() == len(span.events.between(0, SPAN_US))
    assert (one.weight, other.weight) == pytest.approx((0.25, 33_333 / 40_000))


def test_the_mismatch_shows_a_threshold_that_is_wrong(steady):
    span, _ = steady
    wrong = Span(span.left, span.right, span.interval_us, span.events, Contrast(0.25, 0.25))
    assert np.abs(wrong.mismatch).mean() > 1.5 * np.abs(span.mismatch).mean()


@pytest.mark.parametrize("ramp_us", [0, 800])
@pytest.mark.parametrize("shape", [(40, 50), (40, 50, 3)])
def test_a_constant_scene_stays_constant(shape, ramp_us):
    key = np.full(shape, 0.37, np.float32)
    span = Span(key, key, (0, SPAN_US), Events.none(), Contrast(0.2, 0.2, ramp_us))
    for time_us in (1, MIDDLE_US, SPAN_US - 1):
        candidates = span.at(time_us)
        np.testing.assert_allclose(candidates.stack, 0.37, atol=1e-5)
        np.testing.assert_allclose(candidates.carried, 0.37, atol=1e-5)
        assert not candidates.counts.any()


def test_black_keys_with_noise_below_zero_stay_finite():
    rng = np.random.default_rng(5)
    left, right = rng.normal(0, 0.02, (2, 40, 50)).astype(np.float32)
    n = 4_000
    events = Events(
        np.sort(rng.integers(0, SPAN_US, n)),
        rng.integers(0, 50, n).astype(np.uint16),
        rng.integers(0, 40, n).astype(np.uint16),
        rng.choice(np.array([-1, 1], np.int8), n),
    )
    candidates = Span(left, right, (0, SPAN_US), events, Contrast(0.3, 0.3, 700)).at(MIDDLE_US)
    for array in (candidates.stack, candidates.carried, candidates.counts, candidates.mismatch, *candidates.flows):
        assert array.dtype == np.float32
        assert np.isfinite(array).all()


def test_epoch_sized_times_give_the_same_bytes():
    near, _ = span_of(Path(250.0), replace(C, ramp_us=600))
    far, _ = span_of(Path(250.0), replace(C, ramp_us=600), base=EPOCH_US)
    for share in (7, 19_999, 39_999):
        assert near.at(share).stack.tobytes() == far.at(EPOCH_US + share).stack.tobytes()


@pytest.mark.parametrize("shape", [(1, 64), (64, 1), (9, 7)])
def test_tiny_pictures_are_no_trouble(shape):
    rng = np.random.default_rng(6)
    left, right = rng.uniform(0.1, 0.9, (2, *shape)).astype(np.float32)
    assert np.isfinite(Span(left, right, (0, 100), Events.none(), C).at(50).stack).all()


@pytest.mark.parametrize("polarity", [1, -1])
def test_a_pixel_that_fires_on_and_on_spoils_no_other(polarity):
    key = np.full((40, 50), 0.3, np.float32)
    n = 6_000
    at = np.full(n, 20, np.uint16)
    events = Events(np.arange(n) * 5, at, at, np.full(n, polarity, np.int8))
    stack = Span(key, key, (0, SPAN_US), events, Contrast(0.2, 0.2)).at(MIDDLE_US).stack
    assert np.isfinite(stack).all()
    away = np.ones((40, 50), bool)
    away[12:29, 12:29] = False
    np.testing.assert_allclose(stack[:, away], 0.3, atol=1e-3)
