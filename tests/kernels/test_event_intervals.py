import numpy as np

from enhance.kernels.event_intervals import burst_intervals


def test_only_events_of_one_pixel_and_one_sign_in_a_row_count():
    #        pixel a: + + - - +, pixel b: + +
    t = np.array([10, 12, 15, 30, 31, 40, 90], np.int64)
    x = np.array([0, 1, 0, 0, 1, 0, 0], np.uint16)
    polarity = np.array([1, 1, 1, -1, 1, -1, 1], np.int8)
    found = burst_intervals(t, x, np.zeros(7, np.uint16), polarity, (1, 2))
    assert found.dtype == np.int64
    assert found.tolist() == [5, 19, 10]


def test_equals_a_plain_sort_by_pixel_at_epoch_sized_times():
    rng = np.random.default_rng(1)
    n = 3_000
    t = 1_589_163_147_364_965 + np.sort(rng.integers(0, 100_000, n))
    x, y = rng.integers(0, 9, n).astype(np.uint16), rng.integers(0, 7, n).astype(np.uint16)
    polarity = rng.choice(np.array([-1, 1], np.int8), n)
    order = np.argsort(y.astype(int) * 9 + x, kind="stable")
    pixel, sign, times = (y.astype(int) * 9 + x)[order], polarity[order], t[order]
    same = (np.diff(pixel) == 0) & (np.diff(sign) == 0)
    expected = np.diff(times)[same]
    np.testing.assert_array_equal(np.sort(burst_intervals(t, x, y, polarity, (7, 9))), np.sort(expected))


def test_no_events_have_no_intervals():
    none = np.empty(0, np.uint16)
    assert burst_intervals(np.empty(0, np.int64), none, none, np.empty(0, np.int8), (3, 4)).size == 0
