"""The background-activity filter against closed forms and a plain count."""

import numpy as np
import pytest

from enhance.kernels.support import support

SHAPE = (100, 120)


def poisson(rate_hz: float, length_us: int, seed: int):
    rng = np.random.default_rng(seed)
    count = rng.poisson(rate_hz * SHAPE[0] * SHAPE[1] * length_us / 1e6)
    t_us = np.sort(rng.integers(0, length_us, count))
    return t_us, rng.integers(0, SHAPE[1], count).astype(np.uint16), rng.integers(0, SHAPE[0], count).astype(np.uint16)


def inner(t_us, x, y, length_us: int) -> np.ndarray:
    """Events with all 8 neighbours and a whole window on both sides."""
    inside = (x > 0) & (x < SHAPE[1] - 1) & (y > 0) & (y < SHAPE[0] - 1)
    return inside & (t_us > 10_000) & (t_us < length_us - 10_000)


# computed: k=1: 1-exp(-8 L tau); k=2: 1-(1-q)^8-8q(1-q)^7 with q=1-exp(-L tau)
@pytest.mark.parametrize(
    ("rate_hz", "length_us", "neighbours", "expected"),
    [(0.1, 60_000_000, 1, 0.00797), (5.0, 2_000_000, 1, 0.3297), (5.0, 2_000_000, 2, 0.0550)],
)
def test_pure_noise_passes_as_often_as_the_formula_says(rate_hz, length_us, neighbours, expected):
    q = 1 - np.exp(-rate_hz * 0.01)
    computed = 1 - (1 - q) ** 8 - (8 * q * (1 - q) ** 7 if neighbours == 2 else 0)
    assert computed == pytest.approx(expected, rel=0.01)
    events = poisson(rate_hz, length_us, 8)
    seen = inner(*events, length_us)
    kept = support(*events, SHAPE, 10_000, neighbours, both_sides=False)[seen]
    # four standard errors of a share, the events being nearly independent
    assert kept.mean() == pytest.approx(computed, abs=4 * np.sqrt(computed / seen.sum()))


def test_looking_both_ways_doubles_the_rate_that_noise_meets():
    events = poisson(5.0, 2_000_000, 9)
    seen = inner(*events, 2_000_000)
    kept = support(*events, SHAPE, 10_000, 1)[seen]
    assert kept.mean() == pytest.approx(1 - np.exp(-16 * 5.0 * 0.01), abs=0.008)


@pytest.mark.parametrize("both_sides", [True, False])
@pytest.mark.parametrize("neighbours", [1, 2, 3])
def test_it_equals_a_plain_count_of_neighbours(both_sides, neighbours):
    rng = np.random.default_rng(10)
    t_us = np.sort(rng.integers(0, 30_000, 400))
    x, y = (rng.integers(0, 12, 400).astype(np.uint16) for _ in range(2))
    kept = support(t_us, x, y, (12, 12), 1_000, neighbours, both_sides)
    dt = t_us[:, None] - t_us[None, :]
    dx, dy = (v.astype(int)[:, None] - v.astype(int)[None, :] for v in (x, y))
    before = np.arange(400)[:, None] > np.arange(400)[None, :]
    close = (np.abs(dt) <= 1_000) & (np.abs(dx) <= 1) & (np.abs(dy) <= 1) & ((dx != 0) | (dy != 0))
    if not both_sides:
        close &= before
    place = (dx + 1) * 3 + dy + 1
    different = np.stack([(close & (place == p)).any(axis=1) for p in range(9)]).sum(axis=0)
    np.testing.assert_array_equal(kept, different >= neighbours)
    assert 0 < kept.sum() < 400


def test_epoch_sized_times_do_not_wrap():
    t_us = np.array([1_589_163_147_364_965, 1_589_163_147_364_966, 1_589_163_148_364_966])
    x, y = np.array([3, 4, 4], np.uint16), np.array([5, 5, 5], np.uint16)
    assert support(t_us, x, y, (12, 12), 1_000, 1).tolist() == [True, True, False]
