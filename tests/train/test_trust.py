"""Fitting trust: coefficients that are known come back, and figures say what holds."""

import numpy as np
import pytest

from enhance.train.trust import Row, figures, fit

K = 4


def rows(count: int, coefficients: np.ndarray, noise: float, seed: int = 1) -> list[Row]:
    rng = np.random.default_rng(seed)
    causes = np.exp(rng.normal(-9, 1.5, (count, K)))
    errors = causes @ coefficients * np.exp(noise * rng.standard_normal(count))
    return [
        Row("inserted by network", k // 6, c, float(e)) for k, (c, e) in enumerate(zip(causes, errors, strict=True))
    ]


def test_a_sum_of_causes_is_found_again() -> None:
    wanted = np.array([0.5, 2.0, 0.0, 1.0])
    fitted = fit(rows(400, wanted, 0.05))
    judged = rows(200, wanted, 0.0, seed=2)
    found = figures(judged, fitted)
    assert found["within_2_db"] > 0.97
    assert found["rank_correlation"] > 0.98
    assert abs(found["bias_db"]) < 0.3


def test_one_wild_picture_pulls_no_harder_than_others() -> None:
    wanted = np.array([0.5, 2.0, 0.0, 1.0])
    plain = rows(300, wanted, 0.05)
    wild = [*plain, Row("inserted by network", 99, plain[0].causes, plain[0].error * 1e6)]
    one, other = (figures(rows(100, wanted, 0.0, seed=3), fit(some))["bias_db"] for some in (plain, wild))
    assert abs(one - other) < 0.2


def test_figures_of_expectations_that_tell_nothing_say_so() -> None:
    wanted = np.ones(K)
    fitted = fit(rows(200, wanted, 0.05))
    shuffled = rows(120, wanted, 0.0, seed=4)
    order = np.random.default_rng(5).permutation(len(shuffled))
    mixed = [Row(r.kind, r.recording, shuffled[k].causes, r.error) for r, k in zip(shuffled, order, strict=True)]
    found = figures(mixed, fitted)
    assert abs(found["rank_correlation"]) < 0.3
    assert found["within_2_db"] < 0.5
    assert found["rank_correlation_within_recordings"] == pytest.approx(0, abs=0.3)
