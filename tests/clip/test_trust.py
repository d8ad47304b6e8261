"""Trust from a picture to everything a finished job leaves: with pictures whose expected error is put in."""

import csv
import json
import struct
from dataclasses import replace
from pathlib import Path

import cv2
import numpy as np
import pytest

from enhance import clip
from enhance.cli import main
from enhance.clip.outputs import Outputs, still_text
from enhance.clip.pictures import Pictures
from enhance.clip.plan import Plan, Planned
from enhance.clip.quality import Expected, expected_notes, expected_summary
from enhance.light import Light
from enhance.recording import By, FrameArray, Kind, Picture
from enhance.settings import ClipSettings, SlowMotionSettings
from enhance.simulate import write_recording
from enhance.write.strip import draw_strip

FRAMES = FrameArray(np.zeros((2, 6, 8), np.uint8), np.array([0, 1000]), np.array([0, 1000]), Light("linear"))


def picture(time_us: int, decibel: float | None, kind: Kind = Kind.INSERTED) -> Picture:
    """Make a picture whose expected error, unlike from pixel to pixel, stands for these dB."""
    error = None
    if decibel is not None:
        error = np.linspace(0.5, 1.5, 48).reshape(6, 8).astype(np.float32) * np.float32(10 ** (-decibel / 10))
    return Picture(np.full((6, 8), 0.5, np.float32), time_us, kind, By.NETWORK, error)


def text_of(png: Path) -> dict[str, str]:
    data, found, at = png.read_bytes(), {}, 8
    while at < len(data):
        (length,) = struct.unpack(">I", data[at : at + 4])
        if data[at + 4 : at + 8] == b"tEXt":
            keyword, _, value = data[at + 8 : at + 8 + length].partition(b"\0")
            found[keyword.decode()] = value.decode()
        at += 12 + length
    return found


def rows(path: Path) -> list[dict[str, str]]:
    with path.open(newline="") as file:
        return list(csv.DictReader(file))


def written(settings: ClipSettings, pictures: list[Picture]) -> Outputs:
    planned = [Planned(each.time_us, None) for each in pictures]
    with Outputs(settings, FRAMES, Plan(tuple(planned))) as outputs:
        for plan, each in zip(planned, pictures, strict=True):
            outputs.add(plan, each)
    return outputs


MADE = [picture(0, None, Kind.CAPTURED), picture(250, 34.126), picture(500, 28.3), picture(750, 29.996)]


def test_the_table_tells_the_expected_psnr_and_which_pictures_are_below(with_output) -> None:
    settings = with_output()
    written(replace(settings, least_psnr=30.0), MADE)
    table = rows(settings.output.folder / "pictures.csv")
    assert list(table[0]) == ["time_us", "pts_us", "kind", "by", "expected_psnr", "still", "below_least"]
    # 29.996 reads 30.00, and is no picture below 30
    assert [(r["expected_psnr"], r["below_least"]) for r in table] == [
        ("", ""),
        ("34.13", "no"),
        ("28.30", "yes"),
        ("30.00", "no"),
    ]
    assert all(r["still"] for r in table)


def test_without_a_least_no_picture_is_marked(with_output) -> None:
    settings = with_output()
    written(settings, MADE)
    assert {r["below_least"] for r in rows(settings.output.folder / "pictures.csv")} == {""}
    assert not any("Below" in key for key in still_text(MADE[2], 0))


def test_a_still_says_what_is_expected_of_it() -> None:
    assert still_text(MADE[0], 0, 30.0)["Expected PSNR (dB)"] == "not known"
    assert [still_text(each, 0, 32.5).get("Below 32.5 dB") for each in MADE] == [None, "no", "yes", "yes"]
    assert still_text(MADE[2], 0)["Expected PSNR (dB)"] == "28.30"


