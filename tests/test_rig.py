"""Events moved into the frames' world: clock, crop, bad pixels."""

from dataclasses import replace

import numpy as np
import pytest

from enhance.recording import EventArray, Events
from enhance.rig import Quantity, Rig, RiggedEvents

WIDTH, HEIGHT = 12, 10
EPOCH_US = 1_589_163_147_364_965


def rig(offset=0, drift=0.0, hot=()):
    return Rig(
        Quantity(offset), Quantity(drift), Quantity(0.2), Quantity(0.3), Quantity(0), Quantity([list(p) for p in hot])
    )


def everywhere(start=0, step=10):
    """One event a pixel, row by row, `step` apart."""
    y, x = np.divmod(np.arange(WIDTH * HEIGHT), WIDTH)
    t = start + step * np.arange(WIDTH * HEIGHT, dtype=np.int64)
    events = Events(t, x.astype(np.uint16), y.astype(np.uint16), np.where(x % 2, 1, -1).astype(np.int8))
    return EventArray(events, (WIDTH, HEIGHT), cover=(start - 100, start + 5000))


def all_of(events):
    return events.between(events.cover_start_us, events.cover_end_us)


@pytest.mark.parametrize(("start", "offset"), [(0, 0), (0, 6_700), (EPOCH_US, -EPOCH_US), (-500, EPOCH_US)])
def test_an_offset_moves_times_cover_and_windows_alike(start, offset):
    source = everywhere(start)
    events = RiggedEvents(source, rig(offset), (WIDTH, HEIGHT))
    np.testing.assert_array_equal(all_of(events).t_us, source.events.t_us + offset)
    assert (events.first_us, events.last_us) == (source.first_us + offset, source.last_us + offset)
    assert (events.cover_start_us, events.cover_end_us) == (start - 100 + offset, start + 5000 + offset)
    assert events.count == source.count == events.count_between(events.cover_start_us, events.cover_end_us)


@pytest.mark.parametrize("drift", [-1000.0, -80.0, 35.5, 1000.0])
def test_under_drift_neighbouring_windows_still_share_out_all_events(drift):
    source = everywhere(EPOCH_US, step=7)
    events = RiggedEvents(source, rig(-EPOCH_US + 3, drift), (WIDTH, HEIGHT))
    # t_frame = t_event + offset + 1e-6 drift (t_event - t_first_event), floored
    elapsed = source.events.t_us - EPOCH_US
    expected = elapsed + 3 + np.floor(drift * elapsed / 1e6).astype(np.int64)
    np.testing.assert_array_equal(all_of(events).t_us, expected)
    borders = list(range(0, 1000, 13))
    parts = [events.between(a, b) for a, b in zip(borders[:-1], borders[1:], strict=True)]
    for part, a, b in zip(parts, borders[:-1], borders[1:], strict=True):
        assert ((part.t_us >= a) & (part.t_us < b)).all()
    assert sum(len(part) for part in parts) == WIDTH * HEIGHT


def test_windows_are_half_open_in_the_frame_clock():
    events = RiggedEvents(everywhere(), rig(5), (WIDTH, HEIGHT))
    assert events.between(15, 25).t_us.tolist() == [15]
    assert events.between(16, 26).t_us.tolist() == [25]
    assert len(events.between(25, 25)) == 0


def test_cover_says_whether_the_sensor_recorded_all_through():
    events = RiggedEvents(everywhere(), rig(1_000), (WIDTH, HEIGHT))
    assert events.covers(900, 6_000)
    assert not events.covers(899, 2_000)
    assert not events.covers(2_000, 6_001)


