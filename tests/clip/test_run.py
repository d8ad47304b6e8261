import csv
import hashlib
import json
import tomllib
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import av
import cv2
import h5py
import numpy as np
import pytest

from enhance import clip
from enhance.errors import CalibrationError, ModelError
from enhance.settings import (
    ClipSettings,
    EventsSettings,
    FramesSettings,
    OutputSettings,
    RigSettings,
    SlowMotionSettings,
    Window,
)
from enhance.simulate import Camera, EventSensor, make_scene, simulate, write_recording


def run(settings: ClipSettings) -> clip.ClipResult:
    return clip.run(settings, lambda done, total, what: None)


def rows(path: Path) -> list[dict[str, str]]:
    with path.open(newline="") as file:
        return list(csv.DictReader(file))


def codes(still: Path) -> np.ndarray:
    return cv2.imread(str(still), cv2.IMREAD_UNCHANGED).astype(np.float64) * 255 / 65535


def psnr(a: np.ndarray, b: np.ndarray) -> float:
    return float(10 * np.log10(255**2 / np.mean((a - b) ** 2)))


SLOW = SlowMotionSettings(factor=4)


def test_a_job_leaves_what_the_contract_says(settings: ClipSettings, simulated) -> None:
    seen = []
    result = clip.run(replace(settings, slow_motion=SLOW, hold_out=2), lambda *step: seen.append(step))
    out = settings.output.folder
    assert set(result.files) == {p.relative_to(out).as_posix() for p in out.rglob("*") if p.is_file()}
    table = rows(out / "pictures.csv")
    keys = len(simulated.recording.frames)
    assert len(table) == (keys - 1) * 4 + 1
    assert [r["kind"] for r in table[:5]] == ["deblurred", "inserted", "inserted", "inserted", "deblurred"]
    assert {r["by"] for r in table} == {"integral"}
    assert all((out / r["still"]).exists() for r in table)
    assert result.counts["deblurred"] == keys
    assert result.counts["inserted"] == 3 * (keys - 1)
    assert seen[-1][0] == seen[-1][1]
    assert {"open", "calibrate", "pictures", "held_out"} <= set(result.timings)
    # the clip shows the table's pictures at the table's times
    with av.open(str(out / "slow-motion.mp4")) as container:
        stream = container.streams.video[0]
        shown = [int(f.pts * f.time_base * 1_000_000) for f in container.decode(stream)]
    assert shown == [int(r["pts_us"]) for r in table]


def test_pictures_come_closer_to_the_truth_than_the_frames_do(settings: ClipSettings, simulated) -> None:
    run(replace(settings, slow_motion=SLOW))
    out = settings.output.folder
    table = rows(out / "pictures.csv")
    camera = simulated.recording.frames
    for k in (2, 3):
        made = codes(out / table[4 * k]["still"])
        truth = 255.0 * simulated.truth(int(table[4 * k]["time_us"]))
        assert psnr(made, truth) > psnr(camera.codes[k].astype(float), truth) + 3
        middle = table[4 * k + 2]
        truth = 255.0 * simulated.truth(int(middle["time_us"]))
        blended = 0.5 * (camera.codes[k].astype(float) + camera.codes[k + 1])
        assert psnr(codes(out / middle["still"]), truth) > psnr(blended, truth) + 5


