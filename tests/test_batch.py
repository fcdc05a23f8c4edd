"""Whole batches over real files: what comes out, what is logged, what goes on when files are bad."""

import hashlib
import json
import shutil
from pathlib import Path

import jsonschema
import numpy as np
import pytest
import tifffile
from batchkit import NEUTRAL, WARM, encoded_scene, write_jpeg, write_tiff
from faults.faultkit import digests
from PIL import Image

import grader
from grader.batch import Batch, Options
from grader.errors import PresetError
from grader.log import read_log
from grader.model import Fixed, Output, Recipe
from grader.options import LOG_NAME
from grader.workers import Pool, Stop

SCHEMA = json.loads((Path(__file__).parents[1] / "docs" / "log.schema.json").read_text(encoding="utf-8"))


@pytest.fixture
def shoot(tmp_path: Path) -> Path:
    folder = tmp_path / "shoot"
    for seed in range(3):
        write_tiff(folder / f"t{seed}.tif", seed=seed)
        write_jpeg(folder / f"j{seed}.jpg", seed=seed, taken_at=f"2031:05:04 18:00:{seed:02}")
    return folder


def run(paths: object, out: Path, **how: object) -> list[dict]:
    return list(grader.neutralise([paths], out, **how))


def test_a_folder_is_neutralised_and_logged(shoot: Path, tmp_path: Path) -> None:
    before = digests(shoot)
    lines = run(shoot, tmp_path / "out")
    assert [line["status"] for line in lines] == ["graded"] * 6
    assert digests(shoot) == before, "originals were touched"
    log = tmp_path / "out" / LOG_NAME
    for text in log.read_text(encoding="utf-8").splitlines():
        jsonschema.validate(json.loads(text), SCHEMA)
    read = read_log(log)
    assert read.summary["graded"] == 6
    for line in read.latest():
        output = tmp_path / "out" / line["output"]["file"]
        assert hashlib.sha256(output.read_bytes()).hexdigest() == line["output"]["sha256"]
        assert hashlib.sha256(Path(line["file"]).read_bytes()).hexdigest() == line["sha256"]
    assert (
        read.summary["mean_cast_after"]["delta_e_2000"] < read.summary["mean_cast_before"]["delta_e_2000"] / 2
    )


def test_the_cast_is_gone_from_the_written_pixels(shoot: Path, tmp_path: Path) -> None:
    # Outside check: scikit-image's photographs as packaged are the neutral state; tifffile and Pillow read the files.
    run(shoot, tmp_path / "out")
    for name, seed in (("t1.tif", 1), ("j1.jpg", 1)):
        neutral = encoded_scene(NEUTRAL, seed).mean(axis=(0, 1))
        before, after = (pixels(folder / name).mean(axis=(0, 1)) for folder in (shoot, tmp_path / "out"))
        apart = [np.ptp(mean / neutral / (mean / neutral).mean()) for mean in (before, after)]
        assert apart[1] < apart[0] / 3, name


def pixels(path: Path) -> np.ndarray:
    """Read a picture with a library of its own, scaled to 0 to 1."""
    if path.suffix == ".tif":
        return tifffile.imread(path) / 65535.0
    with Image.open(path) as image:
        return np.asarray(image) / 255.0


def test_depth_and_kind_are_kept(shoot: Path, tmp_path: Path) -> None:
    run(shoot, tmp_path / "out")
    assert tifffile.imread(tmp_path / "out" / "t0.tif").dtype == np.uint16
    with Image.open(tmp_path / "out" / "j0.jpg") as image:
        assert image.format == "JPEG"
        assert image.getexif().get_ifd(0x8769)[0x9003] == "2031:05:04 18:00:00"


def test_a_neutral_batch_is_nearly_left_alone(tmp_path: Path) -> None:
    for seed in range(4):
        write_tiff(tmp_path / "in" / f"{seed}.tif", NEUTRAL, seed=seed)
    lines = run(tmp_path / "in", tmp_path / "out")
    assert np.mean([line["cast"]["delta_e_2000"] for line in lines]) < 2.5


@pytest.mark.parametrize("pool", [Pool(processes=2), Pool(cluster="local:2")], ids=["local", "dask"])
def test_everywhere_the_same_bytes(shoot: Path, tmp_path: Path, pool: Pool) -> None:
    run(shoot, tmp_path / "inline")
    run(shoot, tmp_path / "pool", options=Options(pool=pool))
    assert digests(tmp_path / "pool") == digests(tmp_path / "inline")


