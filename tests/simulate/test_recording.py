"""A scene through both instruments: reproducible, consistent, on the clocks it says."""

import subprocess
import sys

import numpy as np
import pytest

from enhance.clock import ClockMap
from enhance.simulate import BENCHMARK, KINDS, Camera, EventSensor, benchmark_recordings, make_scene, simulate
from enhance.simulate.benchmark import FIRST_SEED, Benchmark
from enhance.simulate.recording import STEP_PX, _instants
from enhance.simulate.scene import LayeredScene, Still

SIZE = (64, 48)


def scene(seed=3, color=False):
    return make_scene("texture", SIZE, np.random.default_rng(seed), 500.0, color=color)


CAMERA = Camera(rate_hz=50.0, exposure_us=10_000, bits=16, full_well=None)


def columns(simulated):
    events = simulated.recording.events.events
    return [events.t_us.tobytes(), events.x.tobytes(), events.y.tobytes(), events.polarity.tobytes()]


def test_the_seed_gives_the_same_bytes_and_another_seed_does_not():
    sensor = EventSensor(mismatch=0.03, noise_hz=5.0, latency_jitter_us=30.0)
    noisy = Camera(rate_hz=50.0, exposure_us=10_000)
    first, again, other = (simulate(scene(), noisy, sensor, 0.08, seed) for seed in (1, 1, 2))
    assert columns(first) == columns(again)
    assert first.recording.frames.codes.tobytes() == again.recording.frames.codes.tobytes()
    assert columns(first) != columns(other)
    assert first.recording.frames.codes.tobytes() != other.recording.frames.codes.tobytes()


@pytest.mark.parametrize(("offset", "drift"), [(0, 0.0), (-7300, 0.0), (4100, 900.0), (-1_700_000_000_000_000, -80.0)])
def test_the_clock_formula_leads_event_times_back_to_the_scene(offset, drift):
    plain = simulate(scene(), CAMERA, EventSensor(), 0.08, 1)
    moved = simulate(scene(), CAMERA, EventSensor(), 0.08, 1, clock_offset_us=offset, drift_ppm=drift)
    source = moved.recording.events
    # the formula of the job's contract, with the first event as its origin
    back = ClockMap(offset, drift, source.first_us).to_frame(source.events.t_us)
    assert np.abs(back - plain.recording.events.events.t_us).max() <= 1
    np.testing.assert_array_equal(moved.clock.to_frame(source.events.t_us), back)
    edges = moved.clock.to_frame(np.array([source.cover_start_us, source.cover_end_us]))
    np.testing.assert_allclose(edges, [0, 80_000], atol=1)
    np.testing.assert_array_equal(moved.recording.frames.start_us, plain.recording.frames.start_us)


@pytest.mark.parametrize("color", [False, True])
def test_a_noise_free_frame_is_the_mean_of_the_truth_over_its_exposure(color):
    simulated = simulate(scene(color=color), CAMERA, EventSensor(), 0.05, 1)
    frame = simulated.recording.frames.frame(1)
    assert frame.image.shape == ((48, 64, 3) if color else (48, 64))
    instants = np.arange(frame.start_us, frame.end_us, 50) + 25
    mean = np.mean([simulated.truth(t) for t in instants], axis=0)
    np.testing.assert_allclose(frame.image, mean, atol=1.5e-3)


def test_the_truth_of_a_highlight_ends_at_full_scale_and_the_event_sensor_sees_beyond():
    glare = LayeredScene("glare", SIZE, (Still(np.full((48, 64, 1), 1.7, np.float32)),))
    simulated = simulate(glare, CAMERA, EventSensor(), 0.05, 1)
    np.testing.assert_array_equal(simulated.truth(20_000), np.float32(1.0))
    assert (simulated.recording.frames.codes == 65_535).all()
    np.testing.assert_allclose(simulated.scene.render(0.02), 1.7, rtol=1e-6)


