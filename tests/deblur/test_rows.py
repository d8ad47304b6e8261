"""Rows brought to one instant, against sums worked out by hand and light known at every time."""

import numpy as np
import pytest

from enhance.deblur import Evidence, couple, latent_at_one_instant, row_change
from enhance.recording import Contrast, Events

SHAPE = (4, 2)
CONTRAST = Contrast(0.2, 0.3)
#: Rows 0 to 3 stand at -200, -100, 0 and 100 us from the frame's time, 1000.
DELAYS = np.array([-200, -100, 0, 100])


def events(*rows):
    t, x, y, p = zip(*sorted(rows), strict=True)
    return Events(np.array(t, np.int64), np.array(x, np.uint16), np.array(y, np.uint16), np.array(p, np.int8))


def test_only_events_between_a_rows_own_instant_and_the_frames_count():
    # row 0: at 800, so 799 lies before, 800 and 999 between, 1000 behind; row 3: at 1100
    seen = events((799, 0, 0, 1), (800, 0, 0, 1), (999, 0, 0, -1), (1000, 0, 0, 1), (1050, 1, 3, 1), (1100, 1, 3, 1))
    change, count = row_change(seen, DELAYS, 1_000, CONTRAST, SHAPE)
    assert change[0, 0] == pytest.approx(0.2 - 0.3)
    # the row stands later than the frame: brighter by an event there, darker here
    assert change[3, 1] == pytest.approx(-0.2)
    assert count[0, 0] == 2
    assert count[3, 1] == 1
    assert np.count_nonzero(change) == 2


def test_with_ramps_steady_change_is_followed_between_the_events():
    # log light grows by 0.2 every 100 us in all pixels: an event at each full step, and 37 us past one at the frame's
    rows = [(t, x, y, 1) for t in range(37, 2_000, 100) for x in range(2) for y in range(4)]
    change, _ = row_change(events(*rows), DELAYS, 1_000, Contrast(0.2, 0.3, 150), SHAPE)
    expected = np.repeat(-0.2 * DELAYS[:, None] / 100, 2, axis=1)
    np.testing.assert_allclose(change, expected, atol=1e-9)


def window(keys, step):
    """Keys whose log light rises by `step` a key in row time, known exactly."""
    own = [Evidence(np.full(SHAPE, k * step), np.full(SHAPE, 100.0)) for k in range(keys)]
    change = [Evidence(np.full(SHAPE, step), np.full(SHAPE, 40.0)) for _ in range(keys - 1)]
    return own, change


@pytest.mark.parametrize("at", [0, 2, 4])
def test_where_all_evidence_agrees_the_latent_is_the_keys_plus_the_change(at):
    own, change = window(5, 0.4)
    moved = np.array([[0.08], [0.04], [0.0], [-0.04]]) * np.ones(SHAPE)
    found = latent_at_one_instant(own, change, at, (moved, np.ones(SHAPE)), DELAYS, (1_000, 1_000), CONTRAST)
    np.testing.assert_allclose(found, at * 0.4 + moved, atol=1e-6)


def test_a_row_without_delay_is_the_multi_frame_integrals_own():
    rng = np.random.default_rng(5)
    own = [Evidence(rng.normal(size=SHAPE), rng.uniform(1, 9, SHAPE)) for _ in range(5)]
    change = [Evidence(rng.normal(size=SHAPE), rng.uniform(1, 9, SHAPE)) for _ in range(4)]
    nothing = (np.zeros(SHAPE), np.zeros(SHAPE))
    found = latent_at_one_instant(own, change, 2, nothing, np.zeros(4, int), (1_000, 1_000), CONTRAST)
    plain = couple(
        [e.value for e in own], [e.value for e in change], 2, [e.weight for e in own], [e.weight for e in change]
    )
    np.testing.assert_allclose(found, plain, atol=1e-4)


def test_the_nearer_key_counts_more_the_further_one_too():
    # The key after says the light is 1 higher than the events lead there: a row that stands early, so that the
    # frame's time lies between the two keys, hears of it, one that stands late much less.
    own, change = window(3, 0.0)
    own[2] = Evidence(np.ones(SHAPE), np.full(SHAPE, 1e9))
    delays = np.array([-400, -400, 400, 400])
    none = (np.zeros(SHAPE), np.zeros(SHAPE))
    found = latent_at_one_instant(own, change, 1, none, delays, (1_000, 1_000), CONTRAST)
    assert 0.1 < found[0, 0] < 0.9
    assert found[3, 0] < 0.6 * found[0, 0]
