"""At a high factor the pictures far from both keys are as good as their places in the span say: nothing drifts."""

from collections.abc import Callable

import numpy as np
import pytest

from enhance.simulate import BENCHMARK
from enhance.simulate.benchmark import Benchmark

pytestmark = pytest.mark.slow
FACTOR = 50
#: Inserted pictures looked at: next to the keys, half way to the middle, and the middle one, which is farthest.
PLACES = (1, 12, 25, 38, 49)
MIDDLE = 25
SPANS = (2, 5)
#: One surface that moves, things that hide each other, and a cloth that bends.
CHOSEN = [next(entry for entry in BENCHMARK if entry.kind == kind) for kind in ("texture", "fan", "cloth")]

Gains = dict[str, float]


def gain(ways, k: int, time_us: int) -> float:
    figures, _ = ways.inserted(k, time_us)
    return figures["ours"] - figures["baseline"]


@pytest.fixture(scope="module")
def gains(ways, network) -> Callable[[Benchmark], Gains]:
    """Return what measures by how much one recording's pictures beat the baseline, mean over spans."""

    def look(entry: Benchmark) -> Gains:
        made = ways(entry.record(), network)
        found = {"factor 8": [gain(made, k, t) for k in SPANS for t in made.instants(k, 8)]}
        for place in PLACES:
            found[f"{place}. of 49"] = [gain(made, k, made.instants(k, FACTOR)[place - 1]) for k in SPANS]
        return {name: float(np.mean(values)) for name, values in found.items()}

    return look


def test_the_25th_inserted_picture_gains_nearly_as_much_as_those_of_factor_8(gains, capsys) -> None:
    found = {entry.name: gains(entry) for entry in CHOSEN}
    with capsys.disabled():
        print("\ngain over the baseline, dB")
        for name, gained in found.items():
            print(f"{name:12} " + ", ".join(f"{place} {value:.2f}" for place, value in gained.items()))
    middle, all_seven = (np.mean([gained[p] for gained in found.values()]) for p in (f"{MIDDLE}. of 49", "factor 8"))
    assert middle >= all_seven - 0.5
