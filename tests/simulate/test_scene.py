"""Scenes: exact motion, sensible light, reproducible from the generator."""

import dataclasses

import numpy as np
import pytest

from enhance.simulate import KINDS, Scene, make_scene, texture
from enhance.simulate.motion import Fall, Motion
from enhance.simulate.sampling import OVERSAMPLE
from enhance.simulate.scene import Cloth, LayeredScene, Part, Still, Surface
from enhance.simulate.texture import PHOTOGRAPHS, RECIPES, make_texture
from enhance.simulate.veil import HIGHLIGHT

SIZE = (96, 64)


@pytest.mark.parametrize("color", [False, True])
@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_gives_float32_radiance_that_a_camera_could_see(kind, color):
    scene = make_scene(kind, SIZE, np.random.default_rng(11), 400.0, color=color)
    assert isinstance(scene, Scene)
    assert (scene.name, scene.size) == (kind, SIZE)
    for t in (0.0, 0.05, 1.0):
        image = scene.render(t)
        assert image.dtype == np.float32
        assert image.shape == ((64, 96, 3) if color else (64, 96))
        # full scale is 1, which only the highlights on glass pass
        assert 0.01 < image.min() < image.max() < (HIGHLIGHT if kind == "glass" else 1.0)
        assert image.std() > 0.02


@pytest.mark.parametrize("kind", KINDS)
def test_a_scene_follows_from_its_generator_and_moves(kind):
    first, again, other = (make_scene(kind, SIZE, np.random.default_rng(seed), 400.0) for seed in (7, 7, 8))
    np.testing.assert_array_equal(first.render(0.3), again.render(0.3))
    assert not np.array_equal(first.render(0.3), other.render(0.3))
    assert np.abs(first.render(0.3) - first.render(0.31)).max() > 0.01


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_the_fastest_point_is_about_as_fast_as_asked(kind, seed):
    scene = make_scene(kind, SIZE, np.random.default_rng(seed), 400.0)
    assert 0.9 * 400 <= scene.speed_px_s <= 1.1 * 400


def _fastest(motion: Motion, radius: float) -> float:
    """Speed of points on a circle about the centre, by differences, over a second."""
    ring = radius * OVERSAMPLE * np.stack([np.cos(np.arange(12)), np.sin(np.arange(12))])
    step, best = 1e-5, 0.0
    for t in np.linspace(0, 1, 203):
        ends = []
        for time in (t, t + step):
            matrix = motion.matrix(time, (0.0, 0.0))
            ends.append(np.linalg.solve(matrix[:, :2], ring - matrix[:, 2:]))
        moved = np.linalg.norm(ends[1] - ends[0], axis=0).max() / step
        best = max(best, moved)
    return best


@pytest.mark.parametrize(
    "motion",
    [
        Motion(velocity=(30.0, -40.0)),
        Motion(sway=(5.0, 3.0), sway_rate=(9.0, 7.0), sway_phase=(1.0, 2.0)),
        Motion(spin=4.0, angle=1.0),
        Motion(velocity=(20.0, 0.0), swing=0.2, swing_rate=6.0, zoom=0.15, zoom_rate=8.0),
    ],
)
def test_the_bound_on_speed_holds_and_is_not_far_off(motion):
    measured = _fastest(motion, 20.0)
    assert 0.6 * motion.speed(20.0) < measured <= motion.speed(20.0) * 1.001


def test_a_fall_keeps_to_its_bound_and_speeds_up_as_gravity_says():
    fall = Fall(origin=(3.0, -5.0), velocity=(0.0, 100.0), gravity=800.0, period_s=0.2)
    # s = v t + g t^2 / 2 = 10 + 4 = 14 at 0.1 s; begun anew at 0.2 s
    assert fall.position(0.1) == pytest.approx((3.0, 9.0))
    assert fall.position(0.3) == pytest.approx((3.0, 9.0))
    assert fall.speed(2.0) == pytest.approx(260.0)


def test_a_surface_that_moves_by_a_whole_pixel_shows_the_same_pixels_shifted():
    surface = Surface(make_texture(256, np.random.default_rng(2)), Motion(velocity=(1.0, 2.0)))
    scene = LayeredScene("pan", SIZE, (surface,))
    np.testing.assert_allclose(scene.render(3.0)[6:, 3:], scene.render(0.0)[:-6, :-3], atol=2e-6)


