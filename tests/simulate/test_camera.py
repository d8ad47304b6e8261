"""The frame camera against textbook values: noise, blur, flicker, curve."""

from dataclasses import dataclass

import numpy as np
import pytest

from enhance.simulate import Camera, EventSensor, simulate

CLEAN = {"bits": 16, "full_well": None}


@dataclass(frozen=True)
class Flat:
    level: float = 0.4
    size: tuple = (24, 16)
    speed_px_s: float = 0.0
    name: str = "flat"

    def render(self, t_s):
        return np.full(self.size[::-1], self.level, dtype=np.float32)


@dataclass(frozen=True)
class Grating:
    """A sine of `cycles` a pixel that pans to the right."""

    cycles: float
    speed_px_s: float
    size: tuple = (200, 4)
    name: str = "grating"

    def render(self, t_s):
        x = np.arange(self.size[0]) - self.speed_px_s * t_s
        return np.tile(0.5 + 0.4 * np.sin(2 * np.pi * self.cycles * x), (self.size[1], 1)).astype(np.float32)


@dataclass(frozen=True)
class Edge:
    """A step from 0.2 to 0.8 that pans to the right, averaged over each pixel's width."""

    speed_px_s: float
    size: tuple = (60, 4)
    name: str = "edge"

    def render(self, t_s):
        at = 40.0 - self.speed_px_s * t_s
        cover = np.clip(np.arange(self.size[0]) + 0.5 - at, 0.0, 1.0)
        return np.tile(0.2 + 0.6 * cover, (self.size[1], 1)).astype(np.float32)


def frames_of(scene, camera, sensor=None, duration_s=0.1, seed=3):
    source = simulate(scene, camera, sensor or EventSensor(), duration_s, seed).recording.frames
    return np.stack([source.frame(i).image for i in range(len(source))]), source


@pytest.mark.parametrize("level", [0.05, 0.5, 0.9])
def test_noise_is_that_of_the_electrons_counted(level):
    # Poisson: variance = mean; read noise adds in quadrature (textbook)
    camera = Camera(bits=16, full_well=10_000.0, read_noise=20.0, exposure_us=1000, start_us=0)
    images, _ = frames_of(Flat(level, (200, 200)), camera, duration_s=0.002)
    electrons = images[0].astype(np.float64) * 10_000
    assert electrons.mean() == pytest.approx(level * 10_000, abs=3)
    assert electrons.var() == pytest.approx(level * 10_000 + 400, rel=0.03)


@pytest.mark.parametrize(("cycles", "kept"), [(0.05, 0.6366), (0.1, 0.0), (0.25, 0.1273), (0.06034, 0.5)])
def test_ten_pixels_of_motion_blur_leave_the_contrast_of_a_box(cycles, kept):
    # |sin(pi d f) / (pi d f)| for d = 10 (textbook); 16-bit, noise free
    camera = Camera(exposure_us=10_000, start_us=0, **CLEAN)
    images, _ = frames_of(Grating(cycles, 1000.0), camera, duration_s=0.02)
    phase = np.exp(-2j * np.pi * cycles * np.arange(200))
    amplitude = 2 * abs(np.mean((images[0, 0] - 0.5) * phase)) / 0.4
    assert amplitude == pytest.approx(kept, abs=0.012)


def test_a_moving_edge_turns_into_a_linear_ramp():
    # 10-90 % rise of a step under d pixels of linear blur = 0.8 d (textbook), d = 20
    camera = Camera(exposure_us=20_000, start_us=0, **CLEAN)
    images, _ = frames_of(Edge(1000.0), camera, duration_s=0.03)
    row = (images[0, 0] - 0.2) / 0.6
    rise = np.interp([0.1, 0.9], row, np.arange(60))
    assert rise[1] - rise[0] == pytest.approx(16.0, abs=0.1)
    inside = np.diff(row)[22:37]
    np.testing.assert_allclose(inside, 1 / 20, rtol=0.03)


@pytest.mark.parametrize("exposure_us", [2000, 5000, 10_000, 15_000])
def test_a_lamp_flickers_through_an_exposure_as_its_sinc_says(exposure_us):
    # mean over [s, s + T): 1 + m sinc(f T) sin(2 pi f (s + T / 2)); gone at T = 10 ms for 100 Hz (textbook)
    camera = Camera(rate_hz=36.0, exposure_us=exposure_us, start_us=1000, **CLEAN)
    images, source = frames_of(Flat(), camera, EventSensor(lamp_hz=100.0, lamp_depth=0.3), duration_s=0.2)
    middle = (source.start_us + source.end_us) / 2e6
    expected = 0.4 * (1 + 0.3 * np.sinc(100 * exposure_us * 1e-6) * np.sin(2 * np.pi * 100 * middle))
    np.testing.assert_allclose(images[:, 3, 3], expected, atol=4e-4)
    assert (np.ptp(images[:, 3, 3]) < 1e-3) == (exposure_us == 10_000)


