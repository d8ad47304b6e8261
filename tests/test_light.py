"""Code values, curves and linear light, against the standards' own numbers."""

import numpy as np
import pytest

from enhance.light import LOG_FLOOR, Light, check_curve, decode, encode, log_light, luma

CURVES = ["linear", "srgb", "bt709", "gamma 2.2"]


@pytest.mark.parametrize(
    ("curve", "linear", "signal"),
    [
        # IEC 61966-2-1
        ("srgb", 0.2140411, 0.5),
        ("srgb", 0.2158605, 128 / 255),
        ("srgb", 0.18, 0.4613561),
        ("srgb", 0.5, 0.7353570),
        ("srgb", 0.002, 0.02584),
        # Recommendation ITU-R BT.709 with the rounded constants 1.099 and 0.018
        ("bt709", 0.18, 0.4090077),
        ("bt709", 0.5, 0.7055151),
        ("bt709", 0.01, 0.045),
        # 2^-2.2
        ("gamma 2.2", 0.2176376, 0.5),
        ("linear", 0.3, 0.3),
    ],
)
def test_curves_have_the_standards_values_both_ways(curve, linear, signal):
    assert encode(curve, np.float32([linear]))[0] == pytest.approx(signal, abs=2e-6)
    assert decode(curve, np.float32([signal]))[0] == pytest.approx(linear, abs=2e-6)


@pytest.mark.parametrize("curve", CURVES)
@pytest.mark.parametrize(("black", "white"), [(0.0, 255.0), (16.0, 235.0), (64.0, 4095.0), (0.0, 65535.0)])
def test_codes_come_back_from_linear_light(curve, black, white):
    light = Light(curve, black, white)
    codes = np.linspace(black - 0.05 * (white - black), white * 1.1, 200)
    linear = light.to_linear(codes)
    assert linear.dtype == np.float32
    assert light.to_codes(linear).dtype == np.float32
    np.testing.assert_allclose(light.to_codes(linear), codes, atol=3e-6 * white)
    assert (np.diff(linear) > 0).all()
    assert light.to_linear(np.array([black, white])) == pytest.approx([0, 1], abs=1e-6)
    assert light.full_scale == white


@pytest.mark.parametrize("curve", CURVES)
def test_noise_around_black_has_no_bias(curve):
    codes = np.array([7, 10, 13], np.uint16)
    below, at, above = Light(curve, 10, 255).to_linear(codes)
    assert at == 0
    assert below == -above < 0


@pytest.mark.parametrize("kind", [np.uint8, np.uint16, np.float32, np.float64])
def test_any_stored_type_becomes_float32_light(kind):
    linear = Light("srgb").to_linear(np.array([[0, 255]], kind))
    assert linear.dtype == np.float32
    assert linear.tolist() == [[0.0, 1.0]]


def test_the_mean_of_black_and_white_is_code_188_in_linear_light():
    # sRGB: code 187.5 is linear 0.5 (common practice)
    light = Light("srgb")
    mean = light.to_linear(np.array([0, 255])).mean()
    assert np.rint(light.to_codes(mean)) == 188


@pytest.mark.parametrize("curve", [*CURVES, "gamma 0.2", "gamma 5"])
def test_known_curves_pass(curve):
    assert check_curve(curve) == curve


@pytest.mark.parametrize("curve", ["sRGB", "log", "gamma", "gamma 0.1", "gamma 5.1", "gamma -2", ""])
def test_other_curves_are_refused(curve):
    with pytest.raises(ValueError, match='is not a light curve; expected "linear", "srgb", "bt709" or "gamma 2.2"'):
        check_curve(curve)


def test_luma_is_bt709_of_linear_light_and_grey_passes():
    # Recommendation ITU-R BT.709: 0.2126, 0.7152, 0.0722
    primaries = np.eye(3, dtype=np.float32)[None]
    np.testing.assert_allclose(luma(primaries), [[0.2126, 0.7152, 0.0722]], rtol=1e-6)
    assert luma(primaries).dtype == np.float32
    grey = np.full((2, 3), 0.4, np.float32)
    assert luma(grey) is grey
    np.testing.assert_allclose(luma(np.repeat(grey[..., None], 3, axis=2)), grey, rtol=1e-6)


def test_the_logarithm_is_finite_at_and_below_black():
    light = np.float32([-0.5, 0.0, 1.0])
    found = log_light(light)
    assert found.dtype == np.float32
    np.testing.assert_allclose(found, np.log([LOG_FLOOR, LOG_FLOOR, 1 + LOG_FLOOR]), rtol=1e-6)