def test_held_out_figures_are_those_of_the_pictures(settings: ClipSettings, simulated) -> None:
    result = run(replace(settings, slow_motion=SLOW, hold_out=2))
    out = settings.output.folder
    table = rows(out / "held-out.csv")
    frames = simulated.recording.frames
    middle = (frames.start_us + frames.end_us) // 2
    last_key = 2 * ((len(frames) - 1) // 2)
    assert [int(r["time_us"]) for r in table] == [int(middle[i]) for i in range(1, last_key, 2)]
    for row in table:
        assert float(row["psnr"]) > float(row["blend"])
        assert float(row["psnr_moving"]) > max(float(row[f"{n}_moving"]) for n in ("nearest", "blend", "flow"))
        assert float(row["ceiling"]) > float(row["psnr"])
        assert int(row["re_exposed"]) >= 5
        assert (out / "held-out" / f"{int(row['time_us']):016d}.png").exists()
    summary = json.loads((out / "quality.json").read_text())["held_out"]
    mean = np.mean([float(r["psnr_moving"]) for r in table])
    assert abs(summary["figures"]["psnr_moving"]["mean"] - mean) < 1e-3
    assert all(figure["definition"] for figure in summary["figures"].values())
    assert result.figures["held_out"]["pictures"] == len(table)


def test_fast_motion_is_re_exposed_in_steps_of_half_a_pixel(tmp_path: Path) -> None:
    # 600 px/s for 20 ms: 12 px in an exposure, 24 instants; the keys stand 48 px apart, where no flow finds the way
    scene = make_scene("text", (112, 96), np.random.default_rng(77), 600.0)
    recorded = simulate(scene, Camera(rate_hz=25.0, exposure_us=20_000), EventSensor(0.2, 0.2), 0.14, 77)
    write_recording(recorded, tmp_path)
    run(
        ClipSettings(
            "Fast",
            FramesSettings(tmp_path / "frames", tmp_path / "frames.csv", light_curve="linear"),
            EventsSettings(tmp_path / "events.h5", size=(112, 96), cover_us=(0, 140_000)),
            OutputSettings(tmp_path / "out", stills="none", video="none"),
            rig=RigSettings(contrast=(0.2, 0.2), offset_us=0, drift_ppm=0.0),
            network="off",
            hold_out=2,
        )
    )
    (row,) = rows(tmp_path / "out" / "held-out.csv")
    assert 17 <= int(row["re_exposed"]) <= 32


def test_second_pass_never_sees_a_held_out_frame(settings: ClipSettings, folder: Path, tmp_path: Path) -> None:
    # The same job over frames whose held-out ones are replaced by noise makes the very same held-out pictures
    run(replace(settings, hold_out=2))
    spoiled = tmp_path / "spoiled"
    spoiled.mkdir()
    rng = np.random.default_rng(0)
    for k, file in enumerate(sorted((folder / "frames").glob("*.png"))):
        image = cv2.imread(str(file), cv2.IMREAD_UNCHANGED)
        cv2.imwrite(str(spoiled / file.name), rng.integers(0, 256, image.shape, np.uint8) if k % 2 else image)
    other = replace(
        settings,
        frames=replace(settings.frames, source=spoiled),
        output=replace(settings.output, folder=tmp_path / "other", stills="none"),
        rig=RigSettings(offset_us=-3_000, drift_ppm=0.0),
        hold_out=2,
    )
    honest = replace(
        other, frames=settings.frames, output=replace(settings.output, folder=tmp_path / "honest", stills="none")
    )
    run(other)
    run(honest)
    pictures = sorted((tmp_path / "honest" / "held-out").glob("*.png"))
    assert pictures
    for picture in pictures:
        assert picture.read_bytes() == (tmp_path / "other" / "held-out" / picture.name).read_bytes()


def test_rerunning_gives_the_same_bytes(settings: ClipSettings, tmp_path: Path) -> None:
    digests = []
    for name in ("one", "two"):
        job = replace(
            settings,
            slow_motion=SLOW,
            hold_out=2,
            output=replace(settings.output, folder=tmp_path / name, strip=True),
            rig=RigSettings(),
        )
        result = run(job)
        digests.append({f: hashlib.sha256((tmp_path / name / f).read_bytes()).hexdigest() for f in result.files})
    assert digests[0] == digests[1]


def test_what_was_measured_can_be_fed_back_in(settings: ClipSettings, tmp_path: Path) -> None:
    measured = replace(settings, rig=RigSettings())
    run(measured)
    rig = tomllib.loads((settings.output.folder / "rig.toml").read_text())
    assert abs(rig["clock"]["offset_us"]["value"] + 3_000) < 360  # 3 % of the exposure
    assert rig["contrast"]["positive"]["method"] == "regression between deblurred keys"
    again = replace(
        measured,
        rig=RigSettings(file=settings.output.folder / "rig.toml"),
        output=replace(settings.output, folder=tmp_path / "again"),
    )
    run(again)
    fed = tomllib.loads((tmp_path / "again" / "rig.toml").read_text())
    assert fed["clock"]["offset_us"]["value"] == rig["clock"]["offset_us"]["value"]
    assert fed["contrast"]["negative"]["method"] == "rig file"
    for row in rows(tmp_path / "again" / "pictures.csv"):
        assert (tmp_path / "again" / row["still"]).read_bytes() == (settings.output.folder / row["still"]).read_bytes()


def test_lossless_clip_equals_the_stills(with_output) -> None:
    settings = with_output(video="ffv1")
    run(replace(settings, slow_motion=SlowMotionSettings(factor=2)))
    out = settings.output.folder
    with av.open(str(out / "slow-motion.mkv")) as container:
        shown = [f.to_ndarray() for f in container.decode(video=0)]
    for picture, row in zip(shown, rows(out / "pictures.csv"), strict=True):
        np.testing.assert_array_equal(picture, cv2.imread(str(out / row["still"]), cv2.IMREAD_UNCHANGED))


def test_windows_rate_and_exact_instants(with_output) -> None:
    slow = SlowMotionSettings(
        scene_rate=Fraction(500), playback_rate=Fraction(25), windows=(Window(20_000, 40_000), Window(60_000, 70_000))
    )
    settings = with_output(times_us=(12_345,), stills="none")
    run(replace(settings, slow_motion=slow))
    table = rows(settings.output.folder / "pictures.csv")
    first = 15_000  # the middle of the first exposure: 9 ms + 12 ms / 2
    assert [int(r["time_us"]) - first for r in table] == [
        12_345,
        *range(20_000, 40_000, 2_000),
        *range(60_000, 70_000, 2_000),
    ]
    assert [bool(r["still"]) for r in table] == [True] + [False] * 15
    assert [int(r["pts_us"]) for r in table[1:]] == [40_000 * k for k in range(15)]


def test_one_frame_gives_stills_and_no_clip(settings: ClipSettings, folder: Path, tmp_path: Path) -> None:
    single = tmp_path / "single"
    single.mkdir()
    (single / "000000.png").write_bytes((folder / "frames" / "000000.png").read_bytes())
    (tmp_path / "single.csv").write_text("frame,start_us,end_us\n0,9000,21000\n")
    frames = replace(settings.frames, source=single, times=tmp_path / "single.csv")
    result = run(replace(settings, frames=frames, slow_motion=SLOW, hold_out=2))
    assert result.counts == {"deblurred": 1}
    assert not (settings.output.folder / "slow-motion.mp4").exists()
    assert "one frame only: no clip is made" in result.notes
    # and where the clock would have to be estimated, one frame cannot: it stays as captured
    other = replace(settings, frames=frames, rig=RigSettings())
    result = run(replace(other, output=replace(settings.output, folder=tmp_path / "estimated")))
    assert result.counts == {"captured": 1}
    assert any("clock of the events cannot be told" in note for note in result.notes)


def test_frames_that_events_do_not_cover_stay_captured_and_are_counted(settings: ClipSettings) -> None:
    # the sensor began to record 60 ms (event clock) into the scene
    events = replace(settings.events, cover_us=None)
    late = settings.output.folder.parent / "late.h5"
    with h5py.File(settings.events.source) as source, h5py.File(late, "w") as target:
        keep = source["t"][:] >= 63_000
        for name in ("t", "x", "y", "p"):
            target[name] = source[name][:][keep]
    result = run(replace(settings, events=replace(events, source=late), slow_motion=SLOW))
    table = rows(settings.output.folder / "pictures.csv")
    assert [r["kind"] for r in table[0:13:4]] == ["captured", "captured", "captured", "deblurred"]
    assert table[1]["by"] == "frames"
    assert result.counts["captured"] == 3
    assert any("not covered by events): 3" in note for note in result.notes)
    assert any("inserted from frames alone, without events" in note for note in result.notes)


def test_no_overlap_at_all_is_an_error(settings: ClipSettings) -> None:
    with pytest.raises(CalibrationError, match="do not overlap"):
        run(replace(settings, rig=replace(settings.rig, offset_us=10_000_000)))


def test_unknown_clock_stops_or_goes_on_with_frames(settings: ClipSettings) -> None:
    # events of a scene that is not this one: the same events, mirrored and upside down
    other = settings.output.folder.parent / "other.h5"
    with h5py.File(settings.events.source) as source, h5py.File(other, "w") as target:
        rng = np.random.default_rng(1)
        for name in ("t", "x", "y", "p"):
            target[name] = source[name][:]
        target["x"][...] = rng.permutation(source["x"][:])
        target["y"][...] = rng.permutation(source["y"][:])
    job = replace(settings, events=replace(settings.events, source=other), slow_motion=SLOW)
    with pytest.raises(CalibrationError, match='rig.unknown = "frames"'):
        run(replace(job, rig=RigSettings()))
    result = run(replace(job, rig=RigSettings(unknown="frames")))
    assert {r["by"] for r in rows(settings.output.folder / "pictures.csv")} == {"frames"}
    assert any("every picture is from frames" in note for note in result.notes)


def test_missing_weights_say_how_to_go_on(settings: ClipSettings, monkeypatch: pytest.MonkeyPatch, tmp_path) -> None:
    monkeypatch.setattr("enhance.clip.passes.shipped_folder", lambda name: tmp_path)
    with pytest.raises(ModelError, match='network.use = "off"'):
        run(replace(settings, network="fusion", slow_motion=SLOW))
    findings = clip.check(replace(settings, network="fusion", slow_motion=SLOW))
    assert 'network.use = "off"' in findings.mistakes[0]


def test_check_knows_the_job_beforehand(settings: ClipSettings) -> None:
    findings = clip.check(replace(settings, slow_motion=SLOW, hold_out=2))
    assert not findings.mistakes
    assert findings.pictures == 29
    assert "frames: 8 of 112 x 96, grey, 40.000 a second, 0.187 s, exposure 12.000 ms" in findings.facts[0]
    assert findings.seconds > 0
    assert findings.bytes > 29 * 112 * 96 * 2
    assert findings.facts[-1] == f"29 pictures planned, about {findings.bytes / 1e6:.1f} MB of outputs"
    assert not settings.output.folder.exists()
    wrong = clip.check(replace(settings, rig=replace(settings.rig, offset_us=10_000_000)))
    assert "do not overlap" in wrong.mistakes[0]


@pytest.mark.parametrize(("late_us", "left"), [(0, 0), (240, 0), (241, 1)])
def test_check_counts_as_uncovered_what_the_run_leaves_captured(settings: ClipSettings, late_us, left) -> None:
    # the sensor begins this much after the first exposure of 12 ms, of which a fiftieth is forgiven
    late = replace(settings, rig=replace(settings.rig, offset_us=6_000 + late_us))
    told = [w for w in clip.check(late).warnings if "do not cover" in w]
    assert told == [f"events do not cover the whole exposure of {left} of 8 frames; these stay as captured"] * left
    assert run(late).counts.get("captured", 0) == left


def test_preview_shows_a_key_an_inserted_picture_and_the_events(settings: ClipSettings, tmp_path: Path) -> None:
    made = clip.preview(replace(settings, slow_motion=SLOW), tmp_path / "look")
    assert [p.name for p in made] == ["frame-with-events.png", "deblurred.png", "inserted.png"]
    blue, _, red = np.moveaxis(codes(made[0]), -1, 0)
    assert ((red > 250) & (blue < 50)).sum() > 20
    assert ((blue > 250) & (red < 50)).sum() > 20


def test_a_white_far_too_low_is_told(settings: ClipSettings) -> None:
    wrong = replace(settings, frames=replace(settings.frames, white=60.0))
    assert any("lie above frames.white = 60" in note for note in run(wrong).notes)
    assert any("lie above frames.white = 60" in warning for warning in clip.check(wrong).warnings)
    assert not any("frames.white" in warning for warning in clip.check(settings).warnings)


def test_a_missing_trust_file_is_told_before_any_work(settings: ClipSettings, tmp_path: Path, monkeypatch) -> None:
    monkeypatch.setattr("enhance.clip.passes.shipped_folder", lambda name: tmp_path)
    found = clip.check(settings)
    assert any("trust.json: what trust in pictures rests on cannot be read" in each for each in found.mistakes)
