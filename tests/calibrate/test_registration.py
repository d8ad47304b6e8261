"""The map between two sensors, found in fields of change whose map is known because it made them."""

import cv2
import numpy as np
import pytest

from enhance.calibrate.registration_fit import PERSPECTIVE, make_level, refine
from enhance.calibrate.registration_search import distance, search
from enhance.view import View

#: Width, height of the frames and of the event sensor.
FRAME, SENSOR = (160, 120), (100, 76)


def fields(seed, count=3, size=FRAME):
    """Signed fields like moving edges: smooth, irregular, and still in most places."""
    rng = np.random.default_rng(seed)
    noise = [rng.standard_normal((size[1], size[0])).astype(np.float32) for _ in range(count)]
    fine = [cv2.GaussianBlur(each, (0, 0), 2.0) * 8 for each in noise]
    return [np.where(np.abs(each) > 0.5, each, 0).astype(np.float32) for each in fine]


def seen_by(matrix, frames, gain=0.7, noise=0.0, size=SENSOR):
    """What a sensor sees of them through a matrix: point samples, scaled by unknown thresholds."""
    y, x = np.mgrid[: size[1], : size[0]].reshape(2, -1).astype(float)
    there = View(matrix).to_frame(np.column_stack([x, y])).astype(np.float32).reshape(size[1], size[0], 2)
    rng = np.random.default_rng(9)
    shown = [
        cv2.remap(cv2.GaussianBlur(f, (0, 0), 0.6), there[..., 0], there[..., 1], cv2.INTER_LINEAR) for f in frames
    ]
    return [gain * each + noise * rng.standard_normal(each.shape).astype(np.float32) for each in shown]


def matrix_of(pitch, degrees, mirror=(1, 1), shift=(0.0, 0.0), perspective=(0.0, 0.0)):
    turn = np.deg2rad(degrees)
    rotation = np.array([[np.cos(turn), -np.sin(turn)], [np.sin(turn), np.cos(turn)]]) @ np.diag(mirror)
    matrix = np.eye(3)
    matrix[:2, :2] = pitch * rotation
    centre = (np.array(SENSOR) - 1) / 2
    matrix[:2, 2] = (np.array(FRAME) - 1) / 2 + shift - matrix[:2, :2] @ centre
    matrix[2, :2] = perspective
    return matrix


CASES = {
    "alike": matrix_of(1.6, 0),
    "turned": matrix_of(1.5, 9.5, shift=(5, -7)),
    "mirrored left and right": matrix_of(1.4, -6, (-1, 1), (-6, 4)),
    "mirrored up and down": matrix_of(1.7, 4, (1, -1), (3, 8)),
    "finer than the frames": matrix_of(0.9, 3, shift=(10, 6)),
}


@pytest.mark.parametrize("name", CASES)
def test_the_search_comes_near_enough_for_the_fit_and_that_to_a_tenth_of_a_pixel(name):
    frames, truth = fields(1), CASES[name]
    events = seen_by(truth, frames, noise=0.1)
    # the whole range of scales once; elsewhere a part of it, which the truth is not in the middle of
    scales = None if name == "turned" else View(truth).pitch(SENSOR) * 1.02 * 1.06 ** np.arange(-4, 3)
    first = search(frames, events, 3, scales)[0].matrix
    assert distance(first, truth, (SENSOR[1], SENSOR[0])) < 6
    found = first
    for blur in (3.0, 1.5, 0.8):
        fit = refine(make_level(frames, events, View(found).pitch(SENSOR), blur), found)
        found = fit.matrix
    assert distance(found, truth, (SENSOR[1], SENSOR[0])) < 0.1 * View(truth).pitch(SENSOR)
    assert fit.correlation > 0.9
    assert fit.uncertainty_px < 0.1


def test_a_pitch_of_four_is_found_from_a_small_sensor():
    size = (40, 30)
    truth = np.array([[4.0, 0.1, 2.5], [-0.1, 4.0, 0.5], [0, 0, 1]])
    frames = [cv2.GaussianBlur(each, (0, 0), 2.5) for each in fields(4, 5)]
    first = search(frames, seen_by(truth, frames, size=size), 1, (2.5, 3.0, 3.9, 4.2, 4.7))[0]
    assert distance(first.matrix, truth, (30, 40)) < 6


def test_perspective_is_fitted_where_it_is_asked_for():
    truth = matrix_of(1.5, 2, shift=(2, 1), perspective=(4e-4, -3e-4))
    frames = fields(2)
    level = make_level(frames, seen_by(truth, frames), 1.5, 0.8)
    start = matrix_of(1.5, 2.3, shift=(1, 1))
    flat, bent = refine(level, start), refine(level, start, PERSPECTIVE)
    assert distance(bent.matrix, truth, (SENSOR[1], SENSOR[0])) < 0.1
    assert distance(flat.matrix, truth, (SENSOR[1], SENSOR[0])) > 0.3
    assert bent.correlation > flat.correlation


def test_the_gain_of_unknown_thresholds_changes_nothing():
    frames = fields(3)
    truth, start = matrix_of(1.6, 1), matrix_of(1.6, 1.5, shift=(1, -1))
    one, two = (refine(make_level(frames, seen_by(truth, frames, gain), 1.6, 0.8), start).matrix for gain in (0.3, 3.0))
    np.testing.assert_allclose(one, two, atol=1e-3)


def test_more_noise_means_more_doubt():
    frames = fields(5, 6)
    truth = matrix_of(1.6, 1)
    quiet, loud = (
        refine(make_level(frames, seen_by(truth, frames, noise=noise), 1.6, 0.8), truth).uncertainty_px
        for noise in (0.05, 0.8)
    )
    assert loud > 3 * quiet
