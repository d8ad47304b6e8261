"""A lamp's flicker is found in the events, told apart from motion, and taken out of events and frames."""

from dataclasses import dataclass

import numpy as np
import pytest

from enhance.calibrate.even_light import brightness, evenly_lit, find_beat, lamp_told
from enhance.calibrate.flicker import find_flicker
from enhance.calibrate.steady import SteadyEvents, in_steady_light
from enhance.kernels.event_integral import event_counts
from enhance.recording import EventArray, Events
from enhance.rig import Quantity, Rig, RiggedEvents
from enhance.simulate import Camera, EventSensor, make_scene, simulate

SIZE = (72, 56)


@dataclass(frozen=True)
class Still:
    """A picture that does not move, grey from dark to bright."""

    name: str = "still"
    size: tuple = SIZE
    speed_px_s: float = 0.0

    def render(self, t_s):
        row = np.linspace(0.15, 0.7, SIZE[0], dtype=np.float32)
        return np.broadcast_to(row, (SIZE[1], SIZE[0])).copy()


def recorded(scene, hertz=100.0, depth=0.2, seconds=0.3, **camera):
    sensor = EventSensor(0.2, 0.23, mismatch=0.03, noise_hz=0.5, lamp_hz=hertz, lamp_depth=depth)
    return simulate(scene, Camera(**{"rate_hz": 36.0, "exposure_us": 6_000, **camera}), sensor, seconds, 3)


def moving(kind, **options):
    return recorded(make_scene(kind, SIZE, np.random.default_rng(6), 400.0), **options)


def rig_of(hertz=None):
    known = Quantity(0), Quantity(0.0), Quantity(0.2), Quantity(0.23)
    return Rig(*known, sensor_size=SIZE, flicker_hz=Quantity(hertz), flicker_in_frames=Quantity(1))


def placed(simulated, rig):
    return RiggedEvents(in_steady_light(simulated.recording.events, rig), rig, SIZE)


# lamps on 50 / 60 Hz mains flicker at 100 / 120 Hz (common practice); dimmers pulse at up to 2 kHz
@pytest.mark.parametrize("hertz", [100.0, 120.0, 99.7, 430.0, 2_000.0])
def test_the_frequency_is_found_to_a_thousandth(hertz):
    found = find_flicker(moving("parts", hertz=hertz, seconds=0.3 if hertz < 500 else 0.1).recording.events)
    assert found.value == pytest.approx(hertz, rel=1e-3)
    assert "in step" in found.evidence


@pytest.mark.parametrize("kind", ["texture", "fan", "drops", "text"])
def test_what_moves_under_steady_light_is_no_lamp(kind):
    found = find_flicker(moving(kind, depth=0.0).recording.events)
    assert found.value is None
    assert "no frequency at which the whole picture" in found.evidence


