"""Trust: causes that are seen where they act, an error map that adds them up, and what is said of a wrong file."""

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from enhance.errors import ModelError
from enhance.interpolate import Span, analytic_blend
from enhance.interpolate.trust import (
    CAUSES,
    FLOOR,
    FRAME_CAUSES,
    KINDS,
    MOST_SCALE,
    WINDOW,
    Fitted,
    cause_maps,
    frame_cause_maps,
    load_trust,
    own_signal,
)
from enhance.light import Light
from enhance.recording import Contrast, Events
from enhance.rig import Quantity, Rig

LIGHT = Light("srgb", 0, 255)
SHAPE = (48, 64)


@pytest.fixture
def rig() -> Rig:
    return Rig(
        offset_us=Quantity(0),
        drift_ppm=Quantity(0.0),
        contrast_positive=Quantity(0.2),
        contrast_negative=Quantity(0.2),
        sensor_size=SHAPE[::-1],
    )


@pytest.fixture
def still():
    """Candidates of a scene at rest."""
    key = np.random.default_rng(1).uniform(0.2, 0.8, SHAPE).astype(np.float32)
    return Span(key, key, (0, 1000), Events.none(), Contrast(0.2, 0.2)).at(400)


def maps_of(candidates, rig, picture=None, miss=0.0):
    picture = analytic_blend(candidates) if picture is None else picture
    nothing = np.zeros(SHAPE, np.float32)
    return dict(
        zip(CAUSES, cause_maps(candidates, picture, nothing, nothing + np.float32(miss), LIGHT, rig), strict=True)
    )


def test_at_rest_only_noise_and_the_floor_remain(still, rig):
    maps = maps_of(still, rig)
    for cause in set(CAUSES) - {"floor", "frame noise"}:
        np.testing.assert_allclose(maps[cause], 0, atol=1e-9, err_msg=cause)
    # sRGB at linear 0.5: d signal / d light is 0.615 (IEC 61966-2-1 by hand: 1.055 / 2.4 * 0.5^(1 / 2.4 - 1) / 1)
    flat = np.full(SHAPE, 0.5, np.float32)
    even = replace(still, stack=np.broadcast_to(flat, still.stack.shape), carried=flat)
    slope = 1.055 / 2.4 * 0.5 ** (1 / 2.4 - 1)
    noise = float(rig.noise(flat)[0, 0]) * slope
    np.testing.assert_allclose(maps_of(even, rig, flat)["frame noise"], noise**2, rtol=0.01)


