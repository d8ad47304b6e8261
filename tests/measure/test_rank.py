"""Rank correlation: order alone counts."""

import numpy as np
import pytest
from scipy import stats

from enhance.errors import MeasureError
from enhance.measure import rank_correlation


def test_only_the_order_counts():
    rising = [1.0, 2.0, 3.0, 50.0, 1e9]
    assert rank_correlation(rising, np.exp([0, 1, 2, 3, 4])) == pytest.approx(1)
    assert rank_correlation(rising, [5, 4, 3, 2, 1]) == pytest.approx(-1)


def test_a_worked_example_with_ties():
    # by hand: ranks 1, 2.5, 2.5, 4, 5 and 2, 1, 3, 4, 5; sum of products of centred ranks 8, squares 9.5 and 10
    assert rank_correlation([1, 2, 2, 3, 4], [20, 10, 30, 40, 50]) == pytest.approx(8 / np.sqrt(9.5 * 10))


@pytest.mark.parametrize("seed", range(5))
@pytest.mark.parametrize("steps", [3, 1000])
def test_it_is_the_published_coefficient(seed, steps):
    # outside truth: scipy.stats.spearmanr; few steps make many ties
    rng = np.random.default_rng(seed)
    one = rng.integers(0, steps, 40)
    two = one + rng.integers(0, steps, 40)
    assert rank_correlation(one, two) == pytest.approx(stats.spearmanr(one, two).statistic, abs=1e-12)


def test_an_infinite_figure_is_the_highest():
    assert rank_correlation([1, 2, 3, 4, 5], [30, 31, 32, 33, float("inf")]) == pytest.approx(1)


@pytest.mark.parametrize("two", [[1, 2, 3, 4], [7, 7, 7, 7, 7], []])
def test_too_few_or_equal_figures_have_none(two):
    assert rank_correlation(list(range(len(two))), two) is None
    assert rank_correlation(two, list(range(len(two)))) is None


def test_lists_that_do_not_match_are_refused():
    with pytest.raises(MeasureError, match=r"Ranks of \(5,\) and \(6,\) figures; expected two lists of one length"):
        rank_correlation(range(5), range(6))


def test_a_figure_that_is_not_a_number_is_refused():
    with pytest.raises(MeasureError, match="not a number; leave its picture out of both lists"):
        rank_correlation([1, 2, 3, 4, float("nan")], range(5))
