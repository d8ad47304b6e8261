"""Tables and records."""

import csv
import json
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

from enhance.errors import WriteError
from enhance.recording import Kind
from enhance.write import write_json, write_table, write_text


def test_cells_have_one_fixed_form(tmp_path: Path):
    row = [
        1_589_163_147_364_965,
        None,
        float("nan"),
        34.14159,
        float("inf"),
        -1e-9,
        Kind.INSERTED,
        True,
        np.float32(0.5),
    ]
    write_table(tmp_path / "t.csv", list("abcdefghi"), [row])
    assert (tmp_path / "t.csv").read_bytes() == (
        b"a,b,c,d,e,f,g,h,i\n1589163147364965,,,34.1416,inf,0.0000,inserted,true,0.5000\n"
    )


def test_text_with_commas_quotes_and_umlauts_comes_back(tmp_path: Path):
    write_table(tmp_path / "t.csv", ["still", "note"], [["stills/a, b.png", 'says "sharp", größer']])
    with open(tmp_path / "t.csv", encoding="utf-8", newline="") as file:
        assert list(csv.reader(file))[1] == ["stills/a, b.png", 'says "sharp", größer']


def test_a_row_of_another_length_is_refused_with_its_number(tmp_path: Path):
    with pytest.raises(WriteError, match=r"t.csv, row 1: 1 cells, expected 2 \(a, b\)"):
        write_table(tmp_path / "t.csv", ["a", "b"], [[1, 2], [3]])
    assert list(tmp_path.iterdir()) == []


def test_records_are_sorted_plain_and_end_with_a_line_end(tmp_path: Path):
    record = {
        "z": np.int64(3),
        "a": {"psnr": float("inf"), "ssim": float("nan"), "low": -np.inf},
        "rate": Fraction(30000, 1001),
        "kind": Kind.CAPTURED,
        "path": Path("stills") / "a.png",
        "list": (np.float64(0.25), None, True, np.arange(2)),
        5: "Füllung",
    }
    write_json(tmp_path / "r.json", record)
    text = (tmp_path / "r.json").read_text(encoding="utf-8")
    assert text.endswith("}\n")
    assert "Füllung" in text
    loaded = json.loads(text, parse_constant=lambda name: pytest.fail(f"{name} is not JSON"))
    assert list(loaded) == sorted(loaded)
    assert loaded["a"] == {"psnr": "inf", "ssim": None, "low": "-inf"}
    assert loaded["rate"] == "30000/1001"
    assert loaded["kind"] == "captured"
    assert loaded["path"] == "stills/a.png"
    assert loaded["list"] == [0.25, None, True, [0, 1]]
    assert loaded["z"] == 3


def test_a_value_without_plain_form_is_refused_with_its_place(tmp_path: Path):
    with pytest.raises(WriteError, match=r"frames\.sizes\[1\] is a set, which has no plain form in JSON"):
        write_json(tmp_path / "r.json", {"frames": {"sizes": [1, {2}]}})
    assert list(tmp_path.iterdir()) == []


def test_plain_text_keeps_its_line_ends(tmp_path: Path):
    write_text(tmp_path / "rig.toml", "a = 1\nµ = 2\n")
    assert (tmp_path / "rig.toml").read_bytes() == "a = 1\nµ = 2\n".encode()
