"""The fusion network: its budget, its bounds, its bytes, and what is said of a file that is not it."""

import hashlib
import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import torch
from safetensors.torch import save

from enhance.errors import ModelError
from enhance.interpolate.candidates import Candidates
from enhance.interpolate.network import (
    INPUTS,
    MEMBERS,
    RESIDUAL,
    START,
    FusionNetwork,
    fuse,
    load_network,
    macs_per_pixel,
    network_inputs,
)
from enhance.light import encode


def random_network(seed: int) -> FusionNetwork:
    """Weights that use everything: first ones leave the residual and most weights alone."""
    torch.manual_seed(seed)
    network = FusionNetwork()
    with torch.no_grad():
        network.leave.weight.normal_(0, 0.3)
    return network.eval()


def candidates(height: int = 45, width: int = 62, seed: int = 3) -> Candidates:
    rng = np.random.default_rng(seed)

    def some(*shape: int) -> np.ndarray:
        return rng.random(shape).astype(np.float32)

    flows = (some(height, width, 2), some(height, width, 2))
    counts = np.floor(5 * some(2, height, width))
    return Candidates(
        stack=some(7, height, width),
        carried=some(height, width),
        weight=0.3,
        counts=counts,
        exposed=np.floor(9 * some(2, height, width)),
        mismatch=some(height, width),
        flows=flows,
    )


def test_the_network_keeps_its_budget() -> None:
    assert macs_per_pixel() <= 20_000
    assert sum(weight.numel() for weight in FusionNetwork().parameters()) <= 300_000


def test_macs_a_pixel_are_those_that_run() -> None:
    height, width = 32, 48
    counted = 0

    def count(layer: torch.nn.Conv2d, _: object, output: torch.Tensor) -> None:
        nonlocal counted
        # each output value of a convolution sums over its whole kernel
        counted += output.numel() * layer.weight[0].numel()

    network = FusionNetwork()
    for layer in network.modules():
        if isinstance(layer, torch.nn.Conv2d):
            layer.register_forward_hook(count)
    network(torch.zeros(1, INPUTS, height, width))
    assert macs_per_pixel(network) == pytest.approx(counted / height / width)


def test_a_picture_lies_within_its_candidates_and_the_residual() -> None:
    known = candidates()
    picture = encode("srgb", fuse(random_network(1), known)[0])
    members = network_inputs(known)[:MEMBERS]
    assert (picture <= members.max(axis=0) + RESIDUAL + 1e-5).all()
    assert (picture >= members.min(axis=0) - RESIDUAL - 1e-5).all()
    assert picture.shape == known.mismatch.shape


def test_weights_sum_to_one_and_none_is_negative() -> None:
    inputs = torch.from_numpy(network_inputs(candidates(48, 64)))[None]
    with torch.inference_mode():
        _, weights = random_network(2)(inputs)
    torch.testing.assert_close(weights.sum(dim=1), torch.ones(1, 48, 64))
    assert weights.min() >= 0


def test_fusing_twice_gives_the_same_bytes() -> None:
    network = random_network(4)
    one, other = (fuse(network, candidates())[0] for _ in range(2))
    assert one.tobytes() == other.tobytes()


def test_first_weights_give_back_what_the_network_starts_from() -> None:
    torch.manual_seed(1)
    key = np.full((45, 62), 0.3, np.float32)
    known = replace(candidates(), key=key)
    np.testing.assert_array_equal(network_inputs(known)[START], encode("srgb", key))
    fresh, _ = fuse(FusionNetwork().eval(), known)
    # a weight of exp(3) against eight of exp(0)
    share = np.exp(3) / (np.exp(3) + MEMBERS - 1)
    others = network_inputs(known)[:START].mean(axis=0)
    expected = share * encode("srgb", key) + (1 - share) * others
    np.testing.assert_allclose(encode("srgb", fresh), expected, atol=1e-5)


def test_members_that_agree_have_no_spread() -> None:
    known = candidates()
    same = replace(known, stack=np.broadcast_to(known.carried, known.stack.shape))
    assert fuse(random_network(1), same)[1].max() < 1e-3 * fuse(random_network(1), known)[1].mean()


def test_steady_motion_fits_itself_and_hidden_motion_does_not() -> None:
    known = candidates()
    steady = np.full((*known.mismatch.shape, 2), 4.0, np.float32)
    fitting = replace(known, weight=0.25, flows=(-0.25 * steady, 0.75 * steady))
    cues = network_inputs(fitting)[-4:-2]
    np.testing.assert_allclose(cues[0], 0, atol=1e-6)
    # by hand: ln(1 + 4 sqrt 2) / 2
    np.testing.assert_allclose(cues[1], np.log1p(4 * np.sqrt(2)) / 2, rtol=1e-5)
    lost = replace(known, weight=0.25, flows=(steady, steady))
    assert network_inputs(lost)[-4].min() > 1


def written(folder: Path, data: bytes, sha256: str | None = None) -> Path:
    path = folder / "fusion.safetensors"
    path.write_bytes(data)
    path.with_suffix(".json").write_text(json.dumps({"sha256": sha256 or hashlib.sha256(data).hexdigest()}))
    return path


def test_weights_come_back_from_their_file(tmp_path: Path) -> None:
    network = random_network(5)
    path = written(tmp_path, save(network.state_dict()))
    assert fuse(load_network(path), candidates())[0].tobytes() == fuse(network, candidates())[0].tobytes()


def test_a_damaged_file_is_told_by_both_checksums_and_the_way_round(tmp_path: Path) -> None:
    data = save(random_network(5).state_dict())
    expected = hashlib.sha256(data).hexdigest()
    path = written(tmp_path, data[:-1] + b"?", expected)
    found = hashlib.sha256(data[:-1] + b"?").hexdigest()
    with pytest.raises(ModelError, match=rf'sha256 {found} found, {expected} expected.*set network\.use = "off"'):
        load_network(path)


def test_a_missing_file_is_named(tmp_path: Path) -> None:
    with pytest.raises(ModelError, match=r'nowhere\.safetensors: .*cannot be read.*set network\.use = "off"'):
        load_network(tmp_path / "nowhere.safetensors")


@pytest.mark.parametrize("data", [save({"other": torch.zeros(3)}), b"no safetensors"])
def test_a_foreign_file_is_refused(tmp_path: Path, data: bytes) -> None:
    with pytest.raises(ModelError, match=r"these weights are not for this network"):
        load_network(written(tmp_path, data))