def test_a_blinking_part_of_the_picture_is_no_lamp():
    # one block of pixels in sixteen brightens and darkens at 100 Hz, all others by chance
    t = np.repeat(np.arange(0, 400_000, 5_000), 100)
    rng = np.random.default_rng(4)
    noise = np.sort(rng.integers(0, 400_000, 60_000))
    x = np.concatenate([rng.integers(0, 10, len(t)), rng.integers(0, SIZE[0], len(noise))])
    y = np.concatenate([rng.integers(0, 10, len(t)), rng.integers(0, SIZE[1], len(noise))])
    sign = np.concatenate([1 - 2 * (t // 5_000 % 2), rng.choice([-1, 1], len(noise))])
    both = np.concatenate([t, noise])
    order = np.argsort(both, kind="stable")
    columns = both[order], x[order].astype(np.uint16), y[order].astype(np.uint16), sign[order].astype(np.int8)
    assert find_flicker(EventArray(Events(*columns), SIZE)).value is None


def test_too_few_cycles_tell_nothing():
    found = find_flicker(recorded(Still(), seconds=0.05).recording.events)
    assert found.value is None
    assert "0.05 s of events" in found.evidence or "only 0.0" in found.evidence


@pytest.mark.parametrize("depth", [0.2, 0.4])
def test_depth_and_phase_are_told_with_their_uncertainty(depth):
    simulated = recorded(Still(), depth=depth)
    rig = rig_of(100.0)
    rig = lamp_told(rig, simulated.recording.frames, range(3), placed(simulated, rig))
    assert rig.flicker_depth.value == pytest.approx(depth, rel=0.06)
    assert 0 < rig.flicker_depth.uncertainty < 0.1 * depth
    true = 2 * np.pi * 100e-6 * simulated.recording.events.first_us
    away = (rig.flicker_phase.value - true + np.pi) % (2 * np.pi) - np.pi
    assert abs(away) < 0.1


def test_a_still_scene_under_a_lamp_has_hardly_an_event_left():
    simulated = recorded(Still())
    steady = SteadyEvents(simulated.recording.events, 100.0)
    # noise of 0.5 Hz a pixel stays: 600 events, told in halves
    assert len(steady.between(0, 300_000)) < 0.03 * simulated.recording.events.count


def test_events_without_the_lamp_tell_the_scenes_change_about_as_well_as_steady_light():
    lit, steady = (moving("drops", depth=depth) for depth in (0.2, 0.0))
    start, end = 100_000, 130_000
    truth = np.log(steady.scene.render(end * 1e-6) / steady.scene.render(start * 1e-6))

    def error(events, step):
        seen = events.between(start, end)
        count = event_counts(seen.x, seen.y, seen.polarity, SIZE[::-1])
        return np.sqrt(np.mean((step * (0.2 * count[0] - 0.23 * count[1]) - truth) ** 2))

    usual = error(steady.recording.events, 1.0)
    assert error(SteadyEvents(lit.recording.events, 100.0), 0.5) < 1.4 * usual


def test_windows_do_not_change_what_is_told():
    steady = SteadyEvents(moving("parts").recording.events, 100.0)
    whole = steady.between(40_000, 280_000)
    parts = [steady.between(t, t + 30_000) for t in range(40_000, 280_000, 30_000)]
    for name in ("t_us", "x", "y", "polarity"):
        np.testing.assert_array_equal(getattr(whole, name), np.concatenate([getattr(p, name) for p in parts]))


def test_frames_that_beat_with_the_lamp_are_brought_to_one_brightness():
    simulated = recorded(Still(), depth=0.3)
    frames, rig = simulated.recording.frames, rig_of(100.0)
    even = evenly_lit(frames, placed(simulated, rig), rig)
    captured = [float(frames.frame(k).image.mean()) for k in range(len(frames))]
    brought = [float(even.frame(k).image.mean()) for k in range(len(frames))]
    assert np.ptp(captured) / np.mean(captured) > 0.08
    assert np.ptp(brought) / np.mean(brought) < 0.015
    assert np.mean(brought) == pytest.approx(float(simulated.truth(0).mean()), rel=0.02)


def test_an_exposure_of_whole_cycles_has_the_lamps_mean_light():
    # sinc(f T) is 0 at 10 ms for 100 Hz (computed)
    simulated = recorded(Still())
    rig = rig_of(100.0)
    assert brightness(placed(simulated, rig), rig, 31_000, 41_000) == pytest.approx(1.0, abs=0.01)


@pytest.mark.parametrize("sees", [True, False])
def test_frames_that_do_not_see_the_lamp_stay_as_they_are(sees):
    simulated = recorded(Still(), depth=0.3, sees_lamp=sees)
    rig = rig_of(100.0)
    events = placed(simulated, rig)
    found = find_beat(simulated.recording.frames, range(len(simulated.recording.frames)), events, rig)
    assert found.value == int(sees)
    assert "between frames" in found.evidence


def test_without_a_lamp_events_and_frames_are_the_very_same():
    simulated = recorded(Still(), depth=0.0, seconds=0.1)
    rig = rig_of(None)
    assert in_steady_light(simulated.recording.events, rig) is simulated.recording.events
    frames = simulated.recording.frames
    assert evenly_lit(frames, placed(simulated, rig), rig) is frames
    assert rig.parts == 1


def test_a_scene_that_repeats_by_itself_is_not_taken_for_a_lamp() -> None:
    """A printed label passing by, under steady light: its rows repeat some 50 times a second."""
    from enhance.calibrate.steady import flicker_of
    from enhance.simulate.benchmark import FIRST_SEED, Benchmark

    label = Benchmark("label", FIRST_SEED + 312, 16.0, 0.5, (0.2, 0.2), frames=9, size=(160, 120))
    assert flicker_of(label.record().recording.events).value is None
