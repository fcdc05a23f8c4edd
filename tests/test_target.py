"""The output folder: one run at a time, nothing of it outside, nothing left behind."""

import os
from pathlib import Path, PurePath

import pytest

from grader.errors import DiskFull, PresetError, WriteFailed
from grader.target import LOCK_NAME, Target, enter, has_arrived


def test_one_run_at_a_time(tmp_path: Path) -> None:
    first, second = Target(tmp_path / "out"), Target(tmp_path / "out")
    first.take()
    with pytest.raises(PresetError, match="another run"):
        second.take()
    first.release()
    second.take()
    second.release()
    second.release()


def test_a_lock_file_of_a_dead_run_locks_nothing(tmp_path: Path) -> None:
    (tmp_path / LOCK_NAME).write_text("4711")
    target = Target(tmp_path)
    target.take()
    target.release()


def test_a_folder_that_cannot_be_made(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(WriteFailed):
        Target(tmp_path / "file" / "out").take()


def test_only_our_own_unfinished_files_go_and_only_from_our_folders(tmp_path: Path) -> None:
    names = [".grader-0123456789ab.part", ".grader-0123456789aB.part", "x.part", ".grader-0123456789ab.part~"]
    for folder in (tmp_path, tmp_path / "sub", tmp_path / "other", tmp_path.parent / f"{tmp_path.name}-b"):
        folder.mkdir(exist_ok=True)
        for name in names:
            (folder / name).write_text("x")
    target = Target(tmp_path)
    assert target.clean([PurePath("a.tif"), PurePath("sub/b.tif"), PurePath("none/c.tif")]) == 2
    assert not (tmp_path / names[0]).exists()
    assert not (tmp_path / "sub" / names[0]).exists()
    assert (tmp_path / "other" / names[0]).exists()
    assert all((tmp_path / name).exists() for name in names[1:])


def test_trouble_is_told_and_leaves_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    target = Target(tmp_path)
    trouble = target.trouble()
    assert trouble is not None
    assert "gone" in trouble.message
    target.take()
    assert target.trouble() is None

    def full(*_: object) -> int:
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr(os, "write", full)
        assert isinstance(target.trouble(), DiskFull)
    target.release()
    assert [path.name for path in tmp_path.iterdir()] in ([], [LOCK_NAME])


def test_a_worker_enters_the_runs_folder_alone(tmp_path: Path) -> None:
    root = tmp_path / "out"
    with pytest.raises(WriteFailed, match="gone"):
        enter(str(root), str(root / "a" / "b.tif"))
    assert not root.exists()
    root.mkdir()
    (root / LOCK_NAME).write_text("")
    enter(str(root), str(root / "a" / "b" / "c.tif"))
    assert (root / "a" / "b").is_dir()
    with pytest.raises(WriteFailed, match="leads out"):
        enter(str(root), str(root / ".." / "elsewhere" / "c.tif"))
    assert not (tmp_path / "elsewhere").exists()


@pytest.mark.skipif(os.name != "posix", reason="links")
def test_links_are_followed_before_a_worker_trusts_them(tmp_path: Path) -> None:
    root = tmp_path / "out"
    (root / "real").mkdir(parents=True)
    (root / LOCK_NAME).write_text("")
    (root / "inside").symlink_to(root / "real")
    (root / "up").symlink_to("..")
    enter(str(root), str(root / "inside" / "a.tif"))
    with pytest.raises(WriteFailed, match="leads out"):
        enter(str(root), str(root / "up" / "deep" / "a.tif"))
    assert not (tmp_path / "deep").exists()
    linked = tmp_path / "by-link"
    linked.symlink_to(root)
    enter(str(linked), str(linked / "new" / "a.tif"))
    assert (root / "new").is_dir()


def test_free_room_of_a_folder_that_is_not_there_yet(tmp_path: Path) -> None:
    free = Target(tmp_path / "a" / "b").free_bytes()
    assert free is not None
    assert free > 0


def test_a_result_that_does_not_arrive(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("grader.target._ARRIVAL_S", 0.0)
    (tmp_path / "a").write_bytes(b"abc")
    assert has_arrived(tmp_path / "a", 3)
    assert not has_arrived(tmp_path / "a", 4)
    assert not has_arrived(tmp_path / "b", 3)
