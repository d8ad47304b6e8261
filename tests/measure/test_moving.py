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


def test_an_event_alone_in_time_or_place_does_not_move_anything():
    lonely = events((0, 10, 20), (20_000, 11, 20), (20_001, 20, 30))
    assert not moving_mask(lonely, (40, 30)).any()
    assert moving_mask(lonely, (40, 30), window_us=20_000).any()


def test_no_events_move_nothing():
    assert not moving_mask(Events.none(), (40, 30)).any()


def test_the_first_event_of_an_edge_is_kept_only_when_both_sides_count():
    edge = events((0, 10, 20), (1_000, 11, 20), (2_000, 12, 20))
    assert support_filter(edge, (40, 30)).tolist() == [True, True, True]
    assert support_filter(edge, (40, 30), both_sides=False).tolist() == [False, True, True]