def test_a_sensor_of_the_whole_frames_size_is_cropped_with_it():
    source = everywhere()
    events = RiggedEvents(source, rig(), (5, 4), crop_origin=(3, 2), full_size=(WIDTH, HEIGHT))
    seen = all_of(events)
    whole = source.events
    inside = (whole.x >= 3) & (whole.x < 8) & (whole.y >= 2) & (whole.y < 6)
    np.testing.assert_array_equal(seen.x, whole.x[inside] - 3)
    np.testing.assert_array_equal(seen.y, whole.y[inside] - 2)
    np.testing.assert_array_equal(seen.t_us, whole.t_us[inside])
    np.testing.assert_array_equal(seen.polarity, whole.polarity[inside])
    assert [c.dtype for c in (seen.t_us, seen.x, seen.y, seen.polarity)] == [np.int64, np.uint16, np.uint16, np.int8]
    assert events.size == (5, 4)


def test_a_sensor_of_the_cropped_size_matches_the_crop_as_it_is():
    events = RiggedEvents(everywhere(), rig(), (WIDTH, HEIGHT), crop_origin=(3, 2), full_size=(40, 30))
    assert len(all_of(events)) == WIDTH * HEIGHT


def test_events_outside_a_smaller_frame_are_dropped():
    # a sensor of a third size: neither the crop's nor the whole frame's
    events = RiggedEvents(everywhere(), rig(), (6, 20))
    seen = all_of(events)
    assert len(seen) == 6 * HEIGHT
    assert seen.x.max() == 5


def test_hot_pixels_are_sensor_pixels_and_show_what_the_pixel_beside_them_saw():
    # (3, 2) is the crop's corner, (11, 9) beyond it; (7, 5) stands at its right border, and (8, 5) outside is hot too
    hot = [(3, 2), (11, 9), (7, 5), (8, 5)]
    plain, clean = (
        all_of(RiggedEvents(everywhere(), r, (5, 4), (3, 2), (WIDTH, HEIGHT))) for r in (rig(), rig(hot=hot))
    )
    seen, kept = (
        {(x, y): (t, p) for t, x, y, p in zip(*(c.tolist() for c in (e.t_us, e.x, e.y, e.polarity)), strict=True)}
        for e in (plain, clean)
    )
    assert kept == seen | {(0, 0): seen[1, 0], (4, 3): seen[3, 3]}
    assert (np.diff(clean.t_us) >= 0).all()


def test_a_pixel_stands_in_for_one_hot_pixel_at_the_most_and_a_lone_one_stays_empty():
    # the whole sensor is hot but for one pixel
    hot = [(x, y) for y in range(HEIGHT) for x in range(WIDTH) if (x, y) != (5, 5)]
    seen = all_of(RiggedEvents(everywhere(), rig(hot=hot), (WIDTH, HEIGHT)))
    assert sorted(zip(seen.x.tolist(), seen.y.tolist(), strict=True)) == [(5, 4), (5, 5)]


def test_noise_of_the_frames_is_floor_and_shot_in_quadrature():
    # variance = floor^2 + shot * light
    known = Rig(*[Quantity(0)] * 4, frame_noise=Quantity([0.003, 1e-4]))
    found = known.noise(np.float32([-1.0, 0.0, 0.16]))
    assert found.dtype == np.float32
    np.testing.assert_allclose(found, [0.003, 0.003, 0.005], rtol=1e-5)


def test_contrast_carries_the_ramp():
    contrast = Rig(Quantity(0), Quantity(0.0), Quantity(0.2), Quantity(0.3), Quantity(1500)).contrast
    assert (contrast.positive, contrast.negative, contrast.ramp_us) == (0.2, 0.3, 1500)


def apart(matrix, hot=(), offset=0):
    return replace(rig(offset, hot=hot), registration=Quantity(matrix), sensor_size=(WIDTH, HEIGHT))


