"""What is kept from a network that is to lack something, and that each is fitted and scored."""

from pathlib import Path

import pytest
import torch

from enhance.interpolate.network import INPUTS, MEMBERS, START, FusionNetwork
from enhance.train.ablation import ABLATIONS, ablated, mixture
from enhance.train.data import make_shard
from enhance.train.fit import Crops
from enhance.train.lacking import measure_ablations

MOVED, STRAIGHT, STEADIED = [2, 3], [4, 5], 6


@pytest.fixture
def inputs() -> torch.Tensor:
    known = torch.rand(2, INPUTS, 16, 16, generator=torch.Generator().manual_seed(1))
    known[0, -1], known[1, -1] = 0.0, 1.0
    return known


def changed(inputs: torch.Tensor, without: str, noise: list[int]) -> bool:
    """Whether what stands in some members still reaches the network."""
    other = inputs.clone()
    other[0, noise] += 0.3
    return not torch.equal(ablated(inputs, without)[0], ablated(other, without)[0])


def test_without_warps_nothing_warped_reaches_the_network(inputs: torch.Tensor) -> None:
    assert not changed(inputs, "warps", [*MOVED, *STRAIGHT, STEADIED, START])
    assert changed(inputs, "warps", [0])


def test_without_events_no_member_made_by_them_reaches_the_network(inputs: torch.Tensor) -> None:
    assert not changed(inputs, "events", [0, 1, *MOVED, STEADIED, START - 1, START])
    assert changed(inputs, "events", STRAIGHT)


def test_a_key_keeps_its_own_pictures_without_warps_and_the_captured_one_without_events(inputs: torch.Tensor) -> None:
    torch.testing.assert_close(ablated(inputs, "warps")[1, [*STRAIGHT, START]], inputs[1, [*STRAIGHT, START]])
    left = ablated(inputs, "events")[1, :MEMBERS]
    torch.testing.assert_close(left, inputs[1, 4].expand(MEMBERS, -1, -1))


def test_nothing_is_kept_from_the_others_and_inputs_stay_as_they_are(inputs: torch.Tensor) -> None:
    before = inputs.clone()
    for without in ("", *ABLATIONS):
        ablated(inputs, without)
    assert torch.equal(inputs, before)
    assert ablated(inputs, "residual") is inputs


def test_the_mixture_is_the_picture_less_its_residual(inputs: torch.Tensor) -> None:
    with torch.inference_mode():
        picture, weights = FusionNetwork()(inputs)
    # first weights leave no residual
    torch.testing.assert_close(mixture(inputs, weights), picture)


def test_each_is_fitted_scored_and_kept(tmp_path: Path) -> None:
    crops, held_out = Crops([make_shard(5, 5)]), [make_shard(5, 5, held_out=True)]
    found = measure_ablations(tmp_path, crops, held_out, 2, 1, chosen=("", "events"))
    assert found["steps"] == 2
    assert set(found["networks"]) == {"nothing", "events"}
    assert found["networks"]["nothing"]["inserted"] > found["networks"]["events"]["inserted"]
    assert (tmp_path / "events" / "state.safetensors").is_file()
    assert measure_ablations(tmp_path, crops, held_out, 2, 1, chosen=("", "events")) == found
