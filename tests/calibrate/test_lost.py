"""Lost events are found with their times; scenes that lost none are left alone; nothing rests on such a stretch."""

from functools import cache

import numpy as np
import pytest

from enhance.calibrate.hot_pixels import find_dead_pixels
from enhance.calibrate.lost import find_lost, lost_stretches
from enhance.calibrate.steady import SteadyEvents
from enhance.recording import EventArray, Events
from enhance.rig import Quantity, Rig, RiggedEvents
from enhance.simulate import Camera, EventSensor, make_scene, simulate
from enhance.simulate.lost import with_bunch, with_gap, with_plateau

SIZE = (96, 80)


@cache
def clean(kind="texture", depth=0.0):
    scene = make_scene(kind, SIZE, np.random.default_rng(6), 500.0)
    sensor = EventSensor(0.2, 0.23, mismatch=0.03, noise_hz=0.5, lamp_depth=depth)
    return simulate(scene, Camera(rate_hz=36.0, exposure_us=12_000), sensor, 0.3, 3)


def stretches(simulated, kind):
    return [lost for lost in lost_stretches(simulated.recording.events) if lost.kind == kind]


@pytest.mark.parametrize("kind", ["parts", "texture", "fan", "drops", "text"])
@pytest.mark.parametrize("depth", [0.0, 0.2])
def test_recordings_that_lost_nothing_are_left_alone(kind, depth):
    found = find_lost(clean(kind, depth).recording.events)
    assert found.value == []
    assert found.evidence == "no stretch in which events are missing"


@pytest.mark.parametrize("kind", ["parts", "fan", "drops", "text"])
def test_clean_recordings_have_no_dead_pixels(kind):
    assert find_dead_pixels(clean(kind).recording.events).value == []
    assert find_dead_pixels(SteadyEvents(clean(kind, 0.2).recording.events, 100.0)).value == []


@pytest.mark.parametrize("kind", ["texture", "drops"])
def test_a_gap_is_found_to_a_slab(kind):
    (found,) = stretches(with_gap(clean(kind), 120_000, 132_000), "gap")
    assert 115_000 <= found.start_us <= 120_000
    assert 132_000 <= found.end_us <= 137_000
    assert found.share == 1.0


def test_a_band_of_rows_is_found_with_its_rows():
    (found,) = stretches(with_gap(clean(), 150_000, 170_000, (20, 40)), "row band")
    assert found.start_us <= 150_000 <= found.start_us + 5_000
    assert found.end_us - 5_000 <= 170_000 <= found.end_us
    assert found.share == pytest.approx(20 / 80)
    assert "rows 20 to 39" in found.words(0)


def test_a_full_link_is_told_by_a_rate_that_is_flat_at_its_highest():
    rate = np.bincount(clean().recording.events.events.t_us // 1_000)
    found = stretches(with_plateau(clean(), int(np.percentile(rate, 40))), "plateau")
    assert sum(lost.end_us - lost.start_us for lost in found) > 100_000
    assert "million events a second" in found[0].words(0)


def test_a_buffer_emptied_late_is_a_gap_and_a_bunch():
    simulated = with_bunch(clean(), 80_000, 90_000)
    assert len(stretches(simulated, "bunch")) == 1
    (gap,) = stretches(simulated, "gap")
    assert gap.start_us <= 80_000
    assert gap.end_us >= 90_000


def test_what_comes_to_rest_by_itself_is_no_gap():
    rng = np.random.default_rng(3)
    # the rate falls to nothing over 60 ms and rises again, three times
    t = np.arange(600_000)
    chance = 0.02 * np.maximum(np.sin(2 * np.pi * t / 200_000), 0) ** 2
    times = t[rng.random(len(t)) < chance]
    x, y = (rng.integers(0, side, len(times)).astype(np.uint16) for side in SIZE)
    events = Events(times, x, y, rng.choice([-1, 1], len(times)).astype(np.int8))
    assert lost_stretches(EventArray(events, SIZE)) == []


def test_what_rests_on_lost_events_is_not_covered():
    source = with_gap(clean(), 120_000, 132_000).recording.events
    known = Quantity(1_000), Quantity(0.0), Quantity(0.2), Quantity(0.23)
    events = RiggedEvents(source, Rig(*known, sensor_size=SIZE, lost=find_lost(source)), SIZE)
    assert events.covers(20_000, 110_000)
    assert not events.covers(110_000, 125_000)
    assert events.lost_share(110_000, 125_000) == 1.0
    assert events.lost_share(20_000, 110_000) == 0.0
    assert events.covers(140_000, 200_000)


def test_a_full_link_gives_less_trust_but_still_events():
    known = Quantity(0), Quantity(0.0), Quantity(0.2), Quantity(0.23)
    rig = Rig(*known, sensor_size=SIZE, lost=Quantity([[50_000, 60_000, 0.05]]))
    events = RiggedEvents(clean().recording.events, rig, SIZE)
    assert events.covers(40_000, 70_000)
    assert events.lost_share(40_000, 70_000) == pytest.approx(0.05)


def test_a_dead_pixel_is_found_and_quiet_ones_are_not():
    events = clean().recording.events.events
    dead = [[40, 30], [0, 0], [41, 30]]
    alive = np.ones(len(events), bool)
    for x, y in dead:
        alive &= (events.x != x) | (events.y != y)
    assert find_dead_pixels(clean().recording.events).value == []
    assert sorted(find_dead_pixels(EventArray(events.keep(alive), SIZE)).value) == sorted(dead)
    # only one corner moves: what is still elsewhere is not dead
    corner = events.keep((events.x < 20) & (events.y < 20))
    found = find_dead_pixels(EventArray(corner, SIZE))
    assert found.value == []
    assert "busy enough to tell" in found.evidence