def test_a_pattern_keeps_its_contrast_as_it_glides_between_pixels():
    # what bilinear sampling takes from fine detail at half a texel would be flicker to an event sensor
    surface = Surface(make_texture(512, np.random.default_rng(4), recipe="leaves"), Motion(velocity=(1.0, 0.0)))
    scene = LayeredScene("pan", SIZE, (surface,))
    contrast = [np.abs(np.diff(scene.render(t), axis=1)).mean() for t in (0.0, 0.125, 0.25, 0.375)]
    assert np.ptp(contrast) / np.mean(contrast) < 0.04


def test_a_part_hides_what_is_behind_it_and_its_soft_edge_mixes_the_two():
    block = np.zeros((41, 41, 2), dtype=np.float32)
    block[10:31, 10:31] = (0.7, 1.0)
    layers = (Still(np.full((64, 96, 1), 0.2, np.float32)), Part(block, Motion(origin=(50.0, 30.0))))
    image = LayeredScene("block", SIZE, layers).render(0.0)
    np.testing.assert_allclose(image[26:35, 46:55], 0.7, rtol=1e-6)
    np.testing.assert_allclose(image[:, :40], 0.2, rtol=1e-6)
    # texel edges at +-10.5 of the centre: 5.25 pixels; the pixel at 5.5 lies at texel 11, wholly outside
    assert image[30, 56] == pytest.approx(0.2)
    half = dataclasses.replace(layers[1], motion=Motion(origin=(50.25, 30.0)))
    edge = LayeredScene("block", SIZE, (layers[0], half)).render(0.0)[30, 45]
    assert edge == pytest.approx((0.2 + 0.7) / 2, abs=1e-6)


def test_cloth_at_rest_and_unbent_is_its_texture():
    surface = make_texture(256, np.random.default_rng(3))
    cloth = Cloth(surface, (0.0, 0.0), 0.0, np.array([[0.1, 0.0, 0.0, 2.0]]), SIZE)
    flat = LayeredScene("pan", SIZE, (Surface(surface, Motion()),)).render(0.0)
    bent = LayeredScene("cloth", SIZE, (cloth,)).render(0.5)
    # shading 0.9 + 0.04 of a wave is the only difference
    assert (bent / flat).min() == pytest.approx(0.86, abs=0.001)
    assert (bent / flat).max() == pytest.approx(0.94, abs=0.001)


@pytest.mark.parametrize("recipe", RECIPES)
def test_textures_have_no_seam(recipe):
    image = make_texture(256, np.random.default_rng(6), recipe=recipe)
    across = np.abs(image[:, 0] - image[:, -1]).mean(), np.abs(np.diff(image, axis=1)).mean(axis=(0, 2)).max()
    down = np.abs(image[0] - image[-1]).mean(), np.abs(np.diff(image, axis=0)).mean(axis=(1, 2)).max()
    assert across[0] <= across[1] * 1.05
    assert down[0] <= down[1] * 1.05


def test_textures_hold_nothing_finer_than_the_frame_shows():
    image = make_texture(512, np.random.default_rng(6), recipe="leaves")[..., 0]
    power = np.abs(np.fft.rfft2(image - image.mean())) ** 2
    fy, fx = np.abs(np.fft.fftfreq(512))[:, None], np.fft.rfftfreq(512)[None, :]
    # two texels a pixel: the frame's Nyquist frequency is a quarter of a cycle a texel
    assert power[np.hypot(fx, fy) > 0.25].sum() < 1e-3 * power.sum()


def test_training_and_test_share_no_photograph():
    assert not set(PHOTOGRAPHS["train"]) & set(PHOTOGRAPHS["test"])


def test_without_photographs_shapes_take_their_place(monkeypatch):
    monkeypatch.setattr(texture, "_photograph_folder", lambda: None)
    image = make_texture(256, np.random.default_rng(6), recipe="photograph")
    assert image.shape == (256, 256, 1)
    assert image.std() > 0.02


def test_unknown_kinds_and_textures_are_refused():
    with pytest.raises(ValueError, match="'train' is no kind of scene; expected one of texture, parts"):
        make_scene("train", SIZE, np.random.default_rng(0), 100.0)
    with pytest.raises(ValueError, match="'both' is no set of textures"):
        make_scene("fan", SIZE, np.random.default_rng(0), 100.0, textures="both")
