"""Held-out frames: re-exposing, alternatives, summary."""

import numpy as np
import pytest

from enhance.errors import MeasureError
from enhance.light import Light
from enhance.measure import Figure, alternatives, exposure_times, psnr, re_expose, row_shares, summarise


class TestSummary:
    def test_it_is_the_mean_of_the_pictures_decibels_never_the_decibels_of_a_mean_error(self):
        # computed: MSE 1 and MSE 100: mean of dB 38.1308; dB of mean MSE 31.0979
        flat = np.zeros((4, 4))
        rows = [{"psnr": psnr(flat, flat + error, 255)} for error in (1, 10)]
        assert summarise(rows)["psnr"].mean == pytest.approx(38.1308, abs=5e-5)

    def test_infinite_and_unknown_figures_are_left_out_and_counted(self):
        rows = [{"psnr": 30.0, "psnr_moving": None}, {"psnr": float("inf")}, {"psnr": 40.0, "psnr_moving": 20.0}]
        found = summarise(rows)
        assert found == {"psnr": Figure(35.0, 2, 1, 0), "psnr_moving": Figure(20.0, 1, 0, 2)}

    def test_nothing_known_has_no_mean(self):
        assert summarise([], ["psnr"]) == {"psnr": Figure(None, 0, 0, 0)}
        assert summarise([{"ssim": float("nan")}])["ssim"] == Figure(None, 0, 0, 1)


class TestExposure:
    @pytest.mark.parametrize(("motion_px", "count"), [(0.0, 1), (0.49, 1), (0.5, 5), (2.5, 5), (2.6, 6), (20.0, 40)])
    def test_there_are_as_many_instants_as_keep_steps_within_half_a_pixel(self, motion_px, count):
        assert len(exposure_times(0, 20_000, motion_px)) == count

    def test_instants_are_the_midpoints_of_equal_parts_inside_the_exposure(self):
        assert exposure_times(1_000, 2_000, 2.0) == [1_100, 1_300, 1_500, 1_700, 1_900]
        assert exposure_times(10, 10, 3.0) == [10]
        assert exposure_times(0, 3, 50.0) == [0, 1, 2]

    def test_the_mean_is_taken_in_linear_light(self):
        # computed: the mean of a black and a white frame is sRGB code 188
        light = Light("srgb", 0, 255)
        black, white = np.zeros((3, 3), np.float32), np.ones((3, 3), np.float32)
        mean = re_expose(iter([black, white]))
        assert mean.dtype == np.float32
        assert light.to_codes(mean) == pytest.approx(np.full((3, 3), 187.5), abs=0.1)

    def test_no_picture_is_an_error(self):
        with pytest.raises(MeasureError, match="No picture to re-expose; expected at least one instant"):
            re_expose([])


class TestAlternatives:
    def test_each_is_made_as_its_name_says(self):
        key0, key1 = np.full((40, 50), 0.2, np.float32), np.full((40, 50), 0.6, np.float32)
        made = alternatives(key0, key1, 1_000, 2_000, 1_250)
        assert list(made) == ["nearest", "blend", "flow"]
        assert all(image.dtype == np.float32 for image in made.values())
        np.testing.assert_array_equal(made["nearest"], key0)
        np.testing.assert_allclose(made["blend"], 0.3, rtol=1e-6)
        np.testing.assert_allclose(made["flow"], 0.3, rtol=1e-6)

    def test_half_way_the_earlier_key_is_the_nearest(self):
        key0, key1 = np.zeros((40, 50), np.float32), np.ones((40, 50), np.float32)
        assert alternatives(key0, key1, 0, 10, 5)["nearest"] is key0
        assert alternatives(key0, key1, 0, 10, 6)["nearest"] is key1

    def test_flow_follows_a_moving_texture_that_a_blend_smears(self):
        rng = np.random.default_rng(23)
        strip = np.cumsum(rng.normal(0, 1, (80, 140)), axis=1)
        strip = (0.5 + 0.4 * (strip - strip.mean()) / np.abs(strip - strip.mean()).max()).astype(np.float32)
        strip = (strip + np.roll(strip, 1, 0) + np.roll(strip, -1, 0)) / 3
        key0, truth, key1 = strip[:, 8:128], strip[:, 6:126], strip[:, 4:124]
        made = alternatives(key0, key1, 0, 1_000, 500)
        error = {name: np.abs(image - truth)[8:-8, 8:-8].mean() for name, image in made.items()}
        assert error["flow"] < 0.5 * error["blend"] < error["nearest"]


def test_each_row_is_re_exposed_over_its_own_part_of_the_pictures():
    # three rows of 40 us, 20 us apart, seen by pictures every 10 us: each counts where it lies inside
    times = [5, 15, 25, 35, 45, 55, 65, 75]
    shares = row_shares(times, 20, 60, np.array([-20, 0, 20]))
    expected = np.zeros((8, 3))
    for row in range(3):
        expected[2 * row : 2 * row + 4, row] = 0.25
    np.testing.assert_allclose(shares, expected, atol=1e-6)


def test_a_row_shorter_than_a_step_lies_between_the_two_nearest_pictures():
    # sharp rows at 17.5 and 20: a quarter of the way from 15 to 25, and half of it
    shares = row_shares([5, 15, 25, 35], 20, 20, np.array([-20, -2, 0, 20]))
    np.testing.assert_allclose(shares[:, 1], [0, 0.7, 0.3, 0], atol=1e-6)
    np.testing.assert_allclose(shares[:, 2], [0, 0.5, 0.5, 0], atol=1e-6)


def test_shares_weigh_rows_of_grey_and_colour():
    ones = [np.full((2, 3), level, np.float32) for level in (1.0, 3.0)]
    shares = np.array([[1.0, 0.5], [0.0, 0.5]])
    np.testing.assert_allclose(re_expose(ones, shares), [[1, 1, 1], [2, 2, 2]])
    colour = [np.stack([image] * 3, axis=2) for image in ones]
    np.testing.assert_allclose(re_expose(colour, shares)[:, 0, 1], [1, 2])
