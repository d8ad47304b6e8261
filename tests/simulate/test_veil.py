"""What one sees through, dye and glass, and what is small and fast: motion, light and textures are as they say."""

import cv2
import numpy as np
import pytest

from enhance.simulate import KINDS, make_scene, texture
from enhance.simulate.motion import Motion
from enhance.simulate.sampling import OVERSAMPLE
from enhance.simulate.scene import LayeredScene, Part, Still, Surface
from enhance.simulate.texture import PHOTOGRAPHS
from enhance.simulate.veil import HIGHLIGHT, Dye, Flow, Sheet, dye, highlight, pane, stirred

SIZE = (96, 64)


def scene(kind, seed, textures="train"):
    return make_scene(kind, SIZE, np.random.default_rng(seed), 400.0, textures=textures)


def grid(step, low=-60, high=200):
    return np.stack(np.meshgrid(np.arange(low, high, step), np.arange(low, high, step)), axis=-1).reshape(-1, 2)


@pytest.mark.parametrize("seed", [1, 2, 3, 4])
def test_no_particle_of_a_flow_is_faster_than_its_bound_and_some_come_near(seed):
    flow = stirred(SIZE, np.random.default_rng(seed), 400.0)
    places, step = grid(4.0), 1e-6
    speed = [
        np.linalg.norm(flow.carried(places, t + step) - flow.carried(places, t), axis=1).max() / step
        for t in np.linspace(0, 1, 21)
    ]
    assert flow.speed_px_s == pytest.approx(400.0)
    assert 0.4 * 400 < max(speed) <= 400 * (1 + 1e-6)


def test_the_bound_of_a_single_shear_is_that_by_hand_and_nearly_reached():
    # by hand: drift 30 along x is lengthened by 20 * 0.1 = 2, hence 1 + sqrt(2) at most; the wave adds 20 * 5
    flow = Flow((30.0, 0.0), np.array([[0.0, 0.1, 20.0, 0.3, 5.0]]))
    assert flow.speed_px_s == pytest.approx(30 * (1 + np.sqrt(2)) + 100)
    assert flow.at_most(50.0).speed_px_s == pytest.approx(50.0)
    places, step, fastest = grid(2.0), 1e-6, 0.0
    for heading in np.linspace(0, 2 * np.pi, 24):
        turned = Flow((30 * np.cos(heading), 30 * np.sin(heading)), flow.waves)
        moved = turned.carried(places, 0.2 + step) - turned.carried(places, 0.2)
        fastest = max(fastest, np.linalg.norm(moved, axis=1).max() / step)
    assert 0.9 * flow.speed_px_s < fastest <= flow.speed_px_s * (1 + 1e-6)


def test_a_flow_is_divergence_free_it_keeps_every_area():
    flow, places, step = stirred(SIZE, np.random.default_rng(5), 400.0), grid(7.0), 1e-4
    ahead = [(flow.carried(places + d, 0.37) - flow.carried(places - d, 0.37)) / (2 * step) for d in np.eye(2) * step]
    area = ahead[0][:, 0] * ahead[1][:, 1] - ahead[0][:, 1] * ahead[1][:, 0]
    np.testing.assert_allclose(area, 1.0, atol=1e-6)
    # and it stretches what it carries, which a mere drift would not
    assert np.linalg.norm(ahead[0], axis=1).max() > 1.2


def test_dye_is_painted_where_its_flow_carries_it():
    side = 256
    texel = np.arange(side) * (2 * np.pi / side)
    # one wave over 128 pixels along x and two along y
    density = (0.5 + 0.2 * np.sin(texel)[None, :] + 0.2 * np.cos(2 * texel)[:, None]).astype(np.float32)
    flow = stirred(SIZE, np.random.default_rng(6), 400.0)
    # all weight on the first cloud, and dye as bright as it is thick: on black, light is the square of coverage
    layer = Dye(np.dstack([density, 0 * density]), np.float32([[0.0], [1.0]]), flow, (np.pi / 2, 0.0))
    black = Still(np.zeros((SIZE[1], SIZE[0], 1), np.float32))
    t = 0.21
    image = LayeredScene("dye", SIZE, (black, layer)).render(t)
    places = grid(3.0, -200, 300)
    now = flow.carried(places, t)
    inside = ((now > 0) & (now < np.array(SIZE) - 1)).all(axis=1)
    seen = cv2.remap(image, *(now[inside].T.astype(np.float32)[..., None]), cv2.INTER_LINEAR)[:, 0]
    turn = places[inside] * (2 * np.pi * OVERSAMPLE / side)
    cover = 0.5 + 0.2 * np.sin(turn[:, 0]) + 0.2 * np.cos(2 * turn[:, 1])
    assert inside.sum() > 300
    np.testing.assert_allclose(seen, cover**2, atol=0.006)


