"""An event sensor with pixels and a view of its own."""

import numpy as np
import pytest

from enhance.simulate import Camera, EventSensor, SecondView, make_scene, simulate
from enhance.view import View

QUARTER = View(np.array([[4.0, 0, 1.5], [0, 4, 1.5], [0, 0, 1]]))


def test_an_event_pixel_has_the_mean_light_of_the_frame_pixels_it_covers():
    # a ramp is its own mean: a + b (4 x + 1.5) + c (4 y + 1.5)
    y, x = np.mgrid[:48, :64].astype(np.float32)
    seen = SecondView(QUARTER, (16, 12)).show(0.1 + 0.01 * x + 0.002 * y)
    row, column = np.mgrid[:12, :16]
    expected = 0.1 + 0.01 * (4 * column + 1.5) + 0.002 * (4 * row + 1.5)
    # at the border the outermost samples lie half a pixel beyond the picture, where it is mirrored
    np.testing.assert_allclose(seen[1:-1, 1:-1], expected[1:-1, 1:-1], atol=1e-5)
    assert seen.dtype == np.float32


def test_fine_stripes_are_averaged_away_not_sampled():
    stripes = np.tile(np.float32([0.2, 0.8]), (48, 32))
    seen = SecondView(QUARTER, (16, 12)).show(stripes)
    np.testing.assert_allclose(seen[:, 1:-1], 0.5, atol=0.02)


def test_a_mirrored_view_shows_the_mirror_image():
    picture = np.random.default_rng(1).random((20, 30)).astype(np.float32)
    mirrored = View(np.array([[-1.0, 0, 29], [0, 1, 0], [0, 0, 1]]))
    alike = SecondView(View(np.eye(3)), (30, 20)).show(picture)
    np.testing.assert_allclose(SecondView(mirrored, (30, 20)).show(picture), alike[:, ::-1], atol=1e-6)


def test_colour_keeps_its_channels():
    assert SecondView(QUARTER, (16, 12)).show(np.ones((48, 64, 3), np.float32)).shape == (12, 16, 3)


@pytest.fixture(scope="module")
def pair():
    scene = make_scene("parts", (64, 48), np.random.default_rng(2), 400.0)
    return simulate(scene, Camera(rate_hz=50.0), EventSensor(), 0.06, 2, second_view=SecondView(QUARTER, (16, 12)))


def test_frames_and_events_have_each_their_own_size(pair):
    assert pair.recording.frames.full_size == (64, 48)
    assert pair.recording.events.size == pair.contrast_positive.shape[::-1] == (16, 12)
    events = pair.recording.events.events
    assert len(events) > 100
    assert events.x.max() < 16
    assert events.y.max() < 12