def test_a_hundred_hertz_lamp_stands_still_at_25_frames_a_second_and_can_be_kept_from_the_camera():
    flicker = EventSensor(lamp_hz=100.0, lamp_depth=0.3)
    still, _ = frames_of(Flat(), Camera(rate_hz=25.0, exposure_us=3000, **CLEAN), flicker, duration_s=0.2)
    assert np.ptp(still[:, 0, 0]) < 1e-4
    steady = Camera(rate_hz=36.0, exposure_us=3000, sees_lamp=False, **CLEAN)
    unlit, _ = frames_of(Flat(), steady, flicker, duration_s=0.2)
    np.testing.assert_allclose(unlit, 0.4, atol=1e-4)


def test_half_the_light_is_code_188_in_srgb():
    # IEC 61966-2-1: linear 0.5 -> 0.7353570, x 255 = 187.5 (recomputed: 187.516)
    camera = Camera(light_curve="srgb", full_well=None)
    codes = camera.capture(np.full((2, 2), 0.5, np.float32), np.random.default_rng(0))
    assert codes.dtype == np.uint8
    assert (codes == 188).all()


@pytest.mark.parametrize(("bits", "kind"), [(8, np.uint8), (10, np.uint16), (12, np.uint16), (16, np.uint16)])
def test_full_scale_is_the_depths_highest_code_and_more_light_is_clipped(bits, kind):
    camera = Camera(bits=bits, full_well=None, black=3.0)
    codes = camera.capture(np.array([[0.0, 1.0, 1.7]], np.float32), np.random.default_rng(0))
    assert codes.dtype == kind
    assert codes.tolist() == [[3, 2**bits - 1, 2**bits - 1]]


def test_exposures_follow_the_rate_and_fit_the_duration():
    starts, ends = Camera(rate_hz=30.0, exposure_us=10_000, start_us=500).exposures(100_000)
    assert starts.tolist() == [500, 33_833, 67_166]
    assert (ends - starts == 10_000).all()
    assert len(Camera(exposure_us=10_000, start_us=0).exposures(10_000)[0]) == 1


@pytest.mark.parametrize(
    ("wrong", "message"),
    [
        ({"bits": 9}, "bits is 9; expected 8, 10, 12 or 16"),
        ({"exposure_us": 40_000}, "exposure_us is 40000; expected .* at most one frame interval, 33333 us"),
        ({"light_curve": "log"}, "'log' is not a light curve"),
    ],
)
def test_settings_that_cannot_be_are_refused(wrong, message):
    with pytest.raises(ValueError, match=message):
        Camera(**wrong)


def test_gain_and_exposure_change_what_each_frame_gets_of_one_light():
    camera = Camera(
        **CLEAN, rate_hz=50.0, exposure_us=8000, start_us=0, exposure_shares=(1.0, 0.5), gains=(1.0, 1.5, 1)
    )
    images, source = frames_of(Flat(0.3), camera, duration_s=0.12)
    assert (source.end_us - source.start_us).tolist() == [8000, 4000, 8000, 4000, 8000, 4000]
    assert source.gain.tolist() == [1, 1.5, 1, 1, 1.5, 1]
    # light = radiance * exposure / longest exposure * gain
    assert images.mean(axis=(1, 2)) == pytest.approx([0.3, 0.225, 0.3, 0.15, 0.45, 0.15], abs=1e-4)


def test_dark_level_and_stripes_are_the_same_in_every_frame():
    images, _ = frames_of(Flat(0.3), Camera(**CLEAN, exposure_us=1000, start_us=0, dark=0.02, stripes=0.005))
    assert np.array_equal(images[0], images[1])
    assert np.ptp(images[0], axis=0).max() == 0
    columns = images[0][0].astype(np.float64)
    # 24 columns: the standard error of a mean is 0.005 / sqrt(24), a standard deviation is within a third of 0.005
    assert columns.mean() == pytest.approx(0.32, abs=3 * 0.005 / np.sqrt(24))
    assert columns.std() == pytest.approx(0.005, rel=0.35)


def test_a_mosaic_lets_each_pixel_see_the_colour_of_its_name():
    colour = np.broadcast_to(np.float32([0.1, 0.2, 0.4]), (4, 6, 3))
    codes = Camera(**CLEAN, mosaic="GBRG").capture(colour, np.random.default_rng(0))
    assert np.rint(codes / 65535 * 10).tolist() == [[2, 4] * 3, [1, 2] * 3] * 2


@pytest.mark.parametrize("wrong", [{"exposure_shares": (1.2,)}, {"gains": (0.0,)}, {"mosaic": "RGB"}])
def test_settings_of_frames_that_cannot_be_are_refused(wrong):
    with pytest.raises(ValueError, match="expected"):
        Camera(**wrong)
