"""Fitting: it learns, it can be taken up again, and says what it left."""

import json
from pathlib import Path

import numpy as np
import pytest
import torch

from enhance import train
from enhance.errors import JobError, ModelError
from enhance.interpolate.network import INPUTS, MEMBERS, RESIDUAL, START, load_network
from enhance.train.data import Shard, make_shard
from enhance.train.fit import (
    CURVE,
    LEAST_ERROR,
    SOFTNESS,
    STATE,
    Crops,
    Settings,
    Training,
    fit,
    fusion_loss,
    learning_rate,
    load_state,
    save_state,
    train_step,
)
from enhance.train.score import at_rest, mean_over_groups, score, weigh


@pytest.fixture(scope="module")
def shards() -> list[Shard]:
    return [make_shard(5, 5)]


@pytest.fixture(scope="module")
def pictures() -> list[Shard]:
    whole = make_shard(5, 3, held_out=True)
    return [Shard(whole.inputs[:1, :, :96, :96], whole.truth[:1, :, :96, :96], whole.recipe)]


def test_the_loss_is_least_for_equal_pictures_and_counts_signal_and_light() -> None:
    truth = torch.full((1, 1, 4, 4), 0.5)
    losses = [float(fusion_loss(truth + error, truth)) for error in (0.0, 0.01, 0.1)]
    assert losses[0] == pytest.approx(np.log(LEAST_ERROR), rel=1e-5)
    # by hand at 0.1: signal sqrt(0.1^2 + s^2) - s; light 0.318547 - 0.214041 (IEC 61966-2-1), likewise
    error = np.mean([np.hypot(difference, SOFTNESS) - SOFTNESS for difference in (0.1, 0.318547 - 0.214041)])
    assert losses[2] == pytest.approx(np.log(error + LEAST_ERROR), rel=1e-4)
    assert losses[0] < losses[1] < losses[2]


def test_halving_the_error_is_worth_the_same_on_a_hard_crop_as_on_an_easy_one() -> None:
    truth = torch.full((2, 1, 4, 4), 0.5)
    slopes = []
    for size in (0.02, 0.2):
        error = torch.full((2, 1, 1, 1), size, requires_grad=True)
        fusion_loss(truth + error, truth).backward()
        assert error.grad is not None
        slopes.append(float((error.grad * error.detach()).sum()))
    # d loss / d log(error): 10 times the error, yet of one size; without the logarithm it would differ 30 times
    assert 0.5 < slopes[0] / slopes[1] < 2


def test_the_rate_rises_then_falls_to_a_hundredth() -> None:
    rates = [learning_rate(step, 1000) for step in range(1000)]
    assert rates[0] == pytest.approx(2e-5)
    assert 80 < int(np.argmax(rates)) < 120
    assert rates[-1] == pytest.approx(2e-5, rel=0.01)


def test_sixty_steps_on_a_few_crops_beat_the_analytic_blend(shards: list[Shard]) -> None:
    few = Shard(shards[0].inputs[:2], shards[0].truth[:2], shards[0].recipe)
    training = Training.begin(Settings(steps=1000, batch=2))
    training.step = 100  # the warm-up behind it
    torch.set_num_threads(1)
    for _ in range(60):
        train_step(training, Crops([few]))
    inputs, truth = (torch.from_numpy(a.astype(np.float32)) for a in (few.inputs, few.truth))
    with torch.inference_mode():
        fitted, _ = training.network(inputs)
    assert fusion_loss(fitted, truth) < fusion_loss(inputs[:, START:MEMBERS], truth)


def test_an_interrupted_training_ends_with_the_weights_of_an_uninterrupted_one(
    shards: list[Shard], pictures: list[Shard], tmp_path: Path
) -> None:
    settings = Settings(steps=6, batch=2, round_steps=2)
    whole = Training.begin(settings)
    fit(whole, Crops(shards), pictures, tmp_path / "whole")
    first = Training.begin(settings)
    fit(first, Crops(shards), pictures, tmp_path / "cut", until=4)
    again = load_state(tmp_path / "cut")
    assert again.step == 4
    fit(again, Crops(shards), pictures, tmp_path / "cut")
    for part in ("network", "average"):
        for one, other in zip(getattr(whole, part).parameters(), getattr(again, part).parameters(), strict=True):
            assert torch.equal(one, other)
    assert [row["loss"] for row in again.curve] == [row["loss"] for row in whole.curve]
    lines = (tmp_path / "cut" / CURVE).read_text().splitlines()
    assert [line.split(",")[0] for line in lines] == ["step", "2", "4", "6"]


def test_a_damaged_state_is_said_with_its_file(tmp_path: Path) -> None:
    save_state(Training.begin(Settings(steps=2)), tmp_path)
    path = tmp_path / STATE
    path.write_bytes(path.read_bytes()[:-10])
    with pytest.raises(ModelError, match=r"state\.safetensors: no training can be taken up.*begin anew"):
        load_state(tmp_path)


def test_scores_name_every_kind_and_what_they_are_compared_with(pictures: list[Shard]) -> None:
    network = Training.begin(Settings(steps=1)).average
    table = score(network, pictures)
    assert list(table) == [pictures[0].recipe["kind"]]
    row = table[pictures[0].recipe["kind"]]
    assert row["pictures"] == 1
    # the first weights leave no residual
    assert row["network"] == pytest.approx(row["without_residual"], abs=1e-3)
    assert mean_over_groups(table)["start"] == row["start"]
    assert sum(weigh(network, pictures).values()) == pytest.approx(1, abs=1e-5)


def test_at_rest_the_keys_are_compared_where_no_event_is_near() -> None:
    network = Training.begin(Settings(steps=1)).average
    inputs = np.zeros((1, INPUTS, 32, 32), np.float16)
    inputs[:, :MEMBERS] = 0.5
    inputs[:, MEMBERS, :, 16:] = 1.0
    inputs[:, :2, :, 16:] = 0.9
    truth = np.full((1, 1, 32, 32), 0.5 + 2 / 255, np.float16)
    found = at_rest(network, [Shard(inputs, truth, {})])
    assert found["keys"] == pytest.approx(2, abs=0.1)
    assert found["changed"] < 255 * RESIDUAL


def test_a_run_leaves_loadable_weights_with_their_card(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(train, "HELD_OUT", 1)
    monkeypatch.setattr(train, "_steps_within", lambda seconds, crops: 2)
    told: list[tuple[int, int, str]] = []
    path = train.run(
        tmp_path, minutes=0.01, recordings=2, seed=4, resume=False, processes=1, progress=lambda *a: told.append(a)
    )
    load_network(path)
    card = json.loads(path.with_suffix(".json").read_text())
    assert card["architecture"]["macs_per_pixel"] <= 20_000
    assert card["architecture"]["parameters"] <= 300_000
    assert card["training"]["steps"] == 2
    assert card["command"] == "enhance train FOLDER --minutes 0.01 --recordings 2 --seed 4"
    assert card["sha256"] in path.with_suffix(".md").read_text()
    assert told[-1][:2] == (2, 2)
    with pytest.raises(JobError, match="a training stands here already; take it up with --resume"):
        train.run(tmp_path, minutes=1, recordings=2, seed=4, resume=False)
    with pytest.raises(JobError, match="begun with seed 4, not 9; give --seed 4"):
        train.run(tmp_path, minutes=1, recordings=2, seed=9, resume=True)


def test_nothing_to_take_up_is_said(tmp_path: Path) -> None:
    with pytest.raises(JobError, match=r"there is no training to take up \(state\.safetensors is missing\)"):
        train.run(tmp_path / "new", minutes=1, recordings=1, seed=1, resume=True)
