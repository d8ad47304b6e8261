import json
from pathlib import Path

import pytest

from enhance.batch import Outcome, check_shelf, run_shelf
from enhance.errors import EventsError, JobError, WriteError


def job(write_job, name: str, **changes: str) -> Path:
    keys = {"title": f'"{name}"', "output.folder": f'"out-{name}"'}
    keys |= {key.replace("__", "."): value for key, value in changes.items()}
    return write_job(keys, name=f"{name}.toml")


def read(path: Path) -> dict:
    return json.loads((path / "record.json").read_text())


def outcomes(report) -> list[str]:
    return [job.outcome.value for job in report.jobs]


def test_a_done_job_leaves_a_record_of_everything_that_went_in_and_came_out(write_job, clip, tmp_path: Path) -> None:
    report = run_shelf([job(write_job, "a")])
    assert (outcomes(report), report.exit_code) == (["done"], 0)
    record = read(tmp_path / "out-a")
    assert (record["outcome"], record["error"], record["title"], record["job"]) == ("done", None, "a", "../a.toml")
    assert record["files"] == ["pictures.csv", "stills/0000000000000007.png"]
    assert record["settings"]["frames"] == {"source": "frames", "times": "frames.csv", "light_curve": "srgb"}
    assert record["inputs"]["events.source"]["path"] == "../events.h5"
    assert record["timings"]["deblur"] == 0.5
    assert record["timings"]["total"] >= 0
    assert record["cautions"][1:] == ["the clock is guessed", "2 frames were not covered"]
    assert record["threads"]["machine"] >= 1
    assert list(record) == sorted(record)
    assert str(tmp_path) not in json.dumps(record)


def test_one_failing_job_stops_no_other_and_says_why_in_its_record(write_job, clip, tmp_path: Path) -> None:
    clip.errors["b"] = EventsError("events.h5, row 7: broken")
    told = []
    report = run_shelf([job(write_job, name) for name in "abc"], lambda each: told.append(each.outcome))
    assert outcomes(report) == ["done", "failed", "done"]
    assert told == [Outcome.DONE, Outcome.FAILED, Outcome.DONE]
    assert report.exit_code == 1
    record = read(tmp_path / "out-b")
    assert (record["outcome"], record["error"]) == ("failed", "events.h5, row 7: broken")
    assert record["files"] == ["stills/0000000000000007.png"]


def test_an_unforeseen_error_fails_its_job_alone(write_job, clip) -> None:
    clip.errors["a"] = IndexError("7")
    report = run_shelf([job(write_job, "a"), job(write_job, "b")])
    assert outcomes(report) == ["failed", "done"]
    assert report.jobs[0].reasons == ("unforeseen IndexError: 7. Run it again with --debug to see where",)


def test_wrong_jobs_are_refused_before_any_work_and_the_others_run(write_job, clip, tmp_path: Path) -> None:
    clip.mistakes["b"] = ("no frame is covered by events",)
    clip.check_errors["c"] = EventsError("events.h5: is not an event file")
    jobs = [job(write_job, "a", frames__exposure="20"), *(job(write_job, name) for name in "bcd")]
    told = []
    report = run_shelf(jobs, lambda each: told.append((each.title, each.outcome.value, len(clip.ran))))
    assert told == [("a", "refused", 0), ("b", "refused", 0), ("c", "refused", 0), ("d", "done", 1)]
    assert clip.ran == ["d"]
    assert report.exit_code == 1
    assert "frames.exposure: 20 has no unit" in report.jobs[0].reasons[0]
    assert report.jobs[1].reasons == ("no frame is covered by events",)
    assert report.jobs[2].reasons == ("events.h5: is not an event file",)
    assert sorted(path.name for path in tmp_path.glob("out-*")) == ["out-d"]


def test_two_jobs_that_share_a_folder_are_both_refused(write_job, clip) -> None:
    shared = {"output__folder": '"out/../both"'}
    jobs = [job(write_job, "a", **shared), job(write_job, "b", output__folder='"both"'), job(write_job, "c")]
    report = run_shelf(jobs)
    assert outcomes(report) == ["refused", "refused", "done"]
    assert "b.toml; give every job a folder of its own" in report.jobs[0].reasons[0]
    assert "a.toml; give every job a folder of its own" in report.jobs[1].reasons[0]


def test_a_disk_without_room_refuses_the_job(write_job, clip) -> None:
    clip.bytes = 10**18
    (checked,) = check_shelf([job(write_job, "a")])
    assert not checked.may_start
    assert "are free, about 1000000000.0 GB are needed" in checked.report.reasons[0]


