"""Trust maps: levels, scale, text."""

from pathlib import Path

import cv2
import numpy as np
import pytest

from enhance.errors import WriteError
from enhance.light import Light
from enhance.write import write_still, write_trust


def read(path: Path) -> np.ndarray:
    return cv2.imread(str(path), cv2.IMREAD_UNCHANGED)


def test_a_level_is_the_root_of_the_expected_squared_error_in_65535ths_of_full_scale(tmp_path: Path):
    error = np.random.default_rng(3).uniform(0, 0.1, (9, 7)).astype(np.float32)
    write_trust(tmp_path / "a.png", error, {})
    stored = read(tmp_path / "a.png")
    assert (stored.dtype, stored.shape) == (np.uint16, (9, 7))
    np.testing.assert_allclose(stored, np.sqrt(error.astype(float)) * 65535, atol=0.5)


def test_the_scale_is_that_of_the_stills(tmp_path: Path):
    # a still that is wrong by 10 codes everywhere: what lies between the two stills is what the map shows
    light, truth = Light("srgb", 16, 235), np.full((4, 5), 100.0)
    for name, codes in (("truth", truth), ("made", truth + 10)):
        write_still(tmp_path / f"{name}.png", light.to_linear(codes), light, {})
    write_trust(tmp_path / "map.png", np.full((4, 5), (10 / 235) ** 2, np.float32), {})
    between = read(tmp_path / "made.png").astype(int) - read(tmp_path / "truth.png")
    np.testing.assert_allclose(read(tmp_path / "map.png"), between, atol=2)


def test_an_error_beyond_full_scale_is_clipped_and_none_is_zero(tmp_path: Path):
    write_trust(tmp_path / "a.png", np.float32([[0, 1, 9]]), {})
    assert read(tmp_path / "a.png").tolist() == [[0, 65535, 65535]]


def test_text_says_what_the_map_means_and_on_which_scale(tmp_path: Path):
    write_trust(tmp_path / "a.png", np.zeros((3, 3), np.float32), {"Kind": "inserted"})
    data = (tmp_path / "a.png").read_bytes()
    places = [
        data.index(words) for words in (b"Kind\0inserted", b"Meaning\0Expected error", b"Scale\0level = expected")
    ]
    assert places == sorted(places)
    assert b"code values / full scale x 65535" in data
    assert b"estimated by the tool itself; not a measurement" in data


def test_the_same_map_gives_the_same_bytes(tmp_path: Path):
    error = np.random.default_rng(4).random((20, 30)).astype(np.float32)
    for name in "ab":
        write_trust(tmp_path / f"{name}.png", error, {"Kind": "deblurred"})
    assert (tmp_path / "a.png").read_bytes() == (tmp_path / "b.png").read_bytes()


@pytest.mark.parametrize("wrong", [np.nan, np.inf, -1e-6])
def test_an_error_that_cannot_be_is_refused_with_its_place_and_nothing_written(tmp_path: Path, wrong):
    error = np.zeros((4, 5), np.float32)
    error[2, 3] = wrong
    with pytest.raises(WriteError, match=r"a.png: .* row 2, column 3 is .*; expected a finite .*output.trust = false"):
        write_trust(tmp_path / "a.png", error, {})
    assert list(tmp_path.iterdir()) == []
