"""Frame-only motion: known shifts are found, and pictures land where they belong."""

import cv2
import numpy as np
import pytest

from enhance.kernels.optical_flow import display_luma, flow_between, frame_only_picture, warp


def scene(shift: float, shape=(96, 128), colour=False) -> np.ndarray:
    """Smooth random texture, moved right by a shift in pixels; analytic, so any shift is exact."""
    rng = np.random.default_rng(11)
    y, x = np.mgrid[0 : shape[0], 0 : shape[1]].astype(np.float64)
    image = np.zeros(shape)
    for _ in range(24):
        fx, fy = rng.uniform(-0.5, 0.5, 2)
        image += np.cos(fx * (x - shift) + fy * y + rng.uniform(0, 6.28))
    image = (0.4 + image / 40).clip(0.02, 1).astype(np.float32)
    return np.stack([image, 0.8 * image, 0.6 * image], axis=2) if colour else image


@pytest.mark.parametrize(("preset", "worst"), [("medium", 0.15), ("fast", 0.4), ("ultrafast", 0.8)])
def test_a_known_shift_is_found(preset, worst):
    flow = flow_between(scene(0.0), scene(3.4), preset)
    assert flow.dtype == np.float32
    error = flow[10:-10, 10:-10] - np.float32([3.4, 0.0])
    assert np.median(np.linalg.norm(error, axis=2)) < worst


def test_equal_pictures_show_no_motion_at_any_size():
    for shape in [(5, 7), (31, 200), (64, 64, 3)]:
        image = np.random.default_rng(1).random(shape).astype(np.float32)
        flow = flow_between(image, image)
        assert flow.shape == (*shape[:2], 2)
        assert np.abs(flow).max() < 1e-3


@pytest.mark.parametrize("colour", [False, True])
def test_a_picture_half_way_shows_the_texture_half_way(colour):
    first, middle, last = (scene(shift, colour=colour) for shift in (0.0, 2.0, 4.0))
    made = frame_only_picture(first, last, 0.5)
    assert made.shape == middle.shape
    assert made.dtype == np.float32
    inside = (slice(10, -10), slice(10, -10))
    blended = np.sqrt(np.mean(((first + last) / 2 - middle)[inside] ** 2))
    assert np.sqrt(np.mean((made - middle)[inside] ** 2)) < 0.2 * blended


def test_at_either_end_the_picture_is_the_key_itself():
    first, last = scene(0.0), scene(4.0)
    np.testing.assert_allclose(frame_only_picture(first, last, 0.0), first, atol=1e-6)
    np.testing.assert_allclose(frame_only_picture(first, last, 1.0), last, atol=1e-6)


def test_warping_samples_at_the_place_the_flow_points_to():
    ramp = np.tile(np.arange(64, dtype=np.float32), (40, 1))
    flow = np.zeros((40, 64, 2), np.float32)
    flow[..., 0] = 2.25
    moved = warp(ramp, flow)
    np.testing.assert_allclose(moved[:, :60], ramp[:, :60] + 2.25, atol=0.02)
    # beyond the side: the nearest pixel
    np.testing.assert_allclose(moved[:, 62:], 63.0)
    assert np.abs(warp(ramp, flow, "cubic")[:, 4:58] - ramp[:, 4:58] - 2.25).max() < 0.1


def test_down_in_the_picture_is_the_second_component():
    image = np.zeros((40, 40), np.float32)
    image[20, 10] = 1.0
    flow = np.zeros((40, 40, 2), np.float32)
    flow[..., 1] = 3.0
    assert warp(image, flow)[17, 10] == pytest.approx(1.0)


def test_the_number_of_threads_does_not_decide_the_bytes():
    rng = np.random.default_rng(12)
    first, last = (scene(0.0) + rng.normal(0, 0.05, (96, 128)).astype(np.float32) for _ in range(2))
    before = cv2.getNumThreads()
    made = []
    try:
        for threads in (1, 2, 5):
            cv2.setNumThreads(threads)
            made.append(frame_only_picture(first, last, 0.3).tobytes())
    finally:
        cv2.setNumThreads(before)
    assert made[0] == made[1] == made[2]


def test_flow_sees_pictures_as_the_eye_does():
    # sRGB of linear 0.5 is 0.7353570 and of 0.18 is 0.4613561 (IEC 61966-2-1, computed)
    assert display_luma(np.float32([[0.0, 0.18, 0.5, 1.0, 2.0, -1.0]])).tolist() == [[0, 118, 188, 255, 255, 0]]