def test_dye_comes_and_goes_and_what_it_does_not_cover_stays():
    density = np.zeros((256, 256, 2), np.float32)
    density[..., 0] = 0.8
    layer = Dye(density, np.float32([[0.1], [0.1]]), Flow((0.0, 0.0), np.empty((0, 5))), (np.pi / 2, np.pi))
    pan = LayeredScene("dye", SIZE, (Still(np.full((64, 96, 1), 0.6, np.float32)), layer))
    # coverage 0.8, then half of it, then none: 0.6 + cover (0.1 - 0.6)
    for t, light in ((0.0, 0.2), (0.5, 0.4), (1.0, 0.6)):
        np.testing.assert_allclose(pan.render(t), light, rtol=1e-5)


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_dye_covers_part_of_its_background_which_shows_through_elsewhere(seed):
    behind = np.full((64, 96, 1), 0.3, np.float32)
    layer = dye(SIZE, 512, np.random.default_rng(seed), 400.0, behind)
    assert layer.density.dtype == np.float32
    assert 0 <= layer.density.min() < 0.05
    assert 0.4 < layer.density.max() <= 0.97


def seam(image):
    across = np.abs(image[:, 0] - image[:, -1]).mean(), np.abs(np.diff(image, axis=1)).mean(axis=(0, 2)).max()
    down = np.abs(image[0] - image[-1]).mean(), np.abs(np.diff(image, axis=0)).mean(axis=(1, 2)).max()
    return max(across[0] / across[1], down[0] / down[1])


def test_dye_and_panes_have_no_seam():
    behind = np.full((64, 96, 1), 0.3, np.float32)
    assert seam(dye(SIZE, 512, np.random.default_rng(2), 400.0, behind).density) <= 1.05
    assert seam(pane(256, np.random.default_rng(2), "train", color=False)) <= 1.05


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_a_pane_lets_a_third_of_the_light_and_more_through_and_bears_a_texture(seed):
    texels = pane(256, np.random.default_rng(seed), "train", color=True)
    light, cover = texels[..., :3], texels[..., 3]
    assert 0.04 < cover.min() < cover.max() < 0.68
    assert (light / cover[..., None]).std() > 0.02
    assert light.min() > 0
    assert (light.max(axis=2) <= cover).all()


def test_changes_behind_glass_show_through_by_what_the_pane_leaves_uncovered():
    texels = pane(256, np.random.default_rng(4), "train", color=False)
    sheet = Sheet(texels, Motion(velocity=(8.0, 0.0)))
    dark, bright = (
        LayeredScene("pane", SIZE, (Still(np.full((64, 96, 1), light, np.float32)), sheet)).render(0.25)
        for light in (0.2, 0.7)
    )
    # after a quarter second the pane has moved by two pixels, that is four texels
    cover = np.roll(texels[..., 1], 4, axis=1)[: 2 * 64 : 2, : 2 * 96 : 2]
    np.testing.assert_allclose(bright - dark, 0.5 * (1 - cover), atol=1e-6)


def test_glass_has_a_surface_behind_a_pane_that_moves_otherwise_and_highlights_before_it():
    layers = scene("glass", 2).layers
    assert isinstance(layers[0], Surface)
    assert isinstance(layers[1], Sheet)
    assert layers[0].motion != layers[1].motion
    assert len(layers) >= 5
    assert len({layer.motion.velocity for layer in layers}) == len(layers)


def test_a_highlight_outshines_full_scale_and_has_a_soft_edge():
    peaks = [highlight(5.0, np.random.default_rng(seed), color=False) for seed in range(8)]
    assert 1.5 < max(texels[..., 0].max() for texels in peaks) <= HIGHLIGHT
    for texels in peaks:
        assert texels[..., 1].max() <= 1.0
        assert np.abs(texels[[0, -1]]).max() == np.abs(texels[:, [0, -1]]).max() == 0
        # from nothing to all over several texels
        assert np.abs(np.diff(texels[..., 1], axis=1)).max() < 0.5


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_specks_are_small_and_each_has_its_own_speed_and_heading(seed):
    still, *specks = scene("specks", seed).layers
    assert isinstance(still, Still)
    assert still.image.std() > 0.02
    assert len(specks) >= 20
    assert all(isinstance(speck, Part) and 3 <= 2 * speck.radius <= 12 for speck in specks)
    speeds = np.array([speck.speed(SIZE) for speck in specks])
    assert speeds.max() == pytest.approx(400.0, rel=0.1)
    assert speeds.min() < 0.5 * speeds.max()
    headings = np.array([np.arctan2(*speck.motion.velocity) for speck in specks])
    assert np.ptp(headings) > np.pi


def test_where_no_speck_passes_the_background_rests():
    pan = scene("specks", 3)
    moved = np.abs(pan.render(0.31) - pan.render(0.3)) > 0
    assert 0 < moved.mean() < 0.5


@pytest.mark.parametrize("kind", KINDS)
def test_no_kind_takes_a_photograph_of_the_other_set(kind, monkeypatch):
    taken, read = [], cv2.imread
    monkeypatch.setattr(texture.cv2, "imread", lambda path, flags: taken.append(path) or read(path, flags))
    for textures, other in (("train", "test"), ("test", "train")):
        for seed in range(3):
            scene(kind, seed, textures)
        assert not [path for path in taken if path.endswith(PHOTOGRAPHS[other])]
        taken.clear()