def test_a_trust_map_stands_beside_every_still_that_has_one(with_output) -> None:
    settings = with_output(trust=True, stills="deblurred", times_us=(250,))
    deblurred = picture(1000, 40.0, Kind.DEBLURRED)
    outputs = written(replace(settings, least_psnr=30.0), [*MADE, deblurred])
    folder = settings.output.folder
    maps = ["trust/0000000000000250.png", "trust/0000000000001000.png"]
    assert [name for name in outputs.files if name.startswith("trust/")] == maps
    assert sorted(p.relative_to(folder).as_posix() for p in (folder / "trust").iterdir()) == maps
    stored = cv2.imread(str(folder / maps[1]), cv2.IMREAD_UNCHANGED)
    np.testing.assert_allclose(stored, np.sqrt(deblurred.error) * 65535, atol=0.6)
    # the map's mean square is the figure of the table
    assert -10 * np.log10(np.mean((stored / 65535) ** 2)) == pytest.approx(40, abs=0.01)
    text = text_of(folder / maps[1])
    assert (text["Kind"], text["Expected PSNR (dB)"], text["Below 30 dB"]) == ("deblurred", "40.00", "no")
    assert "/ full scale x 65535" in text["Scale"]
    assert "Expected PSNR (dB)" in text_of(folder / "stills" / "0000000000001000.png")


def test_no_map_is_written_where_none_is_asked_for(with_output) -> None:
    outputs = written(with_output(), MADE)
    assert not any(name.startswith("trust/") for name in outputs.files)
    assert not (outputs.folder / "trust").exists()


def test_the_strip_of_the_clip_marks_a_picture_below(with_output, monkeypatch: pytest.MonkeyPatch) -> None:
    captions = []
    monkeypatch.setattr(
        "enhance.write.video.draw_strip", lambda width, text: captions.append(text) or draw_strip(width, text)
    )
    settings = replace(with_output(strip=True, video="ffv1"), least_psnr=30.0, slow_motion=SlowMotionSettings(4))
    planned = [Planned(each.time_us, 1000 * each.time_us) for each in MADE]
    with Outputs(settings, FRAMES, Plan(tuple(planned), SlowMotionSettings().playback_rate)) as outputs:
        for plan, each in zip(planned, MADE, strict=True):
            outputs.add(plan, each)
    assert [caption.split("   ")[1:] for caption in captions] == [
        ["captured"],
        ["inserted", "expected 34.1 dB"],
        ["inserted", "expected 28.3 dB, LOW"],
        ["inserted", "expected 30.0 dB"],
    ]


EXPECTED = [Expected(each.time_us, each.kind, each.expected_psnr) for each in MADE]


def test_the_summary_names_mean_lowest_and_what_is_not_known() -> None:
    found = expected_summary(EXPECTED, 30.0)
    assert found["mean"] == pytest.approx((34.126 + 28.3 + 29.996) / 3, abs=1e-4)
    assert (found["lowest"], found["lowest_time_us"]) == (pytest.approx(28.3, abs=1e-4), 500)
    assert (found["pictures"], found["unknown"], found["least_psnr"], found["below_least"]) == (3, 1, 30.0, 1)
    assert found["note"] == "1 picture below 30 dB expected: see pictures.csv"
    assert "against the sharp, noise-free truth" in found["definition"]
    assert "fitted on simulated recordings" in found["definition"]
    assert (expected_summary(EXPECTED, None)["below_least"], expected_summary(EXPECTED, None)["note"]) == (None, None)


def test_where_nothing_is_known_the_summary_says_so() -> None:
    found = expected_summary(EXPECTED[:1], 30.0)
    assert [found[name] for name in ("mean", "lowest", "lowest_time_us", "note")] == [None] * 4
    assert (found["pictures"], found["unknown"], found["below_least"]) == (0, 1, 0)


def test_notes_count_pictures_below_and_made_ones_that_are_not_known() -> None:
    unknown = Expected(900, Kind.INSERTED, None)
    assert expected_notes([*EXPECTED, unknown], 32.5) == [
        "2 pictures below 32.5 dB expected: see pictures.csv",
        "made pictures whose expected PSNR is not known, and so not held to measure.least_psnr: 1",
    ]
    assert expected_notes([*EXPECTED, unknown], None) == []
    assert expected_notes(EXPECTED, 20.0) == []


def decibel_at(time_us: int) -> float:
    return 36 - time_us % 25_000 / 2_500 - time_us / 1e6