def test_the_order_of_the_files_does_not_matter(shoot: Path, tmp_path: Path) -> None:
    files = sorted(shoot.iterdir())
    list(grader.neutralise(files, tmp_path / "a"))
    list(grader.neutralise(files[::-1], tmp_path / "b"))
    assert digests(tmp_path / "a") == digests(tmp_path / "b")


def test_bad_files_cost_themselves_only(shoot: Path, tmp_path: Path) -> None:
    (shoot / "empty.tif").write_bytes(b"")
    (shoot / "words.tif").write_text("not a picture, just words\n" * 40)
    whole = (shoot / "j0.jpg").read_bytes()
    (shoot / "cut.jpg").write_bytes(whole[: len(whole) // 2])
    lines = list(grader.neutralise([shoot, tmp_path / "nowhere.dng"], tmp_path / "out"))
    failed = {Path(line["file"]).name: line["error"] for line in lines if line["status"] == "failed"}
    assert set(failed) == {"empty.tif", "words.tif", "cut.jpg", "nowhere.dng"}
    assert {failed["empty.tif"]["code"], failed["cut.jpg"]["code"]} == {"damaged"}
    assert all(error["message"] and "\n" not in error["message"] for error in failed.values())
    assert sum(line["status"] == "graded" for line in lines) == 6
    assert "cut.jpg" not in digests(tmp_path / "out")


def test_two_inputs_that_would_share_a_name_are_both_kept(tmp_path: Path) -> None:
    write_tiff(tmp_path / "in" / "a.tif")
    write_jpeg(tmp_path / "in" / "a.jpg")
    run(tmp_path / "in", tmp_path / "out", preset=Recipe(output=Output(format="jpeg")))
    assert set(digests(tmp_path / "out")) == {"a.tif.jpg", "a.jpg.jpg"}


def test_an_output_that_is_there_is_not_replaced_unless_asked(shoot: Path, tmp_path: Path) -> None:
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "t1.tif").write_bytes(b"mine")
    with pytest.raises(PresetError, match="there already"):
        run(shoot, tmp_path / "out")
    assert (tmp_path / "out" / "t1.tif").read_bytes() == b"mine"
    assert len(run(shoot, tmp_path / "out", options=Options(overwrite=True))) == 6


def test_the_folder_of_the_originals_is_refused(shoot: Path) -> None:
    before = digests(shoot)
    with pytest.raises(PresetError, match="originals"):
        run(shoot, shoot)
    assert digests(shoot) == before


def test_a_second_run_needs_to_be_told_what_to_do(shoot: Path, tmp_path: Path) -> None:
    run(shoot, tmp_path / "out")
    with pytest.raises(PresetError, match="--resume"):
        run(shoot, tmp_path / "out")


def test_a_stopped_run_goes_on_to_the_same_end(shoot: Path, tmp_path: Path) -> None:
    run(shoot, tmp_path / "whole")
    stop = Stop()
    for count, _ in enumerate(grader.neutralise([shoot], tmp_path / "out", stop=stop)):
        if count == 1:
            stop.ask()
    assert len(digests(tmp_path / "out")) == 2
    assert read_log(tmp_path / "out" / LOG_NAME).summary["interrupted"]
    run(shoot, tmp_path / "out", options=Options(resume=True))
    assert digests(tmp_path / "out") == digests(tmp_path / "whole")
    assert comparable(tmp_path / "out") == comparable(tmp_path / "whole")


def comparable(folder: Path) -> list[dict]:
    """Return the log's lines without what differs between runs by nature: times and the folder's name."""
    lines = [json.loads(text) for text in (folder / LOG_NAME).read_text(encoding="utf-8").splitlines()]
    return [
        {k: v for k, v in line.items() if k not in {"seconds", "started", "out", "command"}} for line in lines
    ]


def test_resuming_a_finished_run_changes_nothing(shoot: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    run(shoot, out)
    stamps = {path: path.stat().st_mtime_ns for path in out.iterdir() if path.suffix in {".tif", ".jpg"}}
    lines = run(shoot, out, options=Options(resume=True))
    assert [line["status"] for line in lines] == ["graded"] * 6
    assert {path: path.stat().st_mtime_ns for path in stamps} == stamps


def test_resuming_repairs_what_was_lost_or_changed(shoot: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    run(shoot, out)
    good = digests(out)
    (out / "t0.tif").unlink()
    (out / "t1.tif").write_bytes(b"trampled on")
    run(shoot, out, options=Options(resume=True))
    assert digests(out) == good


def test_new_frames_are_measured_alone_and_old_ones_kept(shoot: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    run(shoot, out)
    stamps = {path.name: path.stat().st_mtime_ns for path in out.glob("j*.jpg")}
    write_jpeg(shoot / "late.jpg", seed=9, taken_at="2031:05:05 09:00:00")
    lines = run(shoot, out, options=Options(resume=True))
    assert len(lines) == 7
    assert (out / "late.jpg").exists()
    assert {
        path.name: path.stat().st_mtime_ns for path in out.glob("j*.jpg") if path.name != "late.jpg"
    } == stamps


def test_two_runs_into_one_folder_exclude_each_other(shoot: Path, tmp_path: Path) -> None:
    with Batch([shoot], tmp_path / "out"), pytest.raises(PresetError, match="another run"):
        run(shoot, tmp_path / "out", options=Options(overwrite=True))


def test_a_dry_run_writes_nothing(shoot: Path, tmp_path: Path) -> None:
    lines = run(shoot, tmp_path / "out", options=Options(dry_run=True))
    assert [line["status"] for line in lines] == ["planned"] * 6
    assert not (tmp_path / "out").exists()


def test_a_frame_by_itself_equals_its_own_measurement(shoot: Path, tmp_path: Path) -> None:
    lines = run(shoot, tmp_path / "out", preset=Recipe(pooling=False))
    for line in lines:
        np.testing.assert_allclose(line["correction"]["from_xy"], line["cast"]["white_xy"], atol=1e-9)


def test_a_fixed_preset_does_the_same_to_every_frame(shoot: Path, tmp_path: Path) -> None:
    fixed = Fixed(from_xy=WARM, toward_xy=NEUTRAL)
    lines = list(grader.apply(fixed, [shoot], tmp_path / "out"))
    matrices = {json.dumps(line["correction"]["matrix"]) for line in lines}
    assert len(matrices) == 1
    again = list(grader.apply(fixed, [shoot], tmp_path / "again"))
    assert digests(tmp_path / "again") == digests(tmp_path / "out")
    assert len(again) == 6


def test_matching_a_hero_frame(shoot: Path, tmp_path: Path) -> None:
    hero = write_tiff(tmp_path / "hero.tif", (0.335, 0.345), seed=7)
    lines = run(shoot, tmp_path / "out", preset=Recipe(toward=str(hero)))
    aim = lines[0]["correction"]["toward_xy"]
    np.testing.assert_allclose(aim, grader.measure(grader.read(hero)).white_xy, atol=2e-3)


def test_measuring_writes_no_picture(shoot: Path, tmp_path: Path) -> None:
    log = tmp_path / "log.jsonl"
    lines = list(grader.measure_files([shoot], options=Options(log=log)))
    assert [line["status"] for line in lines] == ["planned"] * 6
    assert [path.name for path in tmp_path.iterdir()] == ["log.jsonl", "shoot"] or log.exists()
    assert read_log(log).summary["measured"] == 6


def test_check_finds_what_was_changed(shoot: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    run(shoot, out)
    assert [finding.problem for finding in grader.check(out)] == [None] * 6
    (out / "t0.tif").unlink()
    (out / "t1.tif").write_bytes(b"trampled on")
    problems = {Path(f.output).name: f.problem for f in grader.check(out) if f.problem}
    assert set(problems) == {"t0.tif", "t1.tif"}


def test_check_works_on_a_folder_that_was_moved(shoot: Path, tmp_path: Path) -> None:
    run(shoot, tmp_path / "out")
    shutil.move(tmp_path / "out", tmp_path / "elsewhere")
    assert all(finding.problem is None for finding in grader.check(tmp_path / "elsewhere"))


def test_a_grey_picture_among_others_stays_as_it_is(shoot: Path, tmp_path: Path) -> None:
    Image.fromarray(np.arange(120 * 90, dtype=np.uint32).reshape(90, 120).astype(np.uint8)).save(
        shoot / "grey.png"
    )
    lines = {Path(line["file"]).name: line for line in run(shoot, tmp_path / "out")}
    assert "grey" in lines["grey.png"]["flags"]
    with Image.open(shoot / "grey.png") as before, Image.open(tmp_path / "out" / "grey.png") as after:
        assert after.mode == "L"
        np.testing.assert_array_equal(np.asarray(after), np.asarray(before))
