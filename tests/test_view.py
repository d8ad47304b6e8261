"""The map from event pixels to frame pixels: against closed forms, and there and back."""

import numpy as np
import pytest

from enhance.view import Lens, View, project, shared_view

#: A wide lens, as calibrations of small cameras find them (from memory).
LENS = Lens((300.0, 305.0), (170.0, 128.0), (-0.3, 0.1, 0.001, -0.002, 0.0))


def everywhere(width, height):
    y, x = np.mgrid[:height, :width].reshape(2, -1).astype(float)
    return np.column_stack([x, y])


def test_a_sensor_of_a_quarter_of_the_width_is_centre_aligned():
    # pixel e spans e - 1/2 .. e + 1/2: the first of four frame pixels in it is 4 e, their middle 4 e + 1.5
    view = shared_view((80, 60), (320, 240), (0, 0), (320, 240))
    np.testing.assert_array_equal(view.matrix, [[4, 0, 1.5], [0, 4, 1.5], [0, 0, 1]])
    assert view.pitch((80, 60)) == pytest.approx(4)


@pytest.mark.parametrize(
    ("sensor", "full", "origin", "frame", "shift"),
    [
        ((320, 240), (320, 240), (30, 20), (100, 90), (0, 0)),
        ((100, 90), (320, 240), (30, 20), (100, 90), (30, 20)),
        ((100, 300), (320, 240), (30, 20), (200, 90), (30, 20)),
    ],
)
def test_one_view_of_the_frames_or_the_crops_size_moves_by_whole_pixels(sensor, full, origin, frame, shift):
    assert shared_view(sensor, full, origin, frame).shift == shift


def test_each_frame_pixel_finds_the_event_pixel_its_centre_falls_into():
    view = shared_view((4, 3), (16, 12), (0, 0), (16, 12))
    found = view.lookup((4, 3), (16, 12))
    y, x = np.mgrid[:12, :16]
    np.testing.assert_array_equal(found, (y // 4) * 4 + x // 4)
    # a crop is a part of the same
    np.testing.assert_array_equal(view.lookup((4, 3), (5, 6), (3, 2)), found[2:8, 3:8])


def test_a_sensor_beside_the_frame_leaves_the_rest_without_events():
    view = View(np.array([[1.0, 0, 5], [0, 1, -2], [0, 0, 1]]))
    found = view.lookup((6, 6), (8, 4))
    assert (found >= 0).sum() == 3 * 4
    assert found[0, 5] == 2 * 6
    assert view.shift == (5, -2)


def test_a_lens_undoes_itself_and_moves_what_lies_far_from_its_centre():
    points = everywhere(346, 260)
    ideal = LENS.undistort(points)
    np.testing.assert_allclose(LENS.distort(ideal), points, atol=1e-6)
    assert np.hypot(*(ideal - points).T).max() > 10
    np.testing.assert_allclose(LENS.undistort(np.array([[170.0, 128.0]])), [[170.0, 128.0]], atol=1e-9)


def test_where_the_lens_polynomial_folds_back_nothing_is_seen():
    # r (1 - 0.5 r^2) has its maximum at r = sqrt(2 / 3): beyond it two directions would share one pixel
    folding = Lens((100.0, 100.0), (50.0, 50.0), (-0.5, 0.0, 0.0, 0.0))
    r = np.array([0.5, 0.75, 1.2, 1.4])
    shown = folding.distort(np.column_stack([50 + 100 * r, np.full(4, 50.0)]))
    np.testing.assert_array_equal(np.isnan(shown[:, 0]), [False, False, True, True])
    np.testing.assert_allclose(shown[:2, 0], 50 + 100 * (r * (1 - 0.5 * r**2))[:2])


def test_there_and_back_through_matrix_and_both_lenses():
    turn = np.deg2rad(8)
    matrix = np.array(
        [[1.4 * np.cos(turn), -1.4 * np.sin(turn), 20], [1.4 * np.sin(turn), 1.4 * np.cos(turn), -6], [1e-4, 0, 1]]
    )
    view = View(matrix, LENS, Lens((200.0, 200.0), (90.0, 70.0), (-0.1, 0.02, 0.0, 0.0)))
    points = everywhere(180, 140)[::97]
    np.testing.assert_allclose(view.to_event(view.to_frame(points)), points, atol=1e-5)
    assert view.shift is None


def test_a_matrix_sends_what_lies_behind_it_nowhere():
    # depth = 1 - x / 10: zero at x = 10, behind beyond it
    there = project(np.array([[1.0, 0, 0], [0, 1, 0], [-0.1, 0, 1]]), np.array([[0.0, 1], [5, 1], [10, 1], [15, 1]]))
    np.testing.assert_allclose(there[:2], [[0, 1], [10, 2]])
    assert np.isnan(there[2:]).all()
