"""Hot pixels are found, moving edges and lamps are not taken for hot."""

import numpy as np
import pytest

from enhance.calibrate.hot_pixels import MOST_EVENTS, SLICES, find_hot_pixels
from enhance.recording import EventArray, Events
from enhance.simulate import Camera, EventSensor, make_scene, simulate

SIZE = (64, 48)


def train(pixels, rate_hz, duration_us, seed=1):
    """Events at random times at each of some pixels (Poisson)."""
    rng = np.random.default_rng(seed)
    count = rng.poisson(rate_hz * duration_us * 1e-6, len(pixels))
    x, y = np.repeat(np.asarray(pixels).reshape(-1, 2), count, axis=0).T
    return rng.integers(0, duration_us, len(x)), x, y


def source(*parts, size=SIZE, duration_us=1_000_000):
    t, x, y = (np.concatenate(column) for column in zip(*parts, strict=True))
    order = np.argsort(t, kind="stable")
    columns = t[order], x[order].astype(np.uint16), y[order].astype(np.uint16), np.ones(len(t), np.int8)
    return EventArray(Events(*columns), size, (0, duration_us))


def everywhere(size=SIZE):
    return np.stack(np.meshgrid(np.arange(size[0]), np.arange(size[1])), axis=-1).reshape(-1, 2)


@pytest.mark.parametrize("rate_hz", [300.0, 3_000.0])
@pytest.mark.parametrize("duration_us", [200_000, 2_000_000])
def test_pixels_that_fire_all_the_time_are_found(rate_hz, duration_us):
    hot = [[0, 0], [63, 47], [20, 13], [21, 13], [5, 0], [40, 30]]
    noise = train(everywhere(), 1.0, duration_us, seed=2)
    quantity = find_hot_pixels(source(train(hot, rate_hz, duration_us), noise, duration_us=duration_us))
    assert sorted(quantity.value) == sorted(hot)
    assert f"{len(hot)} of {64 * 48} pixels" in quantity.evidence


@pytest.mark.parametrize("noise_hz", [0.1, 1.0, 20.0])
def test_noise_alone_has_no_hot_pixels(noise_hz):
    # noise events: 0.03 to 0.1 Hz a pixel in good light, 1 to 20 Hz in dim light (from memory)
    assert find_hot_pixels(source(train(everywhere(), noise_hz, 1_000_000))).value == []


def test_simulated_hot_pixels_are_found_beside_moving_parts():
    scene = make_scene("parts", SIZE, np.random.default_rng(5), 400.0)
    sensor = EventSensor(noise_hz=1.0, hot_fraction=0.003, hot_rate_hz=2_000.0)
    simulated = simulate(scene, Camera(rate_hz=50.0, exposure_us=5_000), sensor, 0.4, 7)
    found = find_hot_pixels(simulated.recording.events).value
    assert len(simulated.hot) > 4
    assert sorted(found) == sorted(simulated.hot.tolist())


def test_a_hot_pixel_is_found_where_the_scene_is_busy_now_and_then():
    # in half of the slices an edge passes and every pixel fires as often as the hot one
    t, x, y = train(everywhere(), 300.0, 500_000)
    passing = (t + 50_000 * (t // 50_000), x, y)
    hot = [[20, 13], [40, 30]]
    still = train(everywhere(), 1.0, 1_000_000, seed=2)
    assert find_hot_pixels(source(passing, still)).value == []
    assert sorted(find_hot_pixels(source(passing, still, train(hot, 300.0, 1_000_000, seed=8))).value) == hot


@pytest.mark.parametrize("kind", ["texture", "fan", "text"])
def test_moving_edges_are_not_taken_for_hot(kind):
    scene = make_scene(kind, SIZE, np.random.default_rng(6), 500.0)
    simulated = simulate(scene, Camera(rate_hz=50.0, exposure_us=5_000), EventSensor(noise_hz=0.5), 0.4, 7)
    assert simulated.recording.events.count > 10_000
    assert find_hot_pixels(simulated.recording.events).value == []


def test_a_line_one_pixel_thick_that_flickers_all_the_time_is_not_hot():
    line = [[x, 20] for x in range(64)]
    assert find_hot_pixels(source(train(line, 2_000.0, 1_000_000))).value == []


def test_a_pixel_that_is_busy_for_a_while_is_not_hot():
    t, x, y = train([[20, 13]], 20_000.0, 300_000)
    assert find_hot_pixels(source((t, x, y), train(everywhere(), 1.0, 1_000_000))).value == []


def test_a_single_row_of_pixels_has_neighbours_enough_to_be_judged():
    size = (64, 1)
    assert find_hot_pixels(source(train(everywhere(size), 500.0, 1_000_000), size=size)).value == []


def test_a_single_event_is_no_hot_pixel():
    one = (np.array([7]), np.array([3]), np.array([4]))
    assert find_hot_pixels(source(one, duration_us=8)).value == []


def test_an_hour_is_looked_at_in_slices():
    windows = []

    class Hour:
        size, first_us, last_us = SIZE, 0, 3_600_000_000 - 1

        def between(self, start_us, end_us):
            windows.append((start_us, end_us))
            return Events.none()

    find_hot_pixels(Hour())
    assert len(windows) == SLICES
    assert windows[0][0] == 0
    assert windows[-1][1] == 3_600_000_000
    assert max(end - start for start, end in windows) == 100_000


def test_a_storm_of_events_ends_the_look_early():
    looked = []

    class Storm:
        size, first_us, last_us = (1, 1), 0, 10_000_000

        def between(self, start_us, end_us):
            looked.append(start_us)
            return AllAtOnce()

    class AllAtOnce:
        # as long as the limit, without its memory
        x = y = np.zeros(1, np.uint16)
        polarity = np.ones(1, np.int8)

        def __len__(self):
            return MOST_EVENTS

    find_hot_pixels(Storm())
    assert len(looked) == 2
