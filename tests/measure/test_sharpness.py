"""Sharpness and the slanted edge against closed forms."""

import cv2
import numpy as np
import pytest

from enhance.errors import MeasureError
from enhance.measure import edge_sfr, mtf50, rise_10_90, sharpness


def edge(blur_px: float, slant_deg: float = 5.0, shape: tuple[int, int] = (100, 120)) -> np.ndarray:
    """Slanted step, blurred by a box at right angles to it: the exact profile, sampled at pixel centres."""
    height, width = shape
    slope = np.tan(np.radians(slant_deg))
    column = np.arange(width)[None, :] - width / 2 - slope * (np.arange(height)[:, None] - height / 2)
    distance = column * np.cos(np.radians(slant_deg))
    return 20.0 + 200.0 * np.clip(distance / blur_px + 0.5, 0.0, 1.0)


class TestEdge:
    # textbook: a box of d pixels passes |sin(pi d f) / (pi d f)|, half of it at d f = 0.60335
    @pytest.mark.parametrize("blur_px", [3.0, 6.0, 10.0])
    def test_the_half_response_of_a_box_blur_is_where_the_formula_has_it(self, blur_px):
        assert mtf50(*edge_sfr(edge(blur_px))) == pytest.approx(0.60335 / blur_px, rel=0.015)

    def test_the_response_follows_the_box_over_all_frequencies(self):
        frequency, response = edge_sfr(edge(4.0))
        band = frequency <= 0.5
        np.testing.assert_allclose(response[band], np.abs(np.sinc(4.0 * frequency[band])), atol=0.03)
        assert response[0] == 1.0

    def test_ten_pixels_of_motion_read_as_tabulated(self):
        # computed for d = 10: 0.6366 / 0 / 0.1273 at 0.05 / 0.1 / 0.25
        response = np.interp([0.05, 0.1, 0.25], *edge_sfr(edge(10.0, shape=(120, 240))))
        np.testing.assert_allclose(response, [0.6366, 0.0, 0.1273], atol=0.015)

    def test_a_sharp_edge_stays_near_one_because_the_derivative_is_corrected(self):
        frequency, response = edge_sfr(edge(0.02))
        # uncorrected: 1 / 1.11072 at 0.5 (computed); what is lost here is the quarter-pixel bin, sinc(1/8), and the fit
        assert np.interp(0.25, frequency, response) == pytest.approx(1.0, abs=0.02)
        assert np.interp(0.5, frequency, response) > 0.93

    @pytest.mark.parametrize("blur_px", [4.0, 10.0])
    def test_the_rise_of_a_box_blur_is_four_fifths_of_it(self, blur_px):
        assert rise_10_90(edge(blur_px)) == pytest.approx(0.8 * blur_px, rel=0.01)

    def test_direction_and_order_of_bright_and_dark_do_not_matter(self):
        crop = edge(6.0)
        for other in (crop.T, crop[:, ::-1], 255 - crop, np.stack([crop] * 3, axis=2)):
            assert rise_10_90(other) == pytest.approx(rise_10_90(crop), rel=0.01)
            assert mtf50(*edge_sfr(other)) == pytest.approx(mtf50(*edge_sfr(crop)), rel=0.01)

    def test_noise_moves_the_figures_little(self):
        crop = edge(6.0) + np.random.default_rng(13).normal(0, 3, (100, 120))
        assert mtf50(*edge_sfr(crop)) == pytest.approx(0.60335 / 6.0, rel=0.05)
        assert rise_10_90(crop) == pytest.approx(4.8, rel=0.08)

    @pytest.mark.parametrize("slant_deg", [2.0, 8.0, -5.0, 15.0])
    def test_the_slant_does_not_matter(self, slant_deg):
        assert rise_10_90(edge(8.0, slant_deg)) == pytest.approx(6.4, rel=0.015)

    def test_a_response_that_never_falls_to_half_has_no_mtf50(self):
        assert mtf50(np.array([0.0, 0.5, 1.0]), np.array([1.0, 0.9, 0.6])) is None

    @pytest.mark.parametrize(
        ("crop", "words"),
        [
            (np.full((40, 40), 7.0), "There is no edge"),
            (edge(4.0, 0.0), r"slants by 0\.0 degrees over 100 rows; expected about 5"),
            (edge(4.0)[:5, :], "5 x 120 pixels; expected at least 8 x 8"),
            (edge(1.0)[:, 54:66], "within 2 pixels of the crop's side"),
            (edge(1.0, 44.9), "no edge|places between the pixels|within 2 pixels"),
        ],
    )
    def test_a_crop_without_a_usable_edge_is_refused(self, crop, words):
        with pytest.raises(MeasureError, match=words):
            edge_sfr(crop)


class TestSharpness:
    def test_a_ramp_reads_its_slope(self):
        ramp = np.tile(np.arange(50.0), (20, 1)) * 2.55
        assert sharpness(ramp, 255) == pytest.approx(1.0)
        assert sharpness(ramp.T, 255) == pytest.approx(1.0)

    def test_it_falls_with_blur_and_not_with_brightness_offset(self):
        image = np.random.default_rng(14).random((60, 60)) * 200
        values = [sharpness(cv2.GaussianBlur(image, (0, 0), sigma), 255) for sigma in (0.5, 1.0, 2.0)]
        assert values[0] > values[1] > values[2] > 0
        assert sharpness(image + 20, 255) == pytest.approx(sharpness(image, 255))

    def test_only_masked_pixels_count(self):
        image = np.zeros((30, 40))
        image[:, 20:] = np.random.default_rng(15).random((30, 20)) * 255
        left = np.zeros(image.shape, bool)
        left[:, :18] = True
        assert sharpness(image, 255, left) == 0.0
        assert sharpness(image, 255, ~left) > 10
        assert sharpness(image, 255, np.zeros(image.shape, bool)) is None

    def test_grey_in_three_channels_reads_as_grey(self):
        image = np.random.default_rng(16).random((30, 40)) * 255
        assert sharpness(np.stack([image] * 3, axis=2), 255) == pytest.approx(sharpness(image, 255))

    def test_a_picture_too_small_is_refused(self):
        with pytest.raises(MeasureError, match="expected at least 3x3 and the same shape"):
            sharpness(np.zeros((2, 9)), 255)