def test_events_carry_the_change_of_log_light_to_within_both_thresholds():
    simulated = simulate(scene(), CAMERA, EventSensor(0.15, 0.2), 0.06, 1)
    events = simulated.recording.events.between(10_000, 50_000)
    up, down = (
        np.histogram2d(part.y, part.x, bins=(48, 64), range=((-0.5, 47.5), (-0.5, 63.5)))[0]
        for part in (events.keep(events.polarity > 0), events.keep(events.polarity < 0))
    )
    change = np.log(simulated.truth(50_000)) - np.log(simulated.truth(10_000))
    # both ends lie within the dead band of width c+ + c-; the truth is drawn off the sensor's own instants
    assert np.quantile(np.abs(0.15 * up - 0.2 * down - change), 0.999) < 0.36
    assert len(events) > 5 * 48 * 64


def test_events_are_sorted_within_cover_and_on_the_sensor():
    sensor = EventSensor(noise_hz=2.0, latency_us=200.0, latency_jitter_us=50.0)
    simulated = simulate(scene(), CAMERA, sensor, 0.06, 1, drift_ppm=90.0)
    source = simulated.recording.events
    assert (np.diff(source.events.t_us) >= 0).all()
    assert source.cover_start_us <= source.first_us <= source.last_us < source.cover_end_us
    assert source.cover_end_us == pytest.approx(60_000 / (1 + 90e-6), abs=1)
    assert (source.events.x.max(), source.events.y.max()) == (63, 47)
    assert set(np.unique(source.events.polarity)) == {-1, 1}


@pytest.mark.parametrize("exposure_us", [3000, 20_000])
def test_no_step_moves_the_picture_further_than_log_light_runs_straight(exposure_us):
    camera = Camera(rate_hz=50.0, exposure_us=exposure_us, start_us=2000)
    times = [t for t, _, _ in _instants(scene(), camera, EventSensor(), 100_000)]
    assert times[0] == 0.0
    assert times[-1] == 100_000.0
    assert np.diff(times).min() > 0
    assert np.diff(times).max() <= 1e6 * STEP_PX / scene().speed_px_s * (1 + 1e-9)


def test_a_duration_without_an_exposure_is_refused():
    with pytest.raises(ValueError, match=r"15000 us holds no exposure of 10000 us that starts at 10000 us"):
        simulate(scene(), CAMERA, EventSensor(), 0.015, 1)


def test_benchmark_scenes_are_fixed_apart_from_training_and_within_their_ranges():
    assert sorted(entry.kind for entry in BENCHMARK) == sorted([*KINDS, *KINDS])
    assert len({entry.seed for entry in BENCHMARK}) == len({entry.name for entry in BENCHMARK}) == len(BENCHMARK)
    for entry in BENCHMARK:
        assert entry.seed > FIRST_SEED + 100
        assert 8 <= entry.blur_px <= 24
        assert 0.3 <= entry.exposure_share <= 0.7
        assert all(0.12 <= c <= 0.3 for c in entry.contrast)
        assert entry.frames % 2 == 1  # every second frame held out leaves a key on either side


def test_a_benchmark_recording_is_as_listed():
    entry = Benchmark("fan", FIRST_SEED + 99, 10.0, 0.5, (0.3, 0.3), frames=3, size=SIZE)
    ((name, simulated),) = benchmark_recordings([entry])
    assert name == simulated.recording.title == "fan-99"
    frames = simulated.recording.frames
    assert len(frames) == 3
    assert frames.frame(0).exposure_us == 16_667
    assert simulated.scene.speed_px_s * 0.016667 == pytest.approx(10.0, rel=0.05)
    assert simulated.contrast_positive.std() / 0.3 == pytest.approx(0.03, rel=0.1)


def test_importing_the_room_loads_nothing_heavy():
    code = "import sys, enhance.simulate as s; print(s.__all__ and sorted({'cv2', 'numba', 'h5py'} & set(sys.modules)))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_a_name_the_room_does_not_have_is_an_attribute_error():
    import enhance.simulate

    with pytest.raises(AttributeError, match="has no attribute 'nothing'"):
        _ = enhance.simulate.nothing
