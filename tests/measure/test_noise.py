"""The noise of a captured frame, and the ceiling it sets."""

import numpy as np
import pytest

from enhance.errors import MeasureError
from enhance.measure import ceiling, noise_sigma, psnr


def pair(sigma, shape=(120, 160), seed=17, whole=False):
    """Textured scene twice, with independent noise; `sigma` may depend on the brightness."""
    rng = np.random.default_rng(seed)
    scene = rng.uniform(40, 200, shape)
    level = sigma(scene) if callable(sigma) else sigma
    frames = [scene + level * rng.normal(0, 1, shape) for _ in range(2)]
    return [np.rint(frame) for frame in frames] if whole else frames


@pytest.mark.parametrize("sigma", [0.5, 2.1, 5.06, 20.0])
def test_the_noise_of_a_static_pair_is_found_under_any_texture(sigma):
    # 90 000 pixels: the estimate's own standard error is 0.25 percent
    assert noise_sigma(*pair(sigma, (300, 300))) == pytest.approx(sigma, rel=0.008)


@pytest.mark.parametrize("sigma", [0.4, 1.0, 2.1])
def test_whole_codes_add_their_rounding_and_no_more(sigma):
    # rounding to whole codes adds a variance of 1/12 (textbook)
    assert noise_sigma(*pair(sigma, whole=True)) == pytest.approx(np.sqrt(sigma**2 + 1 / 12), rel=0.04)


def test_noise_that_grows_with_light_reads_its_root_mean_square():
    frame, neighbour = pair(lambda light: 0.1 * light, (300, 300))
    # light even between 40 and 200: mean square 120^2 + 160^2 / 12
    assert noise_sigma(frame, neighbour) == pytest.approx(0.1 * np.sqrt(120**2 + 160**2 / 12), rel=0.02)


def test_a_few_pixels_that_moved_unseen_do_not_count():
    frame, neighbour = pair(2.0)
    changed = np.random.default_rng(18).random(frame.shape) < 0.04
    assert noise_sigma(frame, neighbour + 60 * changed) == pytest.approx(2.0, rel=0.12)


def test_only_static_pixels_count():
    frame, neighbour = pair(2.0)
    static = np.zeros(frame.shape, bool)
    static[:, :60] = True
    neighbour[:, 60:] += np.random.default_rng(19).normal(0, 40, neighbour[:, 60:].shape)
    assert noise_sigma(frame, neighbour, static) == pytest.approx(2.0, rel=0.04)


def test_a_lamp_that_flickers_between_the_frames_is_not_noise():
    frame, neighbour = pair(2.0)
    assert noise_sigma(frame, neighbour + 7.0) == pytest.approx(2.0, rel=0.03)


def test_clipped_pixels_show_no_noise_and_are_left_out_where_full_scale_is_known():
    frame, neighbour = pair(3.0)
    for picture in (frame, neighbour):
        picture[:80] = 255
    assert noise_sigma(frame, neighbour) < 2.0
    assert noise_sigma(frame, neighbour, full_scale=255) == pytest.approx(3.0, rel=0.05)


def test_colour_reads_the_root_mean_square_of_its_channels():
    frames = [pair(sigma, seed=20 + i) for i, sigma in enumerate((1.0, 2.0, 4.0))]
    frame, neighbour = (np.stack([f[i] for f in frames], axis=2) for i in (0, 1))
    assert noise_sigma(frame, neighbour) == pytest.approx(np.sqrt(21 / 3), rel=0.03)


@pytest.mark.parametrize("sigma", [1.0, 5.0])
def test_one_smooth_frame_tells_its_noise_alone(sigma):
    ramp = np.tile(np.linspace(20, 220, 160), (120, 1))
    frame = ramp + np.random.default_rng(21).normal(0, sigma, ramp.shape)
    assert noise_sigma(frame) == pytest.approx(sigma, rel=0.05)


def test_too_few_static_pixels_fall_back_to_the_frame_alone():
    frame, neighbour = pair(2.0)
    nowhere = np.zeros(frame.shape, bool)
    assert noise_sigma(frame, neighbour, nowhere) == noise_sigma(frame)


def test_a_tiny_picture_tells_nothing():
    assert noise_sigma(np.ones((10, 10))) is None
    assert ceiling(None, 255) is None


def test_frames_of_different_shape_are_refused():
    with pytest.raises(MeasureError, match=r"frame is \(40, 40\), its neighbour \(40, 41\)"):
        noise_sigma(np.zeros((40, 40)), np.zeros((40, 41)))


def test_the_ceiling_is_what_a_flawless_picture_reads():
    # computed: sigma 5.06 at 8 bit reads 34.05 dB
    assert ceiling(5.06, 255) == pytest.approx(34.05, abs=0.005)
    assert ceiling(0.0, 255) == np.inf
    rng = np.random.default_rng(22)
    truth = rng.uniform(40, 200, (200, 200))
    captured, neighbour = truth + rng.normal(0, 5.06, (2, 200, 200))
    assert psnr(captured, truth, 255) == pytest.approx(ceiling(noise_sigma(captured, neighbour), 255), abs=0.2)
