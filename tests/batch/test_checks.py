import os
from pathlib import Path

import pytest

from enhance.batch import read_job
from enhance.errors import JobError


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"frames.source": '"frame"'}, r"frames.source: .*frame does not exist.*Did you mean frames\?"),
        ({"frames.times": '"frames.tsv"'}, r"frames.times: .*does not exist.*Did you mean frames.csv\?"),
        ({"events.source": '"event.h5"'}, r"does not exist; paths are relative to the job file's folder"),
        ({"events.source": '"night/events.h5"'}, r"Nor does the folder .*night"),
        ({"events.source": '"frames"'}, r"events.source: .*frames is a folder; expected a file"),
        ({"events.source": f'"{"e" * 300}.h5"'}, r"e\.h5 does not exist"),
        ({"rig.file": '"rig.toml"'}, r"rig.file: .*rig.toml does not exist"),
        ({"rig.clock": '{ triggers = "t.csv" }'}, r"rig.clock.triggers: .*t.csv does not exist"),
    ],
)
def test_an_input_that_is_not_there_is_named(write_job, changes: dict[str, str], message: str) -> None:
    with pytest.raises(JobError, match=message):
        read_job(write_job(changes))


@pytest.mark.parametrize(
    ("folder", "message"),
    [
        (".", r"holds inputs \(the job file, frames.source, frames.times, events.source\)"),
        ("frames", r"holds inputs \(frames.source\)"),
        ("..", r"holds inputs"),
        ("frames/out", r"lies inside frames.source; choose a folder outside it"),
        ("events.h5", r"is a file; expected a folder"),
    ],
)
def test_results_must_not_mix_with_inputs(write_job, folder: str, message: str) -> None:
    with pytest.raises(JobError, match=f"output.folder: .*{message}"):
        read_job(write_job({"output.folder": f'"{folder}"'}))


def test_a_linked_folder_does_not_hide_that_it_holds_inputs(write_job, tmp_path: Path) -> None:
    path = write_job({"output.folder": '"elsewhere"'})
    (tmp_path / "elsewhere").symlink_to(tmp_path / "frames", target_is_directory=True)
    with pytest.raises(JobError, match=r"holds inputs \(frames.source\)"):
        read_job(path)


def test_a_folder_beside_the_inputs_is_accepted_and_need_not_exist(write_job, tmp_path: Path) -> None:
    assert read_job(write_job({"output.folder": '"a/b/c"'})).output.folder == tmp_path / "a" / "b" / "c"
    assert not (tmp_path / "a").exists()


def test_a_folder_that_cannot_be_written_is_refused(write_job, monkeypatch: pytest.MonkeyPatch) -> None:
    # as root nothing is forbidden, so the answer is put into the system's mouth
    monkeypatch.setattr(os, "access", lambda path, mode: False)
    with pytest.raises(JobError, match="output.folder: .*cannot be written to; choose another folder"):
        read_job(write_job())


def test_a_video_needs_neither_a_table_of_times_nor_a_light_curve_from_the_job(write_job, tmp_path: Path) -> None:
    (tmp_path / "film.mp4").touch()
    changes = {"frames.source": '"film.mp4"', "frames.times": None, "frames.light_curve": None}
    assert read_job(write_job(changes)).frames.light_curve is None


def test_mistakes_of_keys_and_of_files_are_told_together(write_job) -> None:
    changes = {"frames.exposure": "3", "events.source": '"no.h5"', "output.folder": '"."', "measure.hold_out": "1"}
    with pytest.raises(JobError) as caught:
        read_job(write_job(changes))
    keys = [mistake.split(": ")[1] for mistake in caught.value.mistakes]
    assert keys == ["frames.exposure", "events.source", "output.folder", "measure.hold_out"]


@pytest.mark.parametrize("changes", [{"output.stills": '"deblurred"'}, {"output.times": '["1 s"]'}])
def test_trust_maps_can_stand_beside_any_still(write_job, changes: dict[str, str]) -> None:
    output = read_job(write_job({"output.trust": "true", "output.stills": '"none"', **changes})).output
    assert output.trust


def test_a_trigger_table_reaches_the_settings(write_job, tmp_path: Path) -> None:
    (tmp_path / "triggers.csv").touch()
    rig = read_job(write_job({"rig.clock": '{ triggers = "triggers.csv" }'})).rig
    assert (rig.triggers, rig.offset_us, rig.drift_ppm) == (tmp_path / "triggers.csv", None, None)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        (
            {"rig.clock": '{ triggers = "frames.csv", offset = "0 us" }'},
            "rig.clock: offset beside triggers: the trigger",
        ),
        (
            {"rig.clock": '{ triggers = "frames.csv", offset = "0 us", drift_ppm = 1.0 }'},
            "rig.clock: drift_ppm and offset beside triggers: .* tells the whole clock; keep one",
        ),
        (
            {"rig.clock": '"shared"', "rig.triggers": '"frames.csv"'},
            'rig.triggers: a trigger table stands inside rig.clock, .* found clock = "shared" beside it',
        ),
    ],
)
def test_a_trigger_table_goes_with_no_other_clock(write_job, changes: dict[str, str], message: str) -> None:
    with pytest.raises(JobError, match=message):
        read_job(write_job(changes))
