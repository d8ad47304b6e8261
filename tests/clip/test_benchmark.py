"""The main job on fixed simulated recordings whose truth is known; everything estimated, nothing given.

One recording alone: ``-k fluid-117``. The judging tests at the end measure whatever was not looked at before them.
"""

from collections.abc import Callable, Sequence

import numpy as np
import pytest

from enhance.measure import rank_correlation
from enhance.simulate import BENCHMARK
from enhance.simulate.benchmark import Benchmark

pytestmark = pytest.mark.slow
FACTOR = 8
#: Spans looked at, spread over each recording: its first and last keys have neighbours on one side only, as in life.
SPANS = (0, 4, 7)
KINDS = tuple(dict.fromkeys(entry.kind for entry in BENCHMARK))
KEYS = ("captured", "baseline", "off", "ours")
INSERTED = ("flow", "baseline", "off", "ours")


class Measured:
    """Means of one recording's figures, and what was expected of its inserted pictures beside what came true."""

    def __init__(self, ways) -> None:
        # the simulated clocks are one: this is by how much the estimate is wrong
        self.clock_error_us = ways.rig.offset_us.value
        keys = [ways.key(k) for k in SPANS]
        found, self.expected, self.true = [], [], []
        for k in SPANS:
            for time_us in ways.instants(k, FACTOR):
                figures, picture = ways.inserted(k, time_us)
                found.append(figures)
                if picture.expected_psnr is not None:
                    self.expected.append(picture.expected_psnr)
                    self.true.append(figures["ours"])
        self.key = {name: float(np.mean([f[name] for f in keys])) for name in KEYS}
        self.inserted = {name: float(np.mean([f[name] for f in found])) for name in INSERTED}


@pytest.fixture(scope="module")
def measured(ways, network, trust) -> Callable[[Benchmark], Measured]:
    """Return what measures a recording, once."""
    kept: dict[str, Measured] = {}

    def look(entry: Benchmark) -> Measured:
        if entry.name not in kept:
            kept[entry.name] = Measured(ways(entry.record(), network, trust=trust))
        return kept[entry.name]

    return look


def row(name: str, values: Sequence[float]) -> str:
    return f"{name:20}" + "".join(f"{value:9.2f}" for value in values)


@pytest.mark.parametrize("entry", BENCHMARK, ids=lambda entry: entry.name)
def test_a_recording_gains_by_its_events(entry: Benchmark, measured, capsys: pytest.CaptureFixture[str]) -> None:
    found = measured(entry)
    with capsys.disabled():
        print(f"\n{entry.name:12} keys: " + ", ".join(f"{n} {v:.2f}" for n, v in found.key.items()), end="; ")
        print("inserted: " + ", ".join(f"{n} {v:.2f}" for n, v in found.inserted.items()), end="; ")
        print(f"clock off by {found.clock_error_us} us", end=" ")
    assert found.key["ours"] >= found.key["captured"]
    assert found.inserted["ours"] >= found.inserted["flow"]


def test_keys_and_inserted_pictures_reach_their_targets(measured, capsys: pytest.CaptureFixture[str]) -> None:
    by_kind = {kind: [measured(entry) for entry in BENCHMARK if entry.kind == kind] for kind in KINDS}
    with capsys.disabled():
        print("\n" + " " * 20 + "".join(f"{kind:>9}" for kind in (*KINDS, "mean")))
        for name in KEYS:
            figures = [np.mean([one.key[name] for one in by_kind[kind]]) for kind in KINDS]
            print(row(f"key: {name}", [*figures, mean(by_kind, "key", name)]))
        for name in INSERTED:
            figures = [np.mean([one.inserted[name] for one in by_kind[kind]]) for kind in KINDS]
            print(row(f"inserted: {name}", [*figures, mean(by_kind, "inserted", name)]))
    for kind, these in by_kind.items():
        ours, baseline = (np.mean([one.inserted[name] for one in these]) for name in ("ours", "baseline"))
        assert ours >= baseline, f"{kind}: inserted pictures are below the baseline"
    assert mean(by_kind, "key", "ours") >= mean(by_kind, "key", "baseline") + 2.5
    assert mean(by_kind, "inserted", "ours") >= mean(by_kind, "inserted", "flow") + 10.0
    assert mean(by_kind, "inserted", "ours") >= mean(by_kind, "inserted", "baseline") + 3.5


def mean(by_kind: dict[str, list[Measured]], which: str, name: str) -> float:
    """Mean over all recordings, however many each kind has."""
    return float(np.mean([getattr(one, which)[name] for these in by_kind.values() for one in these]))


def test_what_is_expected_of_an_inserted_picture_comes_true(measured, capsys: pytest.CaptureFixture[str]) -> None:
    every = {entry.name: measured(entry) for entry in BENCHMARK}
    expected, true = (np.concatenate([getattr(m, name) for m in every.values()]) for name in ("expected", "true"))
    assert len(expected) == len(BENCHMARK) * len(SPANS) * (FACTOR - 1), "pictures that say nothing of themselves"
    near = float(np.mean(np.abs(expected - true) <= 2.0))
    over_all = rank_correlation(expected, true)
    within = {name: rank_correlation(m.expected, m.true) for name, m in every.items()}
    with capsys.disabled():
        print("\n" + " " * 12 + "   expected       true     within 2 dB    rank correlation")
        for name, m in every.items():
            share = np.mean(np.abs(np.subtract(m.expected, m.true)) <= 2.0)
            print(
                f"{name:12}{np.mean(m.expected):11.2f}{np.mean(m.true):11.2f}{share:16.0%}{within[name] or 0.0:20.2f}"
            )
        inside = np.mean([rank or 0.0 for rank in within.values()])
        print(f"all: {near:.0%} within 2 dB; rank correlation {over_all:.2f}, within recordings {inside:.2f} (mean)")
    assert near >= 0.8
    assert over_all >= 0.8
    assert inside >= 0.5
