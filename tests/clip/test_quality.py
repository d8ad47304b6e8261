"""quality.json: whether what was expected puts the held-out pictures in the order that was measured."""

import numpy as np
import pytest

from enhance.clip.held_out import COLUMNS, Judged
from enhance.clip.quality import held_out_summary
from enhance.recording import By, Kind, Picture

PICTURE = Picture(np.zeros((2, 2), np.float32), 0, Kind.INSERTED, By.NETWORK)


def judged(**columns: list[float | None]) -> list[Judged]:
    count = len(next(iter(columns.values())))
    rows = [{**dict.fromkeys(COLUMNS), **{name: values[k] for name, values in columns.items()}} for k in range(count)]
    return [Judged(PICTURE, row) for row in rows]


def test_the_order_expected_is_compared_with_the_order_measured() -> None:
    found = held_out_summary(
        judged(
            expected_psnr=[30.0, 31.0, 32.0, 33.0, 34.0],
            expected_psnr_moving=[30.0, 31.0, 32.0, 33.0, 34.0],
            psnr=[20.0, 21.0, 25.0, 26.0, 40.0],
            psnr_moving=[19.0, 18.0, 17.0, 16.0, 15.0],
        ),
        2,
    )["rank_correlation"]
    assert (found["psnr"], found["psnr_moving"]) == (pytest.approx(1), pytest.approx(-1))
    assert found["definition"].startswith("Spearman's rank correlation between the expected PSNR and the figure")


def test_pictures_without_one_of_the_two_are_left_out() -> None:
    found = held_out_summary(
        judged(
            expected_psnr=[30.0, 31.0, None, 32.0, 33.0, 34.0],
            expected_psnr_moving=[30.0, 31.0, None, 32.0, 33.0, 34.0],
            psnr=[20.0, 21.0, 90.0, 25.0, 26.0, 40.0],
            psnr_moving=[None, 18.0, 17.0, 16.0, 15.0, 14.0],
        ),
        2,
    )["rank_correlation"]
    assert found["psnr"] == pytest.approx(1)
    assert found["psnr_moving"] is None  # four are left


@pytest.mark.parametrize("expected", [[None] * 5, [30.0] * 5])
def test_an_expectation_that_is_not_known_or_never_varies_has_no_order(expected: list[float | None]) -> None:
    found = held_out_summary(judged(expected_psnr=expected, psnr=[1.0, 2.0, 3.0, 4.0, 5.0]), 2)["rank_correlation"]
    assert (found["psnr"], found["psnr_moving"]) == (None, None)