def test_an_event_stands_at_every_frame_pixel_it_covers_once():
    # 2 e + 0.5: two frame pixels an event pixel either way
    events = RiggedEvents(everywhere(), apart([[2, 0, 0.5], [0, 2, 0.5], [0, 0, 1]]), (2 * WIDTH, 2 * HEIGHT))
    seen = all_of(events)
    assert len(seen) == 4 * WIDTH * HEIGHT
    assert (np.diff(seen.t_us) >= 0).all()
    source = everywhere().events
    np.testing.assert_array_equal(seen.t_us, np.repeat(source.t_us, 4))
    np.testing.assert_array_equal(seen.polarity, np.repeat(source.polarity, 4))
    np.testing.assert_array_equal(seen.x // 2, np.repeat(source.x, 4))
    np.testing.assert_array_equal(seen.y // 2, np.repeat(source.y, 4))
    assert len(set(zip(seen.x.tolist(), seen.y.tolist(), strict=True))) == 4 * WIDTH * HEIGHT
    assert events.seen is None
    assert events.pitch == pytest.approx(2)


def test_a_mirror_image_is_turned_back():
    events = RiggedEvents(everywhere(), apart([[-1, 0, WIDTH - 1], [0, 1, 0], [0, 0, 1]]), (WIDTH, HEIGHT))
    source = everywhere().events
    np.testing.assert_array_equal(all_of(events).x, WIDTH - 1 - source.x)
    np.testing.assert_array_equal(all_of(events).y, source.y)


def test_a_crop_sees_its_part_of_what_the_whole_frame_sees():
    turned = apart([[1.6, -0.3, 4], [0.3, 1.6, -2], [0, 0, 1]])
    whole = all_of(RiggedEvents(everywhere(), turned, (24, 18)))
    part = all_of(RiggedEvents(everywhere(), turned, (10, 9), (6, 5), (24, 18)))
    inside = (whole.x >= 6) & (whole.x < 16) & (whole.y >= 5) & (whole.y < 14)
    kept = whole.keep(inside)
    assert len(kept) > 50
    np.testing.assert_array_equal(part.t_us, kept.t_us)
    assert set(zip(part.t_us.tolist(), part.x + 6, part.y + 5, strict=True)) == set(
        zip(kept.t_us.tolist(), kept.x, kept.y, strict=True)
    )


def test_outside_the_overlap_nothing_is_seen_and_a_mask_says_so():
    events = RiggedEvents(everywhere(), apart([[1, 0, 5], [0, 1, 0], [0, 0, 1]]), (WIDTH, HEIGHT))
    assert not events.seen[:, :5].any()
    assert events.seen[:, 5:].all()
    seen = all_of(events)
    assert seen.x.min() == 5
    assert len(seen) == (WIDTH - 5) * HEIGHT
    coarse = RiggedEvents(everywhere(), apart([[2, 0, 6.5], [0, 2, 0.5], [0, 0, 1]]), (2 * WIDTH, 2 * HEIGHT))
    assert not coarse.seen[:, :6].any()
    assert coarse.seen[:, 6:].all()


def test_neighbouring_windows_share_out_spread_events():
    events = RiggedEvents(everywhere(), apart([[3, 0, 1], [0, 3, 1], [0, 0, 1]], offset=7), (3 * WIDTH, 3 * HEIGHT))
    parts = [events.between(t, t + 90) for t in range(0, 1300, 90)]
    assert sum(len(part) for part in parts) == 9 * WIDTH * HEIGHT


def test_a_hot_pixels_stand_in_is_spread_as_well():
    doubled = [[2, 0, 0.5], [0, 2, 0.5], [0, 0, 1]]
    seen = all_of(RiggedEvents(everywhere(), apart(doubled, hot=[(3, 2)]), (2 * WIDTH, 2 * HEIGHT)))
    assert len(seen) == 4 * WIDTH * HEIGHT


def test_thresholds_are_not_rescaled_and_know_how_wide_an_event_pixel_is():
    known = apart([[4, 0, 1.5], [0, 4, 1.5], [0, 0, 1]])
    assert known.contrast.thresholds == (0.2, 0.3)
    assert known.contrast.pitch == pytest.approx(4)
    assert rig().contrast.pitch == apart(np.eye(3).tolist()).contrast.pitch == 1.0
