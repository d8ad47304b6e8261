"""Which pixels move."""

import numpy as np

from enhance.measure import moving_mask, support_filter
from enhance.recording import Events


def events(*rows: tuple[int, int, int]) -> Events:
    t, x, y = np.array(rows, dtype=np.int64).reshape(-1, 3).T
    return Events(t.copy(), x.astype(np.uint16), y.astype(np.uint16), np.ones(len(rows), np.int8))


def test_the_square_of_five_around_an_event_with_company_moves():
    mask = moving_mask(events((0, 10, 20), (500, 11, 20)), (40, 30))
    wanted = np.zeros((40, 30), bool)
    wanted[18:23, 8:14] = True
    np.testing.assert_array_equal(mask, wanted)


def test_squares_are_cut_at_the_border():
    mask = moving_mask(events((0, 0, 0), (1, 1, 1), (2, 29, 39), (3, 28, 39)), (40, 30))
    assert mask[:4, :4].all()
    assert mask[37:, 26:].all()
    assert mask.sum() == 4 * 4 + 3 * 4


def test_few_lone_events_count_as_moving_and_many_do_not():
    # One lone event covers 25 of 9 600 pixels; noise of 2 % of the pixels would cover some 40 % of the picture
    lonely = events((0, 10, 20), (20_000, 50, 60))
    assert moving_mask(lonely, (120, 80)).sum() == 2 * 25
    rng = np.random.default_rng(3)
    pixels = rng.permutation(120 * 80)[:190]
    noise = events(*((25_000 * k, p % 80, p // 80) for k, p in enumerate(pixels.tolist())))
    assert not moving_mask(noise, (120, 80)).any()


def test_the_window_of_the_noise_filter_is_the_callers():
    rng = np.random.default_rng(4)
    pixels = rng.permutation(40 * 30)[:40]
    noise = [(25_000 * k, p % 30, p // 30) for k, p in enumerate(pixels.tolist())]
    pair = [(2_000_000, 10, 20), (2_015_000, 11, 20)]
    assert not moving_mask(events(*noise, *pair), (40, 30)).any()
    assert moving_mask(events(*noise, *pair), (40, 30), window_us=20_000)[20, 10]


def test_no_events_move_nothing():
    assert not moving_mask(Events.none(), (40, 30)).any()


def test_the_first_event_of_an_edge_is_kept_only_when_both_sides_count():
    edge = events((0, 10, 20), (1_000, 11, 20), (2_000, 12, 20))
    assert support_filter(edge, (40, 30)).tolist() == [True, True, True]
    assert support_filter(edge, (40, 30), both_sides=False).tolist() == [False, True, True]
