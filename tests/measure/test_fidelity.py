"""PSNR and SSIM against closed forms and another implementation."""

import numpy as np
import pytest
from skimage.metrics import structural_similarity

from enhance.errors import MeasureError
from enhance.measure import psnr, ssim

FLAT = np.full((20, 30), 100.0)
CHECKER = np.indices((40, 40)).sum(axis=0) % 2 - 0.5


class TestPsnr:
    # computed: 10 log10(MAX^2 / MSE)
    @pytest.mark.parametrize(
        ("full_scale", "error", "expected"),
        [(255, 1, 48.1308), (255, 5, 34.1514), (1023, 1, 60.1975), (4095, 1, 72.2451), (65535, 1, 96.3295)],
    )
    def test_an_even_error_reads_as_the_formula_says(self, full_scale, error, expected):
        assert psnr(FLAT, FLAT + error, full_scale) == pytest.approx(expected, abs=5e-5)

    def test_half_the_pixels_off_by_ten_read_as_mean_square_fifty(self):
        estimate = FLAT.copy()
        estimate[::2] += 10
        assert psnr(FLAT, estimate, 255) == pytest.approx(31.1411, abs=5e-5)

    def test_noise_of_sigma_ten_reads_its_expected_value(self):
        noise = np.random.default_rng(4).normal(0, 10, (500, 500))
        assert psnr(np.zeros_like(noise), noise, 255) == pytest.approx(28.1308, abs=0.05)

    def test_equal_pictures_read_infinite(self):
        assert psnr(FLAT, FLAT, 255) == np.inf

    def test_only_masked_pixels_count_and_none_gives_none(self):
        estimate, mask = FLAT.copy(), np.zeros(FLAT.shape, bool)
        estimate[:10] += 5
        estimate[10:] += 77
        mask[:10] = True
        assert psnr(FLAT, estimate, 255, mask) == pytest.approx(34.1514, abs=5e-5)
        assert psnr(FLAT, estimate, 255, np.zeros(FLAT.shape, bool)) is None

    def test_colour_takes_the_mean_square_over_all_three_channels(self):
        reference = np.zeros((8, 8, 3), np.float32)
        estimate = reference + np.float32([0, 0, 3])  # MSE 9 / 3
        assert psnr(reference, estimate, 255) == pytest.approx(10 * np.log10(255**2 / 3))
        assert psnr(reference, estimate, 255, np.ones((8, 8), bool)) == pytest.approx(10 * np.log10(255**2 / 3))

    def test_unsigned_integers_do_not_wrap(self):
        assert psnr(np.full((4, 4), 3, np.uint8), np.full((4, 4), 8, np.uint8), 255) == pytest.approx(34.1514, abs=5e-5)


class TestSsim:
    # computed from the formula of Wang et al. 2004
    @pytest.mark.parametrize(
        ("a", "b", "expected"),
        [
            (np.full((40, 40), 100.0), np.full((40, 40), 110.0), 0.9954764),
            (255 * (CHECKER + 0.5), 255 * (0.5 - CHECKER), -0.9964065),
            (127.5 + 100 * CHECKER, 127.5 + 50 * CHECKER, 0.8036766),
            (127.5 + 100 * CHECKER, np.full((40, 40), 127.5), 0.0228736),
        ],
    )
    def test_simple_patterns_read_as_the_formula_says(self, a, b, expected):
        assert ssim(a, b, 255) == pytest.approx(expected, abs=2e-6)

    @pytest.mark.parametrize("shape", [(40, 53), (40, 53, 3), (11, 11)])
    @pytest.mark.parametrize("full_scale", [255, 4095])
    def test_it_equals_scikit_image(self, shape, full_scale):
        rng = np.random.default_rng(6)
        a = rng.random(shape) * full_scale
        b = a + rng.normal(0, 0.1 * full_scale, shape)
        expected = structural_similarity(
            a,
            b,
            data_range=full_scale,
            gaussian_weights=True,
            sigma=1.5,
            use_sample_covariance=False,
            channel_axis=2 if len(shape) == 3 else None,
        )
        assert ssim(a, b, full_scale) == pytest.approx(expected, abs=1e-5)

    def test_only_masked_pixels_of_the_valid_area_count(self):
        rng = np.random.default_rng(7)
        a = rng.random((40, 60)) * 255
        b = a.copy()
        b[:, 30:] = 0
        left = np.zeros(a.shape, bool)
        left[:, :20] = True
        assert ssim(a, b, 255, left) == pytest.approx(1.0)
        assert ssim(a, b, 255, ~left) < 0.7
        border = np.zeros(a.shape, bool)
        border[:5] = True
        assert ssim(a, b, 255, border) is None

    def test_a_picture_smaller_than_the_window_is_refused(self):
        with pytest.raises(MeasureError, match="10 x 30 pixels: its window needs 11 x 11"):
            ssim(np.zeros((10, 30)), np.zeros((10, 30)), 255)


@pytest.mark.parametrize("measure", [psnr, ssim])
@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ((FLAT, FLAT[:, 1:], 255), r"shapes \(20, 30\) and \(20, 29\); expected the same"),
        ((FLAT, FLAT, 0), "Full scale is 0; expected the code value of full light"),
        ((FLAT, np.where(FLAT > 0, np.nan, FLAT), 255), "estimate holds a value that is not finite"),
        (
            (FLAT, FLAT, 255, np.ones((3, 3), bool)),
            r"mask is bool of shape \(3, 3\); expected bool of shape \(20, 30\)",
        ),
        ((FLAT, FLAT, 255, np.ones(FLAT.shape)), "mask is float64"),
    ],
)
def test_pictures_that_cannot_be_compared_are_refused(measure, arguments, words):
    with pytest.raises(MeasureError, match=words):
        measure(*arguments)
