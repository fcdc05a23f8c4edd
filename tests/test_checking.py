"""``grader check``: what a finished run's log says is compared with what is there now."""

import json
import os
import shutil
from collections.abc import Callable
from pathlib import Path

import pytest
from batchkit import WARM, write_jpeg, write_tiff

import grader
from grader import cli
from grader.files import hash_file
from grader.log import encode_line
from grader.model import Output, Recipe
from grader.options import LOG_NAME
from grader.workers import Pool, Stop


@pytest.fixture
def out(tmp_path: Path) -> Path:
    """Return the folder of a finished run over four TIFF and two JPEG frames."""
    for seed in range(4):
        write_tiff(tmp_path / "in" / f"t{seed}.tif", WARM, seed=seed)
    for seed in range(2):
        write_jpeg(tmp_path / "in" / f"j{seed}.jpg", WARM, seed=seed)
    list(grader.neutralise([tmp_path / "in"], tmp_path / "out"))
    return tmp_path / "out"


def problems(out: Path, **how: object) -> dict[str, str]:
    return {Path(found.output).name: found.problem for found in grader.check(out, **how) if found.problem}


def test_an_untouched_run_is_as_logged_and_its_cast_is_gone(out: Path) -> None:
    findings = list(grader.check(out, tolerance_delta_e_2000=4.0))
    assert [found.problem for found in findings] == [None] * 6
    assert all(found.residual_delta_e_2000 < 4.0 for found in findings)


def gone(out: Path) -> None:
    (out / "t1.tif").unlink()


def changed(out: Path) -> None:
    with (out / "t1.tif").open("r+b") as file:
        file.seek(-1, os.SEEK_END)
        file.write(b"\x55")


def cut(out: Path) -> None:
    os.truncate(out / "t1.tif", 100)


def linked(out: Path) -> None:
    (out / "t1.tif").rename(out / "elsewhere")
    (out / "t1.tif").symlink_to(out / "elsewhere")


def original_changed(out: Path) -> None:
    write_tiff(out.parent / "in" / "t1.tif", WARM, seed=9)


@pytest.mark.parametrize(
    ("harm", "words"),
    [
        (gone, "gone"),
        (changed, "changed after it was written"),
        (cut, "changed after it was written"),
        (linked, "is a link"),
        (original_changed, "original changed"),
    ],
)
def test_what_differs_is_told_in_words_and_by_the_exit_code(
    harm: Callable[[Path], None], words: str, out: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    harm(out)
    assert cli.run(["check", str(out), "--workers", "0"]) == 3
    said = capsys.readouterr()
    assert "t1.tif" in said.out
    assert words in said.out
    assert "5 of 6" in said.err


def relogged(out: Path, name: str, change: Callable[[dict], None]) -> None:
    lines = [json.loads(line) for line in (out / LOG_NAME).read_text(encoding="utf-8").splitlines()]
    for line in lines:
        if line["kind"] == "frame" and Path(line["file"]).name == name and line["status"] == "graded":
            change(line)
    (out / LOG_NAME).write_bytes(b"".join(map(encode_line, lines)))


def test_a_damaged_output_is_found_even_if_its_hash_is_the_logged_one(out: Path) -> None:
    place = out / "j1.jpg"
    place.write_bytes(place.read_bytes()[:2000])
    relogged(out, "j1.jpg", lambda line: line["output"].update(sha256=hash_file(place)))
    assert "j1.jpg" in problems(out)


def test_a_cast_in_the_written_file_is_found_beyond_the_tolerance(out: Path) -> None:
    # Outside check: the picture that is put there shows the warm light that the test itself laid over it.
    place = out / "t2.tif"
    shutil.copy(out.parent / "in" / "t2.tif", place)
    relogged(out, "t2.tif", lambda line: line["output"].update(sha256=hash_file(place)))
    assert problems(out) == {}
    assert set(problems(out, tolerance_delta_e_2000=4.0)) == {"t2.tif"}


def test_an_aim_other_than_neutral_is_held_against_that_aim(out: Path, tmp_path: Path) -> None:
    list(grader.neutralise([tmp_path / "in"], tmp_path / "warm", preset=Recipe(keep_yellow_blue=0.4)))
    toward_neutral = [f.residual_delta_e_2000 for f in grader.check(tmp_path / "warm")]
    assert max(toward_neutral) < 6.0


def test_a_run_that_was_not_finished_is_told(out: Path, tmp_path: Path) -> None:
    stop = Stop()
    for number, _ in enumerate(grader.neutralise([tmp_path / "in"], tmp_path / "half", stop=stop)):
        if number == 1:
            stop.ask()
    told = [found.problem for found in grader.check(tmp_path / "half") if found.problem]
    assert len(told) == 5
    assert all("--resume" in problem for problem in told)


def test_no_log_no_check(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert cli.run(["check", str(tmp_path)]) == 5
    (tmp_path / LOG_NAME).write_text("words\n")
    assert cli.run(["check", str(tmp_path)]) == 5
    assert capsys.readouterr().out == ""


def test_json_and_workers_say_the_same(out: Path, capsys: pytest.CaptureFixture[str]) -> None:
    changed(out)
    assert cli.run(["check", str(out), "--json", "--quiet", "--workers", "2"]) == 3
    said = capsys.readouterr()
    assert said.err == ""
    read = [json.loads(line) for line in said.out.splitlines()]
    inline = list(grader.check(out, pool=Pool()))
    assert sorted(one["output"] for one in read) == sorted(found.output for found in inline)
    assert {one["output"]: one["problem"] for one in read} == {f.output: f.problem for f in inline}


def test_other_formats_and_depths(out: Path, tmp_path: Path) -> None:
    list(grader.neutralise([tmp_path / "in"], tmp_path / "png", preset=Recipe(output=Output(format="png"))))
    assert problems(tmp_path / "png") == {}
