import hashlib
import json
from pathlib import Path

import pytest

from enhance.batch import read_job, record
from enhance.errors import JobError, ReadError, WriteError


def write_old(folder: Path, files: list[str]) -> None:
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "record.json").write_text(json.dumps({"tool": "enhance", "files": files}))


def test_inputs_are_digested_with_sizes_and_relative_paths(write_job) -> None:
    found = record.input_digests(read_job(write_job()))
    # FIPS 180-4 through the standard library, over the bytes the test laid down
    assert found["events.source"] == {
        "path": "../events.h5",
        "bytes": 6,
        "sha256": hashlib.sha256(b"events").hexdigest(),
    }
    line = f"0.png 4 {hashlib.sha256(b'zero').hexdigest()}\n"
    assert found["frames.source"] == {
        "path": "../frames",
        "bytes": 4,
        "files": 1,
        "sha256": hashlib.sha256(line.encode()).hexdigest(),
    }
    assert set(found) == {"frames.source", "frames.times", "events.source"}


def test_a_changed_or_renamed_frame_changes_the_folders_digest(write_job, tmp_path: Path) -> None:
    settings = read_job(write_job())
    digests = {record.input_digests(settings)["frames.source"]["sha256"]}
    (tmp_path / "frames" / "0.png").write_bytes(b"Zero")
    digests.add(record.input_digests(settings)["frames.source"]["sha256"])
    (tmp_path / "frames" / "0.png").rename(tmp_path / "frames" / "1.png")
    digests.add(record.input_digests(settings)["frames.source"]["sha256"])
    assert len(digests) == 3


def test_an_input_that_has_gone_is_named(write_job, tmp_path: Path) -> None:
    settings = read_job(write_job())
    (tmp_path / "events.h5").unlink()
    with pytest.raises(ReadError, match=r"events.h5 \(events.source\) cannot be read: No such file.*check that"):
        record.input_digests(settings)


def test_names_are_sorted_as_people_count() -> None:
    assert sorted(["10.png", "9.png", "a10", "a9"], key=record.natural) == ["9.png", "10.png", "a9", "a10"]


def test_exactly_the_listed_files_are_removed_and_emptied_folders_with_them(tmp_path: Path) -> None:
    (tmp_path / "stills").mkdir()
    (tmp_path / "held-out").mkdir()
    for name in ("pictures.csv", "stills/1.png", "held-out/1.png", "held-out/mine.png", "mine.csv"):
        (tmp_path / name).write_text("x")
    write_old(tmp_path, ["pictures.csv", "stills/1.png", "held-out/1.png", "gone.csv"])
    assert record.remove_old(tmp_path) == 3
    assert sorted(path.relative_to(tmp_path).as_posix() for path in tmp_path.rglob("*")) == [
        "held-out",
        "held-out/mine.png",
        "mine.csv",
    ]


@pytest.mark.parametrize("climbing", ["../mine.csv", "stills/../../mine.csv", "absolute", "linked/mine.csv"])
def test_a_listed_path_that_leads_out_of_the_folder_is_never_followed(tmp_path: Path, climbing: str) -> None:
    out = tmp_path / "out"
    (out / "stills").mkdir(parents=True)
    mine = tmp_path / "mine.csv"
    mine.write_text("x")
    (out / "linked").symlink_to(tmp_path, target_is_directory=True)
    write_old(out, [str(mine) if climbing == "absolute" else climbing])
    record.remove_old(out)
    assert mine.read_text() == "x"


def test_an_old_file_that_cannot_be_removed_is_named(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "pictures.csv").write_text("x")
    write_old(tmp_path, ["pictures.csv"])

    # as root nothing is forbidden, so the answer is put into the system's mouth
    def forbidden(path: Path, missing_ok: bool = False) -> None:
        raise PermissionError(13, "Permission denied", str(path))

    monkeypatch.setattr(Path, "unlink", forbidden)
    with pytest.raises(
        WriteError, match=r"pictures.csv: was left by an earlier run and cannot be removed \(Permission"
    ):
        record.remove_old(tmp_path)


def test_a_folder_without_a_record_loses_nothing(tmp_path: Path) -> None:
    (tmp_path / "pictures.csv").write_text("x")
    assert record.remove_old(tmp_path) == 0
    assert record.remove_old(tmp_path / "none") == 0
    assert (tmp_path / "pictures.csv").exists()


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("{", "cannot be read as the record of an earlier run .*move it away, or give output.folder another name"),
        ('{"files": ["a"]}', "is not a record of this tool; move it away"),
        ("[1]", "is not a record of this tool"),
    ],
)
def test_a_record_of_someone_else_is_not_acted_upon(tmp_path: Path, text: str, message: str) -> None:
    (tmp_path / "record.json").write_text(text)
    with pytest.raises(JobError, match=message):
        record.remove_old(tmp_path)


def test_versions_name_the_packages_that_can_change_a_result() -> None:
    found = record.versions()
    assert {"python", "enhance", "numpy", "torch", "numba", "av", "opencv-python-headless"} <= set(found)
    assert all(found[name][0].isdigit() for name in ("python", "numpy", "torch"))


def test_only_files_with_a_results_name_count_as_left_by_a_run(tmp_path: Path) -> None:
    results = ["pictures.csv", "stills/0000000000000007.png", "trust/0000000000000007.png"]
    for name in (*results, "mine.txt", "stills/mine.png", "trust/mine.png"):
        (tmp_path / name).parent.mkdir(exist_ok=True)
        (tmp_path / name).write_text("x")
    assert list(record.products(tmp_path)) == results
    before = {"pictures.csv": record.products(tmp_path)["pictures.csv"]}
    assert record.left_over(tmp_path, before) == results[1:]
