"""A file appears whole or not at all."""

import errno
import os
import shutil
from pathlib import Path
from types import SimpleNamespace

import pytest

from enhance.errors import JobError, WriteError
from enhance.write import probe_folder, whole_file


def test_the_file_appears_only_when_the_block_ends_and_nothing_else_stays(tmp_path: Path):
    target = tmp_path / "new" / "table.csv"
    with whole_file(target) as partial:
        partial.write_text("a,b\n")
        assert partial.parent == target.parent
        assert partial.suffix == ".csv"
        assert not target.exists()
    assert target.read_text() == "a,b\n"
    assert os.listdir(target.parent) == ["table.csv"]


def test_two_writers_of_one_file_use_different_temporary_names(tmp_path: Path):
    with whole_file(tmp_path / "a.png") as first, whole_file(tmp_path / "a.png") as second:
        assert first != second
        assert str(os.getpid()) in first.name
        first.write_bytes(b"1")
        second.write_bytes(b"2")


@pytest.mark.parametrize("error", [KeyboardInterrupt(), ValueError("stop"), JobError("stop")])
def test_a_stop_in_the_middle_leaves_the_old_file_and_no_half_one(tmp_path: Path, error):
    target = tmp_path / "a.json"
    target.write_text("old")
    with pytest.raises(type(error)), whole_file(target) as partial:  # noqa: PT012
        partial.write_text("half of the n")
        raise error
    assert target.read_text() == "old"
    assert os.listdir(tmp_path) == ["a.json"]


@pytest.mark.parametrize(
    ("number", "words"),
    [
        (errno.ENOSPC, "no space left on the disk; free some"),
        (errno.EACCES, "no permission to write there; change the folder's rights"),
        (errno.EROFS, "read-only; choose another output.folder"),
        (errno.EIO, "check the disk and run the job again"),
    ],
)
def test_a_refusal_of_the_disk_names_the_file_the_cause_and_the_remedy(tmp_path: Path, monkeypatch, number, words):
    def refuse(*_):
        raise OSError(number, os.strerror(number))

    monkeypatch.setattr(os, "replace", refuse)
    with (
        pytest.raises(WriteError, match=f"a.png cannot be written: .*{words}"),
        whole_file(tmp_path / "a.png") as partial,
    ):
        partial.write_bytes(b"x")
    assert os.listdir(tmp_path) == []


def test_the_content_is_on_the_disk_before_the_name_is(tmp_path: Path, monkeypatch):
    order = []
    fsync, replace = os.fsync, os.replace
    monkeypatch.setattr(os, "fsync", lambda f: (order.append("fsync"), fsync(f)))
    monkeypatch.setattr(os, "replace", lambda a, b: (order.append("replace"), replace(a, b)))
    with whole_file(tmp_path / "a") as partial:
        partial.write_bytes(b"x")
    assert order == ["fsync", "replace", "fsync"]


def test_a_file_in_the_place_of_a_folder_is_told_apart(tmp_path: Path):
    (tmp_path / "out").write_text("a file")
    with (
        pytest.raises(WriteError, match="a file stands where a folder is expected"),
        whole_file(tmp_path / "out" / "a.png"),
    ):
        pass
    with pytest.raises(WriteError, match="out cannot be written: a part of the path is a file"):
        probe_folder(tmp_path / "out")


def test_probing_a_folder_that_is_not_there_yet_leaves_no_trace(tmp_path: Path):
    probe_folder(tmp_path / "not" / "yet")
    assert os.listdir(tmp_path) == []


def test_a_disk_that_is_too_small_is_told_before_the_work(tmp_path: Path, monkeypatch):
    monkeypatch.setattr(shutil, "disk_usage", lambda _: SimpleNamespace(free=2_000_000_000))
    probe_folder(tmp_path, needed_bytes=2_000_000_000)
    with pytest.raises(WriteError, match=r"2\.0 GB are free, about 3\.0 GB are needed"):
        probe_folder(tmp_path, needed_bytes=3_000_000_000)
