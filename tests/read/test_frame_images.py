"""Folders of images: order, mixtures, damage, and what is ignored on purpose."""

import struct
import zlib

import cv2
import numpy as np
import pytest

from enhance.errors import FramesError, JobError
from enhance.read import open_frames
from enhance.settings import FramesSettings

RAMP = np.arange(20 * 30, dtype=np.uint8).reshape(20, 30)


def opened(folder, count, names=None):
    rows = "".join(f"{name},{1000 * i},{1000 * i + 10}\n" for i, name in enumerate(names or range(count)))
    (folder / "times.csv").write_text("frame,start_us,end_us\n" + rows)
    return open_frames(FramesSettings(folder, times=folder / "times.csv", light_curve="linear"))


def test_names_are_in_natural_order_and_other_files_are_ignored(tmp_path):
    for name in ("f10.png", "f9.png", "f1.png", "f2.TIF", ".f3.png"):
        cv2.imwrite(str(tmp_path / name), RAMP)
    (tmp_path / "notes.txt").write_text("x")
    (tmp_path / "f4.png").mkdir()
    assert opened(tmp_path, 4).names == ("f1.png", "f2.TIF", "f9.png", "f10.png")


def test_types_may_be_mixed(tmp_path):
    cv2.imwrite(str(tmp_path / "a.png"), RAMP)
    cv2.imwrite(str(tmp_path / "b.tif"), RAMP)
    source = opened(tmp_path, 2)
    assert np.array_equal(source.frame(0).image, source.frame(1).image)


@pytest.mark.parametrize(
    ("odd", "found"),
    [
        (RAMP[:, :20], "20 x 20, 8 bit, grey, the others 30 x 20, 8 bit, grey"),
        (RAMP.astype(np.uint16), "30 x 20, 16 bit, grey"),
        (np.dstack([RAMP] * 3), "30 x 20, 8 bit, colour"),
    ],
)
def test_pictures_that_differ_are_named_at_once(tmp_path, odd, found):
    for i in range(4):
        cv2.imwrite(str(tmp_path / f"{i}.png"), odd if i == 2 else RAMP)
    with pytest.raises(FramesError, match=rf"1 of 4 pictures differ from the others: 2.png \({found}"):
        opened(tmp_path, 4)


