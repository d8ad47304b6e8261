import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from enhance.kernels.event_integral import BURST, event_counts, exponential_mean, part_filled


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
    mean = exponential_mean(*columns([a], [1]), (0, T), (c, 0.3), (1, 1))
    assert abs(mean[0, 0] - (a + (T - a) * np.exp(c)) / T) < 1e-12


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
    mean = exponential_mean(*columns(t, p), (start, end), (positive, negative), (1, 1))
    assert abs(mean[0, 0] / expected - 1) < 1e-6


def test_epoch_sized_times_lose_nothing():
    base = 1_589_163_147_364_965
    t, x, y, p = columns([3_000, 9_000], [1, -1])
    near = exponential_mean(t, x, y, p, (0, 10_000), (0.2, 0.25), (1, 1))
    far = exponential_mean(t + base, x, y, p, (base, base + 10_000), (0.2, 0.25), (1, 1))
    np.testing.assert_array_equal(near, far)


def ramped_light(t, p, times, c, ramp):
    """Log light at many times, ramp by ramp, with plain Python."""
    level, last, value = 0.0, -np.inf, np.full(len(times), np.nan)
    for k, (ti, pi) in enumerate(zip(t, p, strict=True)):
        step = c[0] if pi > 0 else -c[1]
        burst = k + 1 < len(t) and p[k + 1] == pi
        own = min(ramp, BURST * (t[k + 1] - ti)) if burst else ramp
        begin = max(last, ti - own)
        inside = (times >= last) & (times < ti)
        value[inside] = level + step * np.clip((times[inside] - begin) / (ti - begin), 0, 1)
        level, last = level + step, ti
    value[times >= last] = level
    return value


def test_ramped_mean_equals_fine_numerical_integration():
    rng = np.random.default_rng(6)
    start, end, ramp, c = 10_000, 30_000, 1_500, (0.2, 0.3)
    t = np.sort(rng.choice(np.arange(8_000, 32_000), 25, replace=False))
    p = rng.choice([-1, 1], 25)
    times = np.arange(start, end) + 0.5
    light = ramped_light(t, p, times, c, ramp)
    # counted from the sum of the events before the exposure
    before = sum(c[0] if k > 0 else -c[1] for k, ti in zip(p, t, strict=True) if ti < start)
    mean = exponential_mean(*columns(t, p), (start, end), c, (1, 1), ramp)
    # 1 us midpoint rule of a curve with slopes up to 0.3 / 1 ms
    assert abs(mean[0, 0] / np.exp(light - before).mean() - 1) < 1e-6


def test_part_filled_is_the_light_between_two_events():
    rng = np.random.default_rng(7)
    ramp, c = 1_500, (0.2, 0.3)
    t = np.sort(rng.choice(np.arange(1_000, 12_000), 20, replace=False))
    p = rng.choice([-1, 1], 20)
    # some of the instants are those of events: half-open, such an event is not summed but wholly filled
    for time in [*range(500, 12_500, 333), *(int(k) for k in t)]:
        near = (t >= time - ramp) & (t < time + 2 * ramp)
        steps = sum(c[0] if k > 0 else -c[1] for k, ti in zip(p, t, strict=True) if ti < time)
        expected = ramped_light(t, p, np.array([float(time)]), c, ramp)[0]
        filled = part_filled(*columns(t[near], p[near]), time, c, (1, 1), ramp)
        assert np.isclose(steps + filled[0, 0], expected, atol=1e-12)


def test_steady_ramp_of_light_is_recovered_exactly():
    # Log light rising at a constant rate crosses a threshold every c / rate: events on that line, joined, are the line
    c, interval = 0.2, 1_000
    t = np.arange(1, 60) * interval
    start, end = 10_300, 30_300
    mean = exponential_mean(*columns(t, np.ones(59)), (start, end), (c, c), (1, 1), interval)
    rate = c / interval
    first = rate * (start - 10_000)
    exact = np.exp(first) * np.expm1(rate * (end - start)) / (rate * (end - start))
    assert abs(mean[0, 0] / exact - 1) < 1e-9