def test_a_check_writes_nothing(write_job, clip, tmp_path: Path) -> None:
    path = job(write_job, "a")
    before = sorted(tmp_path.rglob("*"))
    (checked,) = check_shelf([path])
    assert checked.may_start
    assert (checked.report.facts, checked.report.cautions) == (("15 frames",), ("the clock is guessed",))
    assert sorted(tmp_path.rglob("*")) == before


def test_ctrl_c_leaves_what_is_finished_and_starts_nothing_more(write_job, clip, tmp_path: Path) -> None:
    clip.errors["b"] = KeyboardInterrupt()
    report = run_shelf([job(write_job, name) for name in "abc"])
    assert outcomes(report) == ["done", "interrupted", "not started"]
    assert report.exit_code == 130
    assert read(tmp_path / "out-a")["outcome"] == "done"
    assert read(tmp_path / "out-b")["outcome"] == "interrupted"
    assert read(tmp_path / "out-b")["files"] == ["stills/0000000000000007.png"]
    assert not (tmp_path / "out-c").exists()


def test_a_new_run_removes_what_the_old_record_lists_and_nothing_else(write_job, clip, tmp_path: Path) -> None:
    path = job(write_job, "a")
    run_shelf([path])
    out = tmp_path / "out-a"
    (out / "mine.txt").write_text("x")
    listed = read(out)
    listed["files"].append("slow-motion.mp4")
    (out / "record.json").write_text(json.dumps(listed))
    (out / "slow-motion.mp4").write_text("of the first run")
    run_shelf([path])
    assert not (out / "slow-motion.mp4").exists()
    assert (out / "mine.txt").read_text() == "x"
    assert read(out)["files"] == ["pictures.csv", "stills/0000000000000007.png"]


def test_a_failed_rerun_still_lists_what_it_left(write_job, clip, tmp_path: Path) -> None:
    path = job(write_job, "a")
    run_shelf([path])
    clip.errors["a"] = EventsError("gone")
    run_shelf([path])
    assert read(tmp_path / "out-a")["files"] == ["stills/0000000000000007.png"]
    assert not (tmp_path / "out-a" / "pictures.csv").exists()


def test_a_run_that_fails_before_the_old_files_are_removed_keeps_them_listed(
    write_job, clip, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = job(write_job, "a")
    run_shelf([path])

    def unreadable(settings) -> dict:
        raise EventsError("the share has gone")

    monkeypatch.setattr("enhance.batch.record.input_digests", unreadable)
    report = run_shelf([path])
    assert outcomes(report) == ["failed"]
    assert read(tmp_path / "out-a")["files"] == ["pictures.csv", "stills/0000000000000007.png"]


def test_a_foreign_record_in_the_output_folder_refuses_the_job(write_job, clip, tmp_path: Path) -> None:
    path = job(write_job, "a")
    (tmp_path / "out-a").mkdir()
    (tmp_path / "out-a" / "record.json").write_text('{"vinyl": 1}')
    report = run_shelf([path])
    assert outcomes(report) == ["refused"]
    assert "is not a record of this tool; move it away" in report.jobs[0].reasons[0]


def test_a_record_that_cannot_be_written_fails_the_job(write_job, clip, monkeypatch: pytest.MonkeyPatch) -> None:
    def full(folder: Path, record: dict) -> None:
        raise WriteError("record.json cannot be written: there is no space left")

    monkeypatch.setattr("enhance.batch.record.write_record", full)
    report = run_shelf([job(write_job, "a")])
    assert outcomes(report) == ["failed"]
    assert report.jobs[0].reasons == ("record.json cannot be written: there is no space left",)


def test_a_folder_stands_for_its_job_files_in_natural_order_each_once(write_job, clip, tmp_path: Path) -> None:
    for name in ("10", "9", "b"):
        job(write_job, name)
    checked = check_shelf([tmp_path / "b.toml", tmp_path])
    assert [each.report.path.name for each in checked] == ["b.toml", "9.toml", "10.toml"]


def test_a_folder_without_job_files_is_a_wrong_command(tmp_path: Path) -> None:
    with pytest.raises(JobError, match=r"there is no \.toml file in this folder; name job files"):
        check_shelf([tmp_path])


def test_progress_names_the_job(write_job, clip) -> None:
    path = job(write_job, "a")
    seen = []
    run_shelf([path], progress=lambda *told: seen.append(told))
    assert seen == [(path, 0, 1, "checksums of the inputs"), (path, 1, 2, "pictures")]