def test_alpha_is_dropped_with_a_note(tmp_path):
    colour = np.dstack([RAMP, RAMP // 2, RAMP // 3, RAMP])
    cv2.imwrite(str(tmp_path / "0.png"), colour)
    source = opened(tmp_path, 1)
    assert source.shape == (20, 30, 3)
    # cv2 writes B, G, R, A
    assert np.allclose(source.frame(0).image * 255, colour[:, :, 2::-1])
    assert "the alpha channel of 1 pictures is ignored" in source.notes[0]


def png(path, colour, depth, rows, extra=b""):
    """Write a PNG by hand: kinds that OpenCV does not write."""

    def chunk(kind, data):
        return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))

    header = struct.pack(
        ">IIBBBBB", rows.shape[1] * 8 // (depth * rows_per_pixel(colour)), len(rows), depth, colour, 0, 0, 0
    )
    data = zlib.compress(b"".join(b"\0" + row.tobytes() for row in rows))
    path.write_bytes(b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", header) + extra + chunk(b"IDAT", data) + chunk(b"IEND", b""))


def rows_per_pixel(colour):
    return {0: 1, 3: 1, 4: 2}[colour]


def test_palette_grey_with_alpha_and_one_bit_pictures_decode(tmp_path):
    palette = bytes([10, 20, 30, 200, 100, 50])
    indices = np.array([[0, 1], [1, 0]], dtype=np.uint8)
    plte = struct.pack(">I", 6) + b"PLTE" + palette + struct.pack(">I", zlib.crc32(b"PLTE" + palette))
    for name in ("palette", "grey", "bits"):
        (tmp_path / name).mkdir()
    png(tmp_path / "palette" / "0.png", 3, 8, indices, plte)
    png(tmp_path / "grey" / "0.png", 4, 8, np.array([[7, 255, 9, 0]], dtype=np.uint8))
    png(tmp_path / "bits" / "0.png", 0, 1, np.array([[0b10000001]], dtype=np.uint8))
    colours = opened(tmp_path / "palette", 1).frame(0).image * 255
    assert np.allclose(colours, [[[10, 20, 30], [200, 100, 50]], [[200, 100, 50], [10, 20, 30]]])
    assert np.allclose(opened(tmp_path / "grey", 1).frame(0).image * 255, [[7, 9]])
    assert np.allclose(opened(tmp_path / "bits", 1).frame(0).image, [[1, 0, 0, 0, 0, 0, 0, 1]])


def test_an_orientation_tag_moves_no_pixel(tmp_path):
    cv2.imwrite(str(tmp_path / "0.jpg"), RAMP)
    plain = opened(tmp_path, 1).frame(0).image
    data = (tmp_path / "0.jpg").read_bytes()
    # Exif with one entry: tag 274 (orientation), type 3, one value, 6: turn by 90 degrees
    exif = b"Exif\0\0II*\0\x08\0\0\0\x01\0" + struct.pack("<HHIHH", 274, 3, 1, 6, 0) + b"\0\0\0\0"
    tagged = data[:2] + b"\xff\xe1" + struct.pack(">H", len(exif) + 2) + exif + data[2:]
    (tmp_path / "0.jpg").write_bytes(tagged)
    assert np.array_equal(opened(tmp_path, 1).frame(0).image, plain)


@pytest.mark.parametrize("suffix", [".png", ".jpg", ".tif"])
@pytest.mark.parametrize("share", [0.5, 0.9])
def test_a_cut_picture_is_named(tmp_path, suffix, share):
    noise = np.random.default_rng(0).integers(0, 255, (40, 60), dtype=np.uint8)
    for i in range(2):
        cv2.imwrite(str(tmp_path / f"{i}{suffix}"), noise)
    path = tmp_path / f"1{suffix}"
    data = path.read_bytes()
    path.write_bytes(data[: int(len(data) * share)])
    with pytest.raises(FramesError, match=rf"1{suffix} (is cut short|cannot be decoded: it is damaged or cut)"):
        opened(tmp_path, 2).frame(1)


def test_a_cut_png_is_named_before_it_is_decoded(tmp_path):
    for i in range(2):
        cv2.imwrite(str(tmp_path / f"{i}.png"), RAMP)
    data = (tmp_path / "1.png").read_bytes()
    assert data[-8:-4] == b"IEND"
    # trailing bytes harm nothing; without the end mark it is cut
    (tmp_path / "1.png").write_bytes(data + b"more")
    assert len(opened(tmp_path, 2)) == 2
    (tmp_path / "1.png").write_bytes(data[:-13])
    with pytest.raises(FramesError, match=r"1\.png is cut short"):
        opened(tmp_path, 2)


def test_a_damaged_picture_is_named(tmp_path):
    cv2.imwrite(str(tmp_path / "0.png"), np.random.default_rng(0).integers(0, 255, (40, 60), dtype=np.uint8))
    data = bytearray((tmp_path / "0.png").read_bytes())
    data[len(data) // 2] ^= 0x55
    (tmp_path / "0.png").write_bytes(data)
    with pytest.raises(FramesError, match=r"0.png cannot be decoded.*remove it together with its row"):
        opened(tmp_path, 1).frame(0)


def test_a_picture_that_changed_since_it_was_opened_is_noticed(tmp_path):
    cv2.imwrite(str(tmp_path / "0.png"), RAMP)
    source = opened(tmp_path, 1)
    cv2.imwrite(str(tmp_path / "0.png"), RAMP[:10])
    with pytest.raises(FramesError, match=r"0.png: decodes to \(10, 30\).* its header said \(20, 30\)"):
        source.frame(0)
    (tmp_path / "0.png").unlink()
    with pytest.raises(FramesError, match=r"0.png cannot be decoded"):
        source.frame(0)


@pytest.mark.parametrize(
    ("content", "match"),
    [
        (b"", "0.png is empty"),
        (b"GIF89a" + b"\0" * 50, "0.png is not a PNG, TIFF or JPEG file"),
        (b"\x89PNG\r\n\x1a\n\0\0", "0.png is cut short"),
        (b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR" + struct.pack(">IIBB", 5, 5, 8, 9), "0.png has a damaged header"),
        # compression, filter, interlacing and checksum of the header, then the end mark
        (
            b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR" + struct.pack(">IIBB", 10**6, 10**6, 8, 0) + b"\0" * 7 + b"\0\0\0\0IEND",
            "says 1000000 x 1000000 pixels",
        ),
        (b"\xff\xd8\xff\xda\0\0", "0.png has a damaged header"),
        (b"\xff\xd8\xff\xc0\0\x11\x0c\0\x05\0\x05\x01", "has 1 channels of 12 bit, expected grey or R, G, B of 8 bit"),
        (b"II\x07\0\0\0\0\0", "0.png has a damaged header"),
    ],
)
def test_headers_that_are_none(tmp_path, content, match):
    (tmp_path / "0.png").write_bytes(content)
    with pytest.raises(FramesError, match=match):
        opened(tmp_path, 1)


def tiff(path, order="<", following=0, large=False, **tags):
    """Write a TIFF with a bare directory and no picture."""
    numbers = {"width": 256, "height": 257, "bits": 258, "colours": 262, "turned": 274, "samples": 277, "numbers": 339}
    values = {"width": 30, "height": 20, "bits": 8, "colours": 1} | tags
    entries = [struct.pack(f"{order}HH", numbers[k], 3) for k in values]
    word, count = ("Q", "Q") if large else ("I", "H")
    start = struct.pack(f"{order}2sH", b"II" if order == "<" else b"MM", 43 if large else 42)
    start += struct.pack(f"{order}HHQ", 8, 0, 16) if large else struct.pack(f"{order}I", 8)
    rows = [
        entry + struct.pack(f"{order}{word}H", 1, v) + b"\0" * (6 if large else 2)
        for entry, v in zip(entries, values.values(), strict=True)
    ]
    end = struct.pack(f"{order}{word}", following)
    path.write_bytes(start + struct.pack(f"{order}{count}", len(rows)) + b"".join(rows) + end)


@pytest.mark.parametrize("order", ["<", ">"])
@pytest.mark.parametrize("large", [False, True])
def test_tiff_headers_of_both_byte_orders_and_sizes_are_read(tmp_path, order, large):
    tiff(tmp_path / "0.tif", order, large=large)
    assert opened(tmp_path, 1).full_size == (30, 20)


@pytest.mark.parametrize(
    ("tags", "match"),
    [
        ({"following": 8}, "holds several pages, expected one picture a file"),
        ({"bits": 32}, "has 32-bit whole numbers, expected whole ones of 8 or 16 bit"),
        ({"bits": 16, "numbers": 3}, "has 16-bit decimal or signed numbers"),
        ({"colours": 0}, "has 1 channels of colour kind 0, expected grey with black at zero"),
        ({"turned": 6}, "asks to be turned or mirrored for display"),
    ],
)
def test_tiffs_that_cannot_be_taken_as_they_are(tmp_path, tags, match):
    tiff(tmp_path / "0.tif", **tags)
    with pytest.raises(FramesError, match=match):
        opened(tmp_path, 1)


def test_a_folder_without_pictures_or_times(tmp_path):
    with pytest.raises(FramesError, match="holds no PNG, TIFF or JPEG file. Check frames.source"):
        open_frames(FramesSettings(tmp_path, light_curve="linear"))
    cv2.imwrite(str(tmp_path / "0.png"), RAMP)
    with pytest.raises(JobError, match="frames.times is missing: images carry no times"):
        open_frames(FramesSettings(tmp_path, light_curve="linear"))
