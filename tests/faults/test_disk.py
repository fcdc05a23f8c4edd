"""Disks that fill up, turn read-only or vanish: the run stops cleanly, says what to do, and goes on later.

The full disk is a real one where this user may mount a small tmpfs; ``/dev/full`` and a shim for the calls stand
in for it everywhere.
"""

import errno
import os
import re
import shutil
import subprocess
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
import tifffile
from faults.faultkit import assert_same_end, digests, unfinished, write_shoot

import grader
from grader import cli, jobs, room
from grader.batch import Batch, Options
from grader.errors import DiskFull, MissingFile, PresetError, WriteFailed
from grader.log import read_log
from grader.model import Output, ReadLimits, Recipe
from grader.options import LOG_NAME
from grader.workers import Pool

RESUME = Options(resume=True)
posix = pytest.mark.skipif(os.name != "posix", reason="mounts and permissions are POSIX")


@pytest.fixture(scope="module")
def shoot(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_shoot(tmp_path_factory.mktemp("disk") / "shoot", 24)


@pytest.fixture(scope="module")
def whole(shoot: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("whole")
    run(shoot, folder)
    return folder


def run(shoot: Path, out: Path, options: Options = RESUME, **how: object) -> list[dict]:
    return list(grader.neutralise([shoot], out, options=options, **how))


Sized = Callable[[int], Path]


@pytest.fixture
def disk(tmp_path: Path) -> Iterator[Sized]:
    """Give a folder on a disk of so many kilobytes; call again to change its size."""
    place = tmp_path / "disk"
    place.mkdir()

    def sized(kilobytes: int) -> Path:
        options = f"size={kilobytes}k" + (",remount" if os.path.ismount(place) else "")
        done = subprocess.run(
            ["mount", "-t", "tmpfs", "-o", options, "tmpfs", str(place)], capture_output=True, check=False
        )
        if done.returncode != 0:
            pytest.skip(f"this user may not mount a small disk here: {done.stderr.decode().strip()}")
        return place

    if shutil.which("mount") is None:
        pytest.skip("there is no mount command")
    yield sized
    if os.path.ismount(place):
        subprocess.run(["umount", str(place)], check=True)


def assert_nothing_torn(out: Path) -> None:
    for path in out.glob("*.tif"):
        assert tifffile.imread(path).shape == (40, 56, 3)
    assert unfinished(out) == []
    if (out / LOG_NAME).exists() and (out / LOG_NAME).stat().st_size:
        assert not read_log(out / LOG_NAME).torn


@pytest.mark.parametrize("kilobytes", [8, 48, 120, 160, 200, 280])
def test_a_full_disk_stops_the_run_and_room_lets_it_go_on(
    kilobytes: int, shoot: Path, whole: Path, disk: Sized
) -> None:
    out = disk(kilobytes) / "out"
    pool = Pool(processes=2) if kilobytes == 200 else Pool()
    with pytest.raises(DiskFull, match="disk is full") as full:
        run(shoot, out, Options(resume=True, pool=pool))
    assert "--resume" in str(full.value)
    assert len(digests(out)) < 24
    assert_nothing_torn(out)
    disk(8192)
    run(shoot, out)
    assert_same_end(out, whole)


def test_a_full_disk_on_the_command_line(
    shoot: Path, disk: Sized, capsys: pytest.CaptureFixture[str]
) -> None:
    out = disk(120) / "out"
    assert cli.run(["neutralise", str(shoot), "--out", str(out), "--workers", "0"]) == 6
    said = capsys.readouterr()
    assert said.out == ""
    assert "the disk is full" in said.err
    assert "--resume" in said.err
    assert "the results may need about" in said.err, "it was foreseen before the start"


def filling(calls_that_work: int, number: int, monkeypatch: pytest.MonkeyPatch) -> None:
    real, count = os.fsync, 0

    def fsync(handle: int) -> None:
        nonlocal count
        count += 1
        if count > calls_that_work:
            raise OSError(number, os.strerror(number))
        real(handle)

    monkeypatch.setattr(os, "fsync", fsync)


@pytest.mark.parametrize("calls", [0, 2, 9, 20])
@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EDQUOT])
def test_a_disk_that_is_found_full_when_flushed(
    calls: int, number: int, shoot: Path, whole: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    out = tmp_path / "out"
    with monkeypatch.context() as patch:
        filling(calls, number, patch)
        with pytest.raises(DiskFull) as full:
            run(shoot, out)
    assert "--resume" in str(full.value)
    assert_nothing_torn(out)
    run(shoot, out)
    assert_same_end(out, whole)


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="no /dev/full on this system")
def test_a_log_on_a_full_disk(shoot: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    command = [
        "neutralise",
        str(shoot),
        "--out",
        str(tmp_path / "out"),
        "--workers",
        "0",
        "--log",
        "/dev/full",
    ]
    assert cli.run(command) == 6
    assert "the log cannot be written" in capsys.readouterr().err
    assert digests(tmp_path / "out") == {}


def test_a_target_that_vanishes_is_not_written_beside(shoot: Path, whole: Path, tmp_path: Path) -> None:
    # What an unmounted disk leaves is an empty folder of the same name on the disk below.
    out = tmp_path / "out"
    frames = grader.neutralise([shoot], out, options=Options(resume=True, log=tmp_path / "log"))
    for _ in range(5):
        next(frames)
    out.rename(tmp_path / "away")
    out.mkdir()
    with pytest.raises(WriteFailed, match="output folder is gone"):
        list(frames)
    assert list(out.iterdir()) == []
    out.rmdir()
    (tmp_path / "away").rename(out)
    run(shoot, out, Options(resume=True, log=tmp_path / "log"))
    assert digests(out) == digests(whole)


@pytest.mark.parametrize("moment", ["measure", "grade"])
def test_a_card_that_vanishes_stops_the_run(
    moment: str, shoot: Path, whole: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    card, out = tmp_path / "card", tmp_path / "out"
    shutil.copytree(shoot, card)
    count, real = 0, getattr(jobs, f"{moment}_file")

    def until_pulled(job: object) -> object:
        nonlocal count
        count += 1
        if count == 8:
            card.rename(tmp_path / "pulled")
        return real(job)

    with monkeypatch.context() as patch:
        patch.setattr(jobs, f"{moment}_file", until_pulled)
        with pytest.raises(MissingFile, match=r"folder of the originals is gone, \d+ of 24") as stopped:
            run(card, out)
    assert "--resume" in str(stopped.value)
    assert not [line for line in read_log(out / LOG_NAME).latest() if line["status"] == "failed"]
    (tmp_path / "pulled").rename(card)
    run(card, out)
    assert digests(out) == digests(whole)


@posix
@pytest.mark.skipif(os.name == "posix" and os.geteuid() == 0, reason="root may write everywhere")
def test_a_folder_that_may_not_be_written(shoot: Path, tmp_path: Path) -> None:
    (tmp_path / "out").mkdir(mode=0o500)
    with pytest.raises(WriteFailed, match="cannot be written"):
        run(shoot, tmp_path / "out")


@pytest.mark.parametrize("number", [errno.EACCES, errno.EROFS, errno.EIO])
def test_a_folder_that_can_be_written_no_more(
    number: int, shoot: Path, whole: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    # Permission lost, a disk that the system made read-only after an error, a disk that fails.
    out, real, count = tmp_path / "out", os.open, 0

    def refused(path: object, *rest: object, **named: object) -> int:
        nonlocal count
        if ".part" in os.fspath(path):  # type: ignore[arg-type]
            count += 1
            if count > 5:
                raise OSError(number, os.strerror(number), path)
        return real(path, *rest, **named)  # type: ignore[arg-type]

    with monkeypatch.context() as patch:
        patch.setattr(os, "open", refused)
        words = f"the output folder cannot be written ({os.strerror(number)}), 5 of 24 frames are done"
        with pytest.raises(WriteFailed, match=re.escape(words)) as stopped:
            run(shoot, out)
    assert "--resume" in str(stopped.value)
    run(shoot, out)
    assert_same_end(out, whole)


def test_a_read_only_target_is_told_at_the_start(shoot: Path, disk: Sized) -> None:
    place = disk(1024)
    subprocess.run(["mount", "-o", "remount,ro", str(place)], check=True)
    with pytest.raises(WriteFailed, match="Read-only file system"):
        run(shoot, place / "out")


def test_one_name_that_cannot_be_written_costs_one_frame(shoot: Path, tmp_path: Path) -> None:
    # The name alone is too long once it is told apart from its namesake by its suffix.
    folder = tmp_path / "in"
    folder.mkdir()
    long_name = "n" * 249
    shutil.copy(shoot / "f0000.tif", folder / f"{long_name}.tif")
    shutil.copy(shoot / "f0001.tif", folder / f"{long_name}.tiff")
    shutil.copy(shoot / "f0002.tif", folder / "short.tif")
    lines = run(folder, tmp_path / "out", preset=Recipe(output=Output(format="jpeg")))
    assert sorted(line["status"] for line in lines) == ["failed", "failed", "graded"]
    assert all("too long" in line["error"]["message"] for line in lines if line["status"] == "failed")


def test_a_path_that_is_too_long_is_a_plain_error(shoot: Path, tmp_path: Path) -> None:
    with pytest.raises((WriteFailed, PresetError), match="too long"):
        run(shoot, tmp_path / ("x" * 300))


def test_room_is_estimated_from_sizes_and_headers(shoot: Path) -> None:
    paths = [str(path) for path in sorted(shoot.iterdir())]
    sizes = room.sizes_of(paths, ReadLimits())
    written = sum(Path(path).stat().st_size for path in paths)
    assert written <= room.output_bytes(sizes, Output()) <= 1.2 * written
    assert room.output_bytes(sizes, Output(format="png")) == 24 * 40 * 56 * 3
    assert room.note_on_disk(2_000_000_000, 1_000_000_000) is not None
    assert room.note_on_disk(1, None) is None


def test_a_disk_that_is_too_small_is_told_before_the_start(
    shoot: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    usage = shutil._ntuple_diskusage(10**9, 10**9 - 1000, 1000)
    monkeypatch.setattr(shutil, "disk_usage", lambda _: usage)
    with Batch([shoot], tmp_path / "out") as batch:
        assert any("may need about" in note for note in batch.notes)
