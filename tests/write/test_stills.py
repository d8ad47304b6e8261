"""Stills: levels, text, bytes."""

import struct
import zlib
from pathlib import Path

import cv2
import numpy as np
import pytest

from enhance.errors import WriteError
from enhance.light import Light
from enhance.write import cautions, write_still


def chunks(path: Path) -> list[tuple[str, bytes]]:
    """Read a PNG chunk by chunk, as the standard lays it out, checking every checksum."""
    data = path.read_bytes()
    assert data[:8] == b"\x89PNG\r\n\x1a\n"
    found, at = [], 8
    while at < len(data):
        (length,) = struct.unpack(">I", data[at : at + 4])
        kind, body = data[at + 4 : at + 8], data[at + 8 : at + 8 + length]
        assert struct.unpack(">I", data[at + 8 + length : at + 12 + length])[0] == zlib.crc32(kind + body)
        found.append((kind.decode(), body))
        at += 12 + length
    return found


@pytest.mark.parametrize("light", [Light("linear", 0, 255), Light("srgb", 16, 255), Light("gamma 2.2", 64, 4095)])
@pytest.mark.parametrize("shape", [(9, 7), (9, 7, 3)])
def test_a_level_is_the_code_value_in_65535ths_of_full_scale(tmp_path: Path, light, shape):
    codes = np.random.default_rng(1).uniform(light.black, light.white, shape)
    write_still(tmp_path / "a.png", light.to_linear(codes), light, {})
    stored = cv2.imread(str(tmp_path / "a.png"), cv2.IMREAD_UNCHANGED)
    stored = stored if stored.ndim == 2 else stored[..., ::-1]
    assert stored.dtype == np.uint16
    # half a level of rounding, and what float32 loses through the curve and back
    np.testing.assert_allclose(stored, codes / light.white * 65535, atol=0.7)


def test_light_beyond_the_scale_is_clipped_and_never_wraps(tmp_path: Path):
    write_still(tmp_path / "a.png", np.float32([[-0.5, 0.0, 1.0, 7.0]]), Light("srgb", 0, 255), {})
    stored = cv2.imread(str(tmp_path / "a.png"), cv2.IMREAD_UNCHANGED)
    assert stored.tolist() == [[0, 0, 65535, 65535]]


def test_colour_is_stored_in_the_order_red_green_blue(tmp_path: Path):
    write_still(tmp_path / "a.png", np.float32([[[1.0, 0.5, 0.0]]]), Light("linear"), {})
    kinds = dict(chunks(tmp_path / "a.png"))
    assert kinds["IHDR"][8:10] == bytes([16, 2])  # bit depth, true colour
    assert zlib.decompress(kinds["IDAT"])[1:] == struct.pack(">HHH", 65535, 32768, 0)


def test_text_stands_behind_the_header_uncompressed_in_order(tmp_path: Path):
    text = {
        "Kind": "inserted",
        "Scene time (us)": "12345678",
        "Line": "Füllung 3",
        "Title": "Ω wheel",
        "Caution": cautions.SHORT,
    }
    write_still(tmp_path / "a.png", np.zeros((3, 3), np.float32), Light("linear"), text)
    found = chunks(tmp_path / "a.png")
    assert [kind for kind, _ in found[:6]] == ["IHDR", "tEXt", "tEXt", "tEXt", "iTXt", "tEXt"]
    assert found[1][1] == b"Kind\0inserted"
    assert found[3][1] == "Line\0Füllung 3".encode("latin-1")
    assert found[4][1] == b"Title\0\0\0\0\0" + "Ω wheel".encode()
    assert found[5][1].startswith(b"Caution\0Made pictures, not evidence")
    assert cv2.imread(str(tmp_path / "a.png"), cv2.IMREAD_UNCHANGED).shape == (3, 3)


def test_the_same_picture_gives_the_same_bytes(tmp_path: Path):
    image = np.random.default_rng(2).random((20, 30, 3)).astype(np.float32)
    for name in "ab":
        write_still(tmp_path / f"{name}.png", image, Light("srgb"), {"Kind": "deblurred"})
    assert (tmp_path / "a.png").read_bytes() == (tmp_path / "b.png").read_bytes()


@pytest.mark.parametrize("keyword", ["", " Kind", "x" * 80, "Ω", "a\nb"])
def test_a_keyword_that_png_forbids_is_refused_and_nothing_written(tmp_path: Path, keyword):
    with pytest.raises(WriteError, match="is no PNG keyword; expected 1 to 79 printable Latin-1"):
        write_still(tmp_path / "a.png", np.zeros((3, 3), np.float32), Light("linear"), {keyword: "x"})
    assert list(tmp_path.iterdir()) == []


def test_a_value_that_is_not_finite_is_refused_with_its_place(tmp_path: Path):
    image = np.zeros((4, 5), np.float32)
    image[2, 3] = np.nan
    with pytest.raises(WriteError, match="not finite at row 2, column 3"):
        write_still(tmp_path / "a.png", image, Light("srgb"), {})
    assert list(tmp_path.iterdir()) == []
