import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from enhance.kernels.event_integral import event_counts, exponential_mean


def columns(t, polarity, x=None, y=None):
    n = len(t)
    return (
        np.asarray(t, np.int64),
        np.zeros(n, np.uint16) if x is None else np.asarray(x, np.uint16),
        np.zeros(n, np.uint16) if y is None else np.asarray(y, np.uint16),
        np.asarray(polarity, np.int8),
    )


def test_counts_equal_numpy_bincount():
    rng = np.random.default_rng(1)
    t, x, y, p = columns(np.arange(5000), rng.choice([-1, 1], 5000), rng.integers(0, 7, 5000), rng.integers(0, 5, 5000))
    counts = event_counts(x, y, p, (5, 7))
    cell = y.astype(int) * 7 + x
    assert counts.dtype == np.int32
    np.testing.assert_array_equal(counts[0].ravel(), np.bincount(cell[p > 0], minlength=35))
    np.testing.assert_array_equal(counts[1].ravel(), np.bincount(cell[p < 0], minlength=35))


def test_one_event_mean_is_the_closed_form():
    # One event at a of [0, T): mean = (a + (T - a) e^c) / T (Pan et al., CVPR 2019, worked by hand)
    T, a, c = 20_000, 7_000, 0.2
    mean, gain = exponential_mean(*columns([a], [1]), (0, T), (c, 0.3), (1, 1))
    assert abs(mean[0, 0] - (a + (T - a) * np.exp(c)) / T) < 1e-12
    assert abs(gain[0, 0] - np.exp(c)) < 1e-12


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(st.integers(1_000, 20_999), st.booleans()), max_size=60), st.floats(0.05, 0.5))
def test_random_train_mean_equals_the_sum_over_its_steps(train, negative):
    # The staircase integrated step by step with NumPy, sorted by time
    train.sort()
    start, end, positive = 1_000, 21_000, 0.2
    t = np.array([k[0] for k in train], np.int64)
    t = np.minimum(t, end - 1)
    p = np.array([1 if k[1] else -1 for k in train], np.int8)
    steps = np.exp(np.concatenate([[0.0], np.cumsum(np.where(p > 0, positive, -negative))]))
    edges = np.concatenate([[start], t, [end]])
    expected = float((steps * np.diff(edges)).sum() / (end - start))
    mean, gain = exponential_mean(*columns(t, p), (start, end), (positive, negative), (1, 1))
    assert abs(mean[0, 0] / expected - 1) < 1e-6
    assert abs(gain[0, 0] / steps[-1] - 1) < 1e-9


def test_epoch_sized_times_lose_nothing():
    base = 1_589_163_147_364_965
    t, x, y, p = columns([3_000, 9_000], [1, -1])
    near, _ = exponential_mean(t, x, y, p, (0, 10_000), (0.2, 0.25), (1, 1))
    far, _ = exponential_mean(t + base, x, y, p, (base, base + 10_000), (0.2, 0.25), (1, 1))
    np.testing.assert_array_equal(near, far)
