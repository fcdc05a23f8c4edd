"""What an earlier run left: reused where it provably holds, done again where it does not, never taken over by force."""

import os
import shutil
from pathlib import Path

import numpy as np
import pytest
import tifffile
from batchkit import write_jpeg
from faults.faultkit import assert_same_end, comparable, digests, write_shoot

import grader
from grader import jobs
from grader.batch import Batch, Options
from grader.errors import DamagedFile, PresetError, WorkerFailed
from grader.log import encode_line, read_log
from grader.model import Fixed, Output, Recipe
from grader.options import LOG_NAME
from grader.resume import Earlier
from grader.workers import Stop


@pytest.fixture(scope="module")
def origin(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_shoot(tmp_path_factory.mktemp("origin"), 9)


@pytest.fixture
def shoot(origin: Path, tmp_path: Path) -> Path:
    shutil.copytree(origin, tmp_path / "shoot")
    return tmp_path / "shoot"


def run(shoot: Path, out: Path, preset: Recipe | Fixed | None = None, **how: object) -> list[dict]:
    options = Options(**{"resume": True} | how)
    return list(grader.neutralise([shoot], out, preset=preset, options=options))


class Counted:
    """Counts the files that are decoded, by stage."""

    def __init__(self, patch: pytest.MonkeyPatch) -> None:
        self.measured: list[str] = []
        self.graded: list[str] = []
        measure, grade = jobs.measure_file, jobs.grade_file

        def measuring(job: jobs.MeasureJob) -> jobs.Measured:
            done = measure(job)
            self.measured += [Path(job.path).name] if done.cast is not None else []
            return done

        def grading(job: jobs.GradeJob) -> jobs.Graded:
            done = grade(job)
            self.graded += [Path(job.path).name] if done.written is not None else []
            return done

        patch.setattr(jobs, "measure_file", measuring)
        patch.setattr(jobs, "grade_file", grading)


@pytest.fixture
def counted(monkeypatch: pytest.MonkeyPatch) -> Counted:
    return Counted(monkeypatch)


PRESETS = {"shoot": Recipe(), "each": Recipe(pooling=False), "fixed": Fixed((0.40, 0.385), (0.3127, 0.329))}


@pytest.mark.parametrize("preset", PRESETS.values(), ids=PRESETS)
def test_what_is_finished_is_neither_measured_nor_graded_again(
    preset: Recipe | Fixed, shoot: Path, tmp_path: Path, counted: Counted
) -> None:
    whole, out = tmp_path / "whole", tmp_path / "out"
    run(shoot, whole, preset)
    stop = Stop()
    batch = grader.neutralise([shoot], out, preset=preset, options=Options(), stop=stop)
    for number, _ in enumerate(batch):
        if number == 3:
            stop.ask()
    counted.measured.clear()
    counted.graded.clear()
    run(shoot, out, preset)
    assert counted.measured == []
    assert len(counted.graded) == 5
    assert_same_end(out, whole)


def test_a_source_that_changed_is_measured_and_graded_again(
    shoot: Path, tmp_path: Path, counted: Counted
) -> None:
    run(shoot, tmp_path / "out", PRESETS["fixed"])
    counted.graded.clear()
    shutil.copy(shoot / "f0001.tif", shoot / "f0004.tif")
    lines = run(shoot, tmp_path / "out", PRESETS["fixed"])
    assert [line["status"] for line in lines] == ["graded"] * 9
    assert counted.graded == ["f0004.tif"]
    pictures = [tifffile.imread(tmp_path / "out" / name) for name in ("f0001.tif", "f0004.tif")]
    np.testing.assert_array_equal(*pictures)


def test_a_source_that_changed_in_a_shoot_too(shoot: Path, tmp_path: Path) -> None:
    run(shoot, tmp_path / "out")
    shutil.copy(shoot / "f0001.tif", shoot / "f0004.tif")
    lines = run(shoot, tmp_path / "out", regrade_deg=0.0)
    assert [line["status"] for line in lines] == ["graded"] * 9
    run(shoot, tmp_path / "anew")
    assert digests(tmp_path / "out") == digests(tmp_path / "anew")


def test_another_preset_keeps_the_measurements_and_replaces_the_outputs(
    shoot: Path, tmp_path: Path, counted: Counted
) -> None:
    run(shoot, tmp_path / "out")
    counted.measured.clear()
    kept = Recipe(keep_yellow_blue=0.5)
    run(shoot, tmp_path / "out", kept)
    assert counted.measured == []
    run(shoot, tmp_path / "anew", kept)
    assert_same_end(tmp_path / "out", tmp_path / "anew")


def test_a_run_with_another_preset_that_was_killed_is_not_taken_for_the_first(
    shoot: Path, tmp_path: Path
) -> None:
    # The outputs of the first settings must not pass for those of the second, nor the other way round.
    first, second, out = Recipe(), Recipe(output=Output(space="Display P3")), tmp_path / "out"
    run(shoot, out, first)
    frames = grader.neutralise([shoot], out, preset=second, options=Options(resume=True))
    next(frames)
    next(frames)
    frames.close()
    run(shoot, out, second)
    run(shoot, tmp_path / "anew", second)
    assert_same_end(out, tmp_path / "anew")
    run(shoot, out, first)
    run(shoot, tmp_path / "again", first)
    assert_same_end(out, tmp_path / "again")


def test_another_opponent_space_is_measured_anew(shoot: Path, tmp_path: Path, counted: Counted) -> None:
    run(shoot, tmp_path / "out")
    counted.measured.clear()
    run(shoot, tmp_path / "out", Recipe(opponent="cielab"))
    assert len(counted.measured) == 9


def test_tiffs_taken_for_something_else_are_measured_anew(
    shoot: Path, tmp_path: Path, counted: Counted
) -> None:
    write_jpeg(shoot / "beside.jpg")
    run(shoot, tmp_path / "out")
    counted.measured.clear()
    run(shoot, tmp_path / "out", Recipe(linear_tiff="scene"))
    assert len(counted.measured) == 9
    assert "beside.jpg" not in counted.measured


def test_another_version_trusts_nothing(
    shoot: Path, tmp_path: Path, counted: Counted, monkeypatch: pytest.MonkeyPatch
) -> None:
    run(shoot, tmp_path / "out")
    counted.measured.clear()
    monkeypatch.setattr(grader, "__version__", "99")
    run(shoot, tmp_path / "out")
    assert len(counted.measured) == 9


def test_another_format_says_which_outputs_stay_behind(shoot: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    run(shoot, out)
    png = Recipe(output=Output(format="png"))
    with Batch([shoot], out, preset=png, options=Options(resume=True)) as batch:
        list(batch.grade())
    assert any("9 outputs of an earlier run get other names now" in note for note in batch.notes)
    assert sorted({Path(name).suffix for name in digests(out)}) == [".png", ".tif"]


def test_a_new_frame_grades_again_only_what_moved(shoot: Path, tmp_path: Path, counted: Counted) -> None:
    run(shoot, tmp_path / "out")
    counted.measured.clear()
    counted.graded.clear()
    shutil.copy(shoot / "f0008.tif", shoot / "late.tif")
    lines = run(shoot, tmp_path / "out", regrade_deg=180.0)
    assert counted.measured == counted.graded == ["late.tif"]
    for line in lines:  # what stands in the log is what is in the file, not what would be done now
        early = next(
            (one for one in read_log(tmp_path / "out" / LOG_NAME).latest() if one["file"] == line["file"]),
            line,
        )
        assert early["correction"]["matrix"] == line["correction"]["matrix"]
    counted.graded.clear()
    run(shoot, tmp_path / "out", regrade_deg=0.0)
    run(shoot, tmp_path / "anew")
    assert digests(tmp_path / "out") == digests(tmp_path / "anew")


def test_a_strangers_file_under_a_new_name_is_not_replaced(shoot: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    run(shoot, out)
    shutil.copy(shoot / "f0000.tif", shoot / "late.tif")
    (out / "late.tif").write_text("mine")
    with pytest.raises(PresetError, match="there already"):
        run(shoot, out)
    assert (out / "late.tif").read_text() == "mine"


@pytest.mark.parametrize("graded", [True, False])
def test_a_source_that_is_gone_is_told_and_its_output_stays(
    graded: bool, shoot: Path, tmp_path: Path
) -> None:
    out = tmp_path / "out"
    stop = Stop()
    for number, _ in enumerate(grader.neutralise([shoot], out, options=Options(), stop=stop)):
        if number == 4:
            stop.ask()
    gone = "f0000.tif" if graded else "f0008.tif"
    before = digests(out).get(gone)
    (shoot / gone).unlink()
    with Batch([shoot], out, options=Options(resume=True)) as batch:
        lines = {Path(line["file"]).name: line for line in batch.grade()}
    assert digests(out).get(gone) == before
    assert batch.summary["frames"] == 9
    if graded:
        assert batch.summary["graded"] == 9
    else:
        assert lines[gone]["status"] == "skipped"
        assert "gone" in lines[gone]["error"]["message"]
        assert (batch.summary["graded"], batch.summary["skipped"]) == (8, 1)


def test_an_output_a_person_replaced_by_a_link_is_written_anew(shoot: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    run(shoot, out)
    good = digests(out)
    (out / "f0002.tif").rename(tmp_path / "moved")
    (out / "f0002.tif").symlink_to(tmp_path / "moved")
    run(shoot, out)
    assert not (out / "f0002.tif").is_symlink()
    assert digests(out) == good


@pytest.mark.parametrize("left", [b"", b'{"kind":"ru', b'{"kind":"run","schema":"gra', b"\0" * 700])
def test_a_log_that_was_hardly_begun_is_begun_again(left: bytes, shoot: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    out.mkdir()
    (out / LOG_NAME).write_bytes(left)
    assert len(run(shoot, out)) == 9
    assert len(read_log(out / LOG_NAME).lines) == 9


def test_what_is_no_log_is_not_written_over(shoot: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    out.mkdir()
    for content in (b"my diary\n", b'{"kind":"frame","file":"x","status":"failed"}\n'):
        (out / LOG_NAME).write_bytes(content)
        with pytest.raises((DamagedFile, PresetError)):
            run(shoot, out)
        assert (out / LOG_NAME).read_bytes() == content


def test_zeros_after_a_power_cut_are_a_torn_end(shoot: Path, tmp_path: Path) -> None:
    # ext4, XFS and others may show a longer file whose last part reads as zeros.  The lines that announce outputs
    # are on the disk before the first output is.
    out = tmp_path / "out"
    run(shoot, out)
    whole = comparable(out)
    lines = (out / LOG_NAME).read_bytes().splitlines(keepends=True)
    (out / LOG_NAME).write_bytes(b"".join(lines[:22]) + lines[22][:100] + bytes(3000))
    run(shoot, out)
    assert comparable(out) == whole


def test_two_runs_do_not_share_a_log(shoot: Path, tmp_path: Path) -> None:
    log = tmp_path / "log.jsonl"
    measuring = grader.measure_files([shoot], options=Options(log=log))
    with Batch([shoot], None, options=Options(log=log)):
        with pytest.raises(PresetError, match="another run is writing this log"):
            list(grader.measure_files([shoot], options=Options(log=log, resume=True)))
        with pytest.raises(PresetError):
            next(measuring)


def failed_line(file: Path, tries: int) -> dict:
    state = file.stat()
    return {
        "kind": "frame",
        "file": str(file),
        "status": "failed",
        "error": {"code": "worker", "message": "died", "hint": None},
        "tries": tries,
        "seen": [state.st_size, state.st_mtime_ns],
    }


@pytest.mark.parametrize("tries", [1, 2])
def test_a_file_that_costs_workers_is_given_up_after_two_tries_until_it_is_replaced(
    tries: int, shoot: Path, tmp_path: Path
) -> None:
    out, file = tmp_path / "out", shoot / "f0003.tif"
    run(shoot, out)
    log = read_log(out / LOG_NAME)
    log.add(failed_line(file, tries))
    earlier = Earlier(log, log.run)
    assert earlier.tries(str(file)) == tries
    assert (earlier.given_up(str(file)) is not None) == (tries == 2)
    assert earlier.tried(str(file), WorkerFailed())["tries"] == 2
    assert earlier.tried(str(file), DamagedFile()) == {}
    os.utime(file, ns=(1, 1))
    assert earlier.tries(str(file)) == 0
    assert Earlier(None, log.run).tries(str(file)) == 0
    assert Earlier(log, log.run | {"version": "99"}).tries(str(file)) == 0


def test_a_given_up_frame_still_counts_in_the_plan(shoot: Path, tmp_path: Path) -> None:
    # Its light was measured; leaving it out would move its neighbours' light.
    out, file = tmp_path / "out", shoot / "f0003.tif"
    run(shoot, out)
    good = digests(out)
    with (out / LOG_NAME).open("ab") as log:
        log.write(encode_line(failed_line(file, 2)))
    lines = {Path(line["file"]).name: line for line in run(shoot, out)}
    assert lines["f0003.tif"]["status"] == "failed"
    assert lines["f0003.tif"]["tries"] == 2
    assert digests(out) == good


def test_lines_of_an_old_log_are_looked_at_before_they_are_used(shoot: Path, tmp_path: Path) -> None:
    run(shoot, tmp_path / "out")
    log = read_log(tmp_path / "out" / LOG_NAME)
    file, by_status = next(iter(log.lines.items()))
    earlier, target = Earlier(log, log.run), Path(file).name
    assert earlier.cast(file, Recipe()) is not None
    assert earlier.finished(file, target) is not None
    assert earlier.finished(file, "other.tif") is None
    by_status["measured"]["cast"]["cct_k"] = "warm"
    assert earlier.cast(file, Recipe()) is None
    by_status["graded"]["correction"]["matrix"] = [[1, 2], [3, 4]]
    assert earlier.finished(file, target) is None
    by_status["graded"]["correction"] = None
    assert earlier.finished(file, target) is None


def test_a_run_goes_on_under_another_path_to_the_same_files(
    shoot: Path, tmp_path: Path, counted: Counted, monkeypatch: pytest.MonkeyPatch
) -> None:
    out, whole = tmp_path / "out", tmp_path / "whole"
    monkeypatch.chdir(tmp_path)
    stop = Stop()
    for number, _ in enumerate(grader.neutralise(["shoot"], out, options=Options(), stop=stop)):
        if number == 3:
            stop.ask()
    counted.measured.clear()
    counted.graded.clear()
    run(shoot, out)
    assert (counted.measured, len(counted.graded)) == ([], 5)
    run(shoot, whole)
    assert_same_end(out, whole)


def test_a_folder_that_was_not_there_is_forgotten_once_it_is(shoot: Path, tmp_path: Path) -> None:
    out, whole = tmp_path / "out", tmp_path / "whole"
    stop = Stop()
    for number, _ in enumerate(grader.neutralise([shoot], out, options=Options(), stop=stop)):
        if number == 3:
            stop.ask()
    shoot.rename(tmp_path / "unplugged")
    statuses = [line["status"] for line in run(shoot, out)]
    assert sorted(statuses) == ["failed", *["skipped"] * 5]
    (tmp_path / "unplugged").rename(shoot)
    assert [line["status"] for line in run(shoot, out)] == ["graded"] * 9
    run(shoot, whole)
    assert_same_end(out, whole)