def test_a_cause_acts_where_it_is_and_within_its_window(still, rig):
    stack = still.stack.copy()
    stack[3, 20:24, 30:34] += 0.2
    found = maps_of(replace(still, stack=stack), rig, still.carried)["moved pictures disagree"]
    assert found[22, 32] > 1e-4
    away = np.ones(SHAPE, bool)
    away[20 - WINDOW // 2 : 24 + WINDOW // 2, 30 - WINDOW // 2 : 34 + WINDOW // 2] = False
    np.testing.assert_allclose(found[away], 0, atol=1e-8)


@pytest.mark.parametrize(
    ("cause", "change"),
    [
        ("carried pictures disagree", lambda c: {"stack": np.concatenate([c.stack[:1] + 0.1, c.stack[1:]])}),
        ("thresholds over the keys' exposures", lambda c: {"exposed": c.exposed + 6}),
        ("thresholds over the events to the nearer key", lambda c: {"counts": c.counts + 6}),
        ("light that came and went", lambda c: {"counts": c.counts + 6}),
        ("edges where events fired", lambda c: {"counts": c.counts + 6}),
        ("events miss the keys' difference", lambda c: {"mismatch": c.mismatch + 0.3}),
    ],
)
def test_more_of_a_cause_is_a_larger_map(still, rig, cause, change):
    before = maps_of(still, rig, still.carried)
    after = maps_of(replace(still, **change(still)), rig, still.carried)
    assert after[cause].mean() > before[cause].mean() + 1e-6


def test_a_neighbour_that_misses_when_exposed_again_is_a_cause(still, rig):
    assert maps_of(still, rig, miss=0.2)["neighbour re-exposed"].mean() > 1e-4


def test_the_error_map_is_the_weighed_sum_of_its_causes():
    maps = np.random.default_rng(2).uniform(0, 1e-3, (3, 8, 9)).astype(np.float32)
    plain = Fitted(np.array([1.0, 2.0, 0.0]), np.zeros(3), np.ones(3))
    np.testing.assert_allclose(plain.error_map(maps), maps[0] + 2 * maps[1], rtol=1e-5)


def test_the_scale_is_a_product_of_powers_and_bounded():
    maps = np.stack([np.full((8, 9), value, np.float32) for value in (1e-4, 4e-4)])
    fitted = Fitted(np.array([1.0, 0.0]), np.array([0.0, 0.5]), np.array([1e-4, 1e-4]))
    # by hand: 1e-4 * sqrt(4)
    np.testing.assert_allclose(fitted.error_map(maps), 2e-4, rtol=1e-5)
    wild = Fitted(np.array([1.0, 0.0]), np.array([0.0, 50.0]), np.array([1e-4, 1e-4]))
    np.testing.assert_allclose(wild.error_map(maps), MOST_SCALE * 1e-4, rtol=1e-5)


def test_frames_alone_are_doubted_where_their_sides_disagree_and_edges_move(rig):
    sides = np.full((2, *SHAPE), 0.4, np.float32)
    sides[1, :, 40:] = 0.6
    flow = np.zeros((*SHAPE, 2), np.float32)
    maps = dict(zip(FRAME_CAUSES, frame_cause_maps(sides, flow, sides[1], LIGHT, rig), strict=True))
    assert maps["sides disagree"][:, 50].min() > 1e-3
    np.testing.assert_allclose(maps["sides disagree"][:, 10], 0, atol=1e-9)
    np.testing.assert_allclose(maps["edges that move"], 0, atol=1e-9)
    moving = frame_cause_maps(sides, flow + 3, sides[1], LIGHT, rig)[FRAME_CAUSES.index("edges that move")]
    assert moving[:, 40].min() > 1e-4


def test_own_signal_is_code_over_full_scale_and_clipped():
    # IEC 61966-2-1: linear 0.5 is 0.7353570
    np.testing.assert_allclose(own_signal(np.float32([-0.1, 0.5, 1.5]), LIGHT), [0, 0.7353570, 1], atol=1e-5)


def written(folder: Path, **changed) -> Path:
    kinds = {kind: {cause: [1.0, 0.0, float(FLOOR)] for cause in causes} for kind, causes in KINDS.items()} | changed
    path = folder / "trust.json"
    path.write_text(json.dumps({"kinds": kinds}))
    return path


def test_what_was_fitted_comes_back_from_its_file(tmp_path):
    model = load_trust(written(tmp_path))
    assert set(model.kinds) == set(KINDS)
    np.testing.assert_array_equal(model.kinds["inserted by network"].coefficients, np.ones(len(CAUSES)))


@pytest.mark.parametrize(
    "wrong",
    [
        {"inserted by network": {}},
        {"inserted by frames": {cause: [-1.0, 0.0, 1.0] for cause in FRAME_CAUSES}},
        {"inserted by frames": {cause: [1.0, 0.0, 0.0] for cause in FRAME_CAUSES}},
        {"inserted by frames": {cause: [1.0, 0.0] for cause in FRAME_CAUSES}},
    ],
)
def test_a_wrong_file_is_named(tmp_path, wrong):
    with pytest.raises(ModelError, match=r"trust\.json: what trust in pictures rests on cannot be read.*reinstall"):
        load_trust(written(tmp_path, **wrong))


def test_a_missing_file_is_named(tmp_path):
    with pytest.raises(ModelError, match=r"nowhere\.json: what trust"):
        load_trust(tmp_path / "nowhere.json")