@pytest.fixture
def with_errors(monkeypatch: pytest.MonkeyPatch):
    """Put an expected error into every inserted picture: the later in its span, the worse; and in no other picture."""
    plain = Pictures.at

    def at(pictures: Pictures, time_us: int) -> Picture:
        made = plain(pictures, time_us)
        if made.kind is not Kind.INSERTED:
            return replace(made, error=None)
        error = np.full(made.image.shape[:2], 10 ** (-decibel_at(time_us) / 10), np.float32)
        return replace(made, error=error)

    monkeypatch.setattr(Pictures, "at", at)


def run(settings: ClipSettings) -> clip.ClipResult:
    return clip.run(settings, lambda done, total, what: None)


def test_a_whole_job_carries_trust_to_every_output(with_errors, with_output) -> None:
    settings = replace(with_output(trust=True), least_psnr=30.0, hold_out=2, slow_motion=SlowMotionSettings(factor=4))
    result = run(settings)
    folder = settings.output.folder
    table = rows(folder / "pictures.csv")
    expected = [float(r["expected_psnr"]) if r["expected_psnr"] else None for r in table]
    assert [value is not None for value in expected] == [r["kind"] == "inserted" for r in table]
    below = sum(value is not None and value < 30 for value in expected)
    assert 0 < below < len(table)
    assert [r["below_least"] for r in table].count("yes") == below == result.counts["below measure.least_psnr"]
    assert f"{below} pictures below 30 dB expected: see pictures.csv" in result.notes
    figures = json.loads((folder / "quality.json").read_text())
    assert figures["pictures"]["below measure.least_psnr"] == figures["expected_psnr"]["below_least"] == below
    assert figures["expected_psnr"]["lowest"] == pytest.approx(min(v for v in expected if v), abs=0.006)
    maps = [name for name in result.files if name.startswith("trust/")]
    assert maps == [f"trust/{int(r['time_us']):016d}.png" for r in table if r["kind"] == "inserted"]
    held = rows(folder / "held-out.csv")
    assert list(held[0])[-2:] == ["expected_psnr", "expected_psnr_moving"]
    assert [float(r["expected_psnr"]) for r in held] == [
        pytest.approx(decibel_at(int(r["time_us"])), abs=1e-3) for r in held
    ]
    assert figures["held_out"]["figures"]["expected_psnr"]["definition"]


def test_where_nothing_is_expected_the_job_says_so(settings: ClipSettings, monkeypatch: pytest.MonkeyPatch) -> None:
    plain = Pictures.at
    monkeypatch.setattr(Pictures, "at", lambda pictures, time_us: replace(plain(pictures, time_us), error=None))
    job = replace(settings, least_psnr=30.0, output=replace(settings.output, trust=True, video="none"))
    result = run(job)
    assert result.counts["below measure.least_psnr"] == 0
    assert "output.trust: no map was written, since the expected error of no still is known" in result.notes
    assert any("not held to measure.least_psnr: 8" in note for note in result.notes)


def test_a_later_run_removes_exactly_the_maps_of_the_earlier_one(
    with_errors, simulated, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    job = write_recording(simulated, tmp_path / "recording")
    text = job.read_text()
    for table in ("[measure]", "[slow_motion]", "[network]", "[output]"):
        text = text[: text.index(table)] if table in text else text
    tables = '[slow_motion]\nfactor = 2\n[network]\nuse = "off"\n[measure]\nleast_psnr = 60\n'
    tables += '[output]\nfolder = "out"\nvideo = "none"\n'
    out = job.parent / "out"
    job.write_text(f"{text}\n{tables}trust = true\n")
    assert main(["run", str(job)]) == 0
    said = capsys.readouterr()
    assert "7 pictures below measure.least_psnr, marked in pictures.csv" in said.out
    assert "caution: 7 pictures below 60 dB expected: see pictures.csv" in said.out
    record = json.loads((out / "record.json").read_text())
    assert sum(name.startswith("trust/") for name in record["files"]) == 7
    assert record["counts"]["below measure.least_psnr"] == 7
    (out / "trust" / "mine.png").write_bytes(b"mine")
    job.write_text(f"{text}\n{tables}")
    assert main(["run", str(job)]) == 0
    assert [path.name for path in (out / "trust").iterdir()] == ["mine.png"]
