"""Which pairs of keys calibration looks at."""

import numpy as np
import pytest

from enhance.calibrate.evidence import KEPT, LOOKED_AT, MOST_EVENTS, gather_pairs, thinned
from enhance.light import Light
from enhance.recording import Events, FrameArray


def frames_of(codes, times=None):
    start = np.arange(len(codes), dtype=np.int64) * 40_000 if times is None else np.asarray(times, np.int64)
    return FrameArray(np.asarray(codes, np.uint8), start, start + 500, Light("linear"))


def test_the_change_is_that_of_log_light_less_its_median():
    # half of the pixels brighten by 2 under a lamp that brightens all by 1.25
    first = np.full((4, 6), 40)
    second = np.full((4, 6), 50)
    second[0] = 100
    (pair,) = gather_pairs(frames_of([first, second]), [0, 1])
    np.testing.assert_allclose(pair.change[0], np.log(2.0), rtol=1e-6)
    np.testing.assert_allclose(pair.change[1:], 0, atol=1e-7)
    assert pair.usable.all()


def test_dark_and_clipped_pixels_are_not_usable_in_either_key():
    first, second = np.full((1, 6), 100), np.full((1, 6), 120)
    first[0, :2] = 0, 255
    second[0, 2:4] = 3, 250
    (pair,) = gather_pairs(frames_of([first, second]), [0, 1])
    assert pair.usable.tolist() == [[False, False, False, False, True, True]]
    assert (pair.change[~pair.usable] == 0).all()


def test_colour_is_looked_at_as_luma():
    codes = np.zeros((2, 1, 2, 3), np.uint8)
    codes[0], codes[1] = 60, [0, 100, 0]
    (pair,) = gather_pairs(frames_of(codes), [0, 1])
    assert pair.second.image[0, 0] == pytest.approx(0.7152 * 100 / 255, rel=1e-5)


def test_the_pairs_with_most_change_are_taken_in_time_order():
    rng = np.random.default_rng(1)
    still = rng.integers(60, 180, (8, 8))
    codes = np.repeat(still[None], 30, axis=0)
    for k in (4, 11, 25):
        codes[k] = rng.integers(60, 180, (8, 8))
    pairs = gather_pairs(frames_of(codes), range(30))
    starts = [pair.first.start_us // 40_000 for pair in pairs]
    assert len(pairs) == KEPT
    assert starts == sorted(starts)
    assert {3, 4, 10, 11, 24, 25} < set(starts)


def test_only_the_keys_are_looked_at_and_only_some_of_a_long_recording():
    looked = []

    class Watched(FrameArray):
        def frame(self, index):
            looked.append(index)
            return super().frame(index)

    codes = np.random.default_rng(2).integers(60, 180, (1000, 2, 2))
    start = np.arange(1000, dtype=np.int64) * 40_000
    frames = Watched(codes.astype(np.uint8), start, start, Light("linear"))
    keys = range(0, 1000, 2)
    assert len(gather_pairs(frames, keys)) == KEPT
    assert set(looked) <= set(keys)
    assert len(looked) == 2 * (LOOKED_AT + KEPT)
    # the looks are spread over all of it
    assert min(looked) == 0
    assert max(looked) == 998


def test_keys_over_a_gap_are_no_pair():
    rng = np.random.default_rng(3)
    codes = rng.integers(60, 180, (4, 5, 5))
    pairs = gather_pairs(frames_of(codes, [0, 40_000, 3_600_000_000, 3_600_040_000]), range(4))
    assert [pair.first.start_us for pair in pairs] == [0, 3_600_000_000]


@pytest.mark.parametrize("keys", [[], [3]])
def test_fewer_than_two_keys_make_no_pair(keys):
    assert gather_pairs(frames_of(np.full((5, 2, 2), 100)), keys) == []


def test_a_single_row_of_clipped_pixels_makes_a_pair_without_evidence():
    (pair,) = gather_pairs(frames_of(np.full((2, 1, 9), 255)), [0, 1])
    assert not pair.usable.any()
    assert not pair.change.any()


def test_a_pair_of_many_events_is_thinned_to_whole_rows():
    rng = np.random.default_rng(5)
    (pair,) = gather_pairs(frames_of(rng.integers(60, 180, (2, 10, 8))), [0, 1])
    n = 3 * MOST_EVENTS
    x, y = rng.integers(0, 8, n).astype(np.uint16), rng.integers(0, 10, n).astype(np.uint16)
    events = Events(np.arange(n), x, y, rng.choice(np.array([-1, 1], np.int8), n))
    few, kept = thinned(pair, events)
    # n / most + 1 = 4: rows 0, 4 and 8
    for whole, part in ((pair.change, few.change), (pair.usable, few.usable), (pair.second.image, few.second.image)):
        np.testing.assert_array_equal(part, whole[[0, 4, 8]])
    assert len(kept) <= MOST_EVENTS
    for row, old in enumerate((0, 4, 8)):
        np.testing.assert_array_equal(kept.t_us[kept.y == row], events.t_us[y == old])
    assert kept.y.dtype == np.uint16


def test_a_pair_of_few_events_is_left_whole():
    (pair,) = gather_pairs(frames_of(np.random.default_rng(6).integers(60, 180, (2, 10, 8))), [0, 1])
    assert thinned(pair, Events.none())[0] is pair
