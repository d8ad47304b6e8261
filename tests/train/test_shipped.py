"""The weights that travel with the package, and what their card says of them."""

import json

import numpy as np
import pytest

from enhance.interpolate.candidates import Span
from enhance.interpolate.network import FusionNetwork, fuse, load_network, macs_per_pixel
from enhance.recording import Contrast, Events
from enhance.shipped import shipped_folder
from enhance.train.data import make_shard
from enhance.train.score import SCORED, mean_over_groups, score

#: By how much these weights fall short of the analytic blend on cloth, inserted pictures; they gain on all other kinds.
SHORT = 0.1
PATH = shipped_folder("models") / "fusion.safetensors"


@pytest.fixture(scope="module")
def network() -> FusionNetwork:
    return load_network(PATH)


@pytest.fixture(scope="module")
def card() -> dict:
    return json.loads(PATH.with_suffix(".json").read_text(encoding="utf-8"))


def test_the_card_tells_the_size_of_the_network_that_is_run(network: FusionNetwork, card: dict) -> None:
    told = card["architecture"]
    assert told["macs_per_pixel"] == round(macs_per_pixel(network)) <= 20_000
    assert told["parameters"] == sum(weight.numel() for weight in network.parameters()) <= 300_000
    assert PATH.stat().st_size <= 2_000_000


def test_the_card_tells_a_gain_over_the_blend_on_every_kind_of_scene_but_one(card: dict) -> None:
    held_out = card["held_out"]
    assert len(held_out["by_kind"]) == len(held_out["keys_by_kind"]) == 12
    for row in (*held_out["by_model"].values(), held_out["mean"], held_out["keys_mean"]):
        assert row["network"] > row["start"]
    for table, short in ((held_out["by_kind"], {"cloth": SHORT}), (held_out["keys_by_kind"], {})):
        for kind, row in table.items():
            assert set(SCORED) <= set(row)
            assert row["network"] > row["start"] - short.get(kind, 0.0)


def test_the_readable_card_is_of_the_same_weights(card: dict) -> None:
    assert card["sha256"] in PATH.with_suffix(".md").read_text(encoding="utf-8")


def test_on_recordings_drawn_with_another_seed_the_weights_beat_the_blend(network: FusionNetwork) -> None:
    shards = [make_shard(77, index, held_out=True) for index in (0, 1, 2)]
    means = mean_over_groups(score(network, shards))
    assert means["network"] > means["start"] + 0.3


def test_where_nothing_happens_a_picture_is_the_keys_to_within_their_noise(network: FusionNetwork) -> None:
    rng = np.random.default_rng(8)
    ground = 0.3 + 0.2 * np.kron(rng.random((16, 20)), np.ones((8, 8)))
    noise = 0.01
    left, right = ((ground + noise * rng.standard_normal(ground.shape)).astype(np.float32) for _ in range(2))
    span = Span(left, right, (0, 40_000), Events.none(), Contrast(0.2, 0.2))
    picture, _ = fuse(network, span.at(10_000))
    between = 0.75 * left + 0.25 * right
    assert np.sqrt(np.mean((picture - between) ** 2)) < noise
    # and not a worse picture of what is there
    assert np.mean((picture - ground) ** 2) < 1.05 * np.mean((between - ground) ** 2)
