"""Training data: the same from the same number, and symmetric in time."""

from pathlib import Path

import numpy as np
import pytest
import torch

from enhance.interpolate.candidates import Span
from enhance.interpolate.network import INPUTS, START, network_inputs
from enhance.light import encode
from enhance.recording import Contrast, Events
from enhance.train.data import CROP, CROPS, INSTANTS, KEYS, load_shard, make_shard, make_shards, shard_path
from enhance.train.symmetry import reversed_in_time, turned


@pytest.fixture(scope="module")
def shelf(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("recordings")
    make_shards(folder, 5, [5, 6])
    return folder


def test_a_recording_of_the_same_number_is_the_same_to_the_byte(shelf: Path, tmp_path: Path) -> None:
    make_shards(tmp_path, 5, [6])
    assert shard_path(tmp_path, 5, 6).read_bytes() == shard_path(shelf, 5, 6).read_bytes()


def test_what_is_there_already_is_kept(shelf: Path) -> None:
    before = shard_path(shelf, 5, 5).stat()
    make_shards(shelf, 5, [5, 6])
    assert shard_path(shelf, 5, 5).stat().st_mtime_ns == before.st_mtime_ns


def test_a_torn_file_is_made_again(shelf: Path, tmp_path: Path) -> None:
    path = shard_path(tmp_path, 5, 5)
    path.write_bytes(shard_path(shelf, 5, 5).read_bytes()[:5000])
    make_shards(tmp_path, 5, [5])
    assert path.read_bytes() == shard_path(shelf, 5, 5).read_bytes()


def test_crops_hold_what_the_network_sees_and_the_truth_beside_it(shelf: Path) -> None:
    shard = load_shard(shard_path(shelf, 5, 5))
    assert shard.inputs.shape == ((INSTANTS + KEYS) * CROPS, INPUTS, CROP, CROP)
    assert shard.truth.shape == ((INSTANTS + KEYS) * CROPS, 1, CROP, CROP)
    # keys come last and say so
    assert shard.inputs[:, -1, 0, 0].tolist() == [0.0] * INSTANTS * CROPS + [1.0] * KEYS * CROPS
    assert np.isfinite(shard.inputs).all()
    blend, truth = shard.inputs[:, START].astype(np.float32), shard.truth[:, 0].astype(np.float32)
    # The truth belongs to the picture: the blend is nearer to it than to the next crop's.
    assert np.abs(blend - truth).mean() < 0.5 * np.abs(blend - np.roll(truth, CROPS, axis=0)).mean()


def test_held_out_recordings_are_whole_pictures() -> None:
    shard = make_shard(5, 5, held_out=True)
    assert shard.inputs.shape[2:] == tuple(shard.recipe["size"][::-1])


def _span_and_its_reverse() -> tuple[Span, Span, int]:
    rng = np.random.default_rng(4)
    keys = [(0.5 + 0.3 * np.kron(rng.random((6, 8)), np.ones((8, 8)))).astype(np.float32) for _ in range(2)]
    count = 4000
    t = np.sort(rng.choice(np.arange(1, 20_000), count, replace=False)).astype(np.int64)
    # no event on the instant itself, which belongs to one side of it only
    t[t == 7_000] = 7_001
    x, y = rng.integers(0, 64, count).astype(np.uint16), rng.integers(0, 48, count).astype(np.uint16)
    polarity = rng.choice([-1, 1], count).astype(np.int8)
    order = slice(None, None, -1)
    forward = Events(t, x, y, polarity)
    # backward, what was gained is lost: signs turn, and the thresholds change places
    backward = Events(20_000 - t[order], x[order], y[order], -polarity[order])
    one = Span(*keys, (0, 20_000), forward, Contrast(0.05, 0.04))
    other = Span(*keys[order], (0, 20_000), backward, Contrast(0.04, 0.05))
    return one, other, 7_000


def test_a_span_run_backward_gives_the_turned_inputs() -> None:
    one, other, time_us = _span_and_its_reverse()
    forward = torch.from_numpy(network_inputs(one.at(time_us)))
    backward = torch.from_numpy(network_inputs(other.at(20_000 - time_us)))
    np.testing.assert_allclose(reversed_in_time(forward).numpy(), backward.numpy(), atol=2e-4)
    assert np.abs(forward.numpy() - backward.numpy()).max() > 0.1


def test_twice_backward_is_forward() -> None:
    inputs = torch.rand(3, INPUTS, 8, 8, generator=torch.Generator().manual_seed(1))
    torch.testing.assert_close(reversed_in_time(reversed_in_time(inputs)), inputs)


def test_turning_moves_inputs_and_truth_together() -> None:
    truth = torch.rand(1, 8, 8, generator=torch.Generator().manual_seed(2))
    inputs = truth.repeat(INPUTS, 1, 1)
    seen = set()
    for seed in range(60):
        channels, picture = turned(inputs, truth, np.random.default_rng(seed))
        torch.testing.assert_close(channels[START], picture[0])
        seen.add(picture.numpy().tobytes())
    # four turns, each mirrored or not
    assert len(seen) == 8


def test_signal_is_srgb_and_clipped() -> None:
    from enhance.train.spoil import signal

    # IEC 61966-2-1: linear 0.5 is 0.7353570
    np.testing.assert_allclose(signal(np.float32([-0.2, 0.5, 1.7])), [0, 0.7353570, 1], atol=1e-6)
    assert encode("srgb", np.float32([0.5])).dtype == np.float32
