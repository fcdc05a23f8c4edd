"""Input made by a stranger: files, folders, logs, presets.  Nothing is read or written outside what the user named."""

import ast
import json
import os
import shutil
from pathlib import Path

import pytest
from faults.faultkit import comparable, digests, write_shoot

import grader
from grader import cli
from grader.batch import Options
from grader.errors import DamagedFile, GraderError, PresetError, WriteFailed
from grader.log import encode_line, read_log
from grader.options import LOG_NAME

PACKAGE = Path(grader.__file__).parent
posix = pytest.mark.skipif(os.name != "posix", reason="links and pipes are POSIX")


@pytest.fixture
def shoot(tmp_path: Path) -> Path:
    return write_shoot(tmp_path / "shoot", 4)


def run(shoot: Path, out: Path, **how: object) -> list[dict]:
    return list(grader.neutralise([shoot], out, options=Options(resume=True, **how)))


# ---------------------------------------------------------------- links and special files


@posix
@pytest.mark.parametrize("dangling", [False, True])
def test_a_linked_folder_in_the_target_leads_nothing_outside(
    dangling: bool, shoot: Path, tmp_path: Path
) -> None:
    (shoot / "sub").mkdir()
    shutil.copy(shoot / "f0000.tif", shoot / "sub" / "inside.tif")
    out, outside = tmp_path / "out", tmp_path / "outside"
    out.mkdir()
    if not dangling:
        outside.mkdir()
    (out / "sub").symlink_to(outside)
    lines = {Path(line["file"]).name: line for line in run(shoot, out, recurse=True)}
    assert lines["inside.tif"]["status"] == "failed"
    assert "leads out of it" in lines["inside.tif"]["error"]["message"]
    assert sum(line["status"] == "graded" for line in lines.values()) == 4
    assert not outside.exists() if dangling else list(outside.iterdir()) == []


@posix
def test_a_link_in_the_place_of_an_output_is_replaced_not_followed(shoot: Path, tmp_path: Path) -> None:
    out, precious = tmp_path / "out", tmp_path / "precious"
    out.mkdir()
    precious.write_text("mine")
    (out / "f0001.tif").symlink_to(precious)
    with pytest.raises(PresetError, match="there already"):
        run(shoot, out)
    run(shoot, out, overwrite=True)
    assert precious.read_text() == "mine"
    assert not (out / "f0001.tif").is_symlink()


@posix
@pytest.mark.parametrize("name", [LOG_NAME, ".grader.lock"])
def test_a_link_in_the_place_of_the_log_or_the_lock_is_refused(
    name: str, shoot: Path, tmp_path: Path
) -> None:
    out, precious = tmp_path / "out", tmp_path / "precious"
    out.mkdir()
    precious.write_text("")
    (out / name).symlink_to(precious)
    with pytest.raises(WriteFailed):
        run(shoot, out, overwrite=True)
    assert precious.read_text() == ""


@posix
def test_unfinished_files_are_removed_only_if_they_are_ours(shoot: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    out.mkdir()
    ours, theirs = (
        out / ".grader-0123456789ab.part",
        [
            out / ".grader-0123456789ab.part.tif",
            out / ".grader-xyz.part",
            out / "grader-0123456789ab.part",
        ],
    )
    target = tmp_path / "precious"
    for path in [ours, *theirs, target]:
        path.write_text("x")
    (out / ".grader-ba9876543210.part").symlink_to(target)
    run(shoot, out)
    assert not ours.exists()
    assert all(path.exists() for path in [*theirs, target])


@posix
def test_a_pipe_where_a_picture_or_an_output_should_be_blocks_nothing(shoot: Path, tmp_path: Path) -> None:
    os.mkfifo(shoot / "pipe.tif")
    out = tmp_path / "out"
    lines = {Path(line["file"]).name: line for line in run(shoot, out)}
    assert lines["pipe.tif"]["status"] == "failed"
    for name in ("f0001.tif", "f0002.tif"):
        (out / name).unlink()
    os.mkfifo(out / "f0001.tif")
    (shoot / "f0003.tif").unlink()
    os.mkfifo(shoot / "f0003.tif")
    problems = {Path(found.output).name: found.problem for found in grader.check(out)}
    assert problems["f0001.tif"]
    run(shoot, out)


# ---------------------------------------------------------------- logs


def graded_log(shoot: Path, out: Path) -> list[dict]:
    run(shoot, out)
    return [json.loads(line) for line in (out / LOG_NAME).read_text(encoding="utf-8").splitlines()]


def plant(out: Path, lines: list[dict]) -> None:
    (out / LOG_NAME).write_bytes(b"".join(map(encode_line, lines)))


@pytest.mark.parametrize("place", ["../precious", "{tmp}/precious", "sub/../../precious", "."])
def test_a_log_cannot_name_a_place_outside(place: str, shoot: Path, tmp_path: Path) -> None:
    out, precious = tmp_path / "out", tmp_path / "precious"
    lines = graded_log(shoot, out)
    precious.write_text("mine")
    for line in lines:
        if line["kind"] == "frame" and "output" in line:
            line["output"]["file"] = place.format(tmp=tmp_path)
    plant(out, lines)
    findings = list(grader.check(out))
    assert all(found.problem and "outside" in found.problem for found in findings)
    with pytest.raises(PresetError, match="there already"):
        run(shoot, out)  # the log no longer says that the outputs are its own
    run(shoot, out, overwrite=True)
    assert precious.read_text() == "mine"


JUNK = [None, True, -1, 1e400, "x", "\x1b[2J", [], [[]], {}, {"file": 3}, 10**400, [1, 2, 3] * 50]


@pytest.mark.parametrize("status", ["measured", "planned", "graded", "run"])
def test_a_log_of_any_nonsense_is_measured_anew_or_refused_never_believed(
    status: str, shoot: Path, tmp_path: Path
) -> None:
    good = graded_log(shoot, tmp_path / "good")
    for number, junk in enumerate(JUNK):
        lines = json.loads(json.dumps(good))
        for line in lines:
            if status in (line["kind"], line.get("status")):
                keys = [key for key in line if key not in {"kind", "schema", "file", "status", "version"}]
                line[keys[number % len(keys)]] = junk
                line[keys[(3 * number + 1) % len(keys)]] = junk
        out = tmp_path / f"out{number}"
        shutil.copytree(tmp_path / "good", out)
        text = "\n".join(json.dumps(line) for line in lines) + "\n"
        (out / LOG_NAME).write_text(text.replace("Infinity", "1e999"), encoding="utf-8")
        list(grader.check(out))
        try:
            ended = run(shoot, out, overwrite=True)
        except DamagedFile:
            continue
        assert [line["status"] for line in ended] == ["graded"] * 4
        assert digests(out) == digests(tmp_path / "good")
        assert comparable(out)[1:-1] == comparable(tmp_path / "good")[1:-1]


def test_lines_of_no_kind_and_no_status_are_passed_over(shoot: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    run(shoot, out)
    odd: list[dict] = [
        {"kind": "frame", "file": "x"},
        {"kind": "frame", "file": "y", "status": ["graded"]},
        {"kind": "frame", "file": "z", "status": "graded", "flags": [{}], "cast": {"delta_e_2000": "warm"}},
        {"kind": "frame", "file": "a\0b", "status": "planned"},
        {"kind": "frame"},
        {"kind": "target", "file": "x", "output": "y"},
        {"kind": {}},
        {},
    ]
    with (out / LOG_NAME).open("ab") as log:
        log.write(b"".join(map(encode_line, odd)))
    assert sum(line["status"] == "graded" for line in run(shoot, out)) == 4
    list(grader.check(out))


def test_a_log_nested_without_end_is_refused(shoot: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    run(shoot, out)
    with (out / LOG_NAME).open("ab") as log:
        log.write(b"[" * 500_000 + b"\n{}\n")
    with pytest.raises(DamagedFile):
        run(shoot, out)


# ---------------------------------------------------------------- presets


@pytest.mark.parametrize("name", ["../x", "/etc/passwd", "a/b", "..", "a\\b", "C:x", ".hidden", ""])
def test_a_preset_name_cannot_climb(name: str) -> None:
    with pytest.raises(PresetError):
        grader.load_preset(name)


@pytest.mark.parametrize("toward", ["/etc/passwd", "../hero.tif", "hero.tif", "file:///x"])
def test_a_preset_cannot_name_a_file(toward: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    write_shoot(tmp_path, 1).joinpath("f0000.tif").rename(tmp_path / "hero.tif")
    assert cli.run(["sample", "hero.tif", "--hero", "--save", "a.json"]) == 0
    document = json.loads((tmp_path / "a.json").read_text(encoding="utf-8"))
    shipped = json.loads(next((PACKAGE.parent / "presets").glob("*.json")).read_text(encoding="utf-8"))
    for base in (document, shipped):
        planted = {**base, "name": "a", "toward": toward}
        (tmp_path / "a.json").write_text(json.dumps(planted), encoding="utf-8")
        with pytest.raises(PresetError):
            grader.load_preset(tmp_path / "a.json")


# ---------------------------------------------------------------- what the code never does

_NETWORK = {
    "socket",
    "ssl",
    "urllib",
    "http",
    "ftplib",
    "smtplib",
    "requests",
    "httpx",
    "aiohttp",
    "webbrowser",
}
_LOADERS = {
    "pickle",
    "marshal",
    "shelve",
    "dill",
    "cloudpickle",
    "joblib",
    "yaml",
    "subprocess",
    "pty",
    "code",
}


def test_no_network_no_pickle_no_eval_no_shell() -> None:
    # dask.distributed alone talks to other machines, where --cluster asks for it; processes and clusters
    # pickle grader's own small values between grader's own processes.
    wrong = []
    for path in sorted(PACKAGE.rglob("*.py")):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            names = []
            if isinstance(node, ast.Import):
                names = [alias.name for alias in node.names]
            elif isinstance(node, ast.ImportFrom) and node.module:
                names = [node.module]
            wrong += [f"{path.name}: {n}" for n in names if n.split(".")[0] in _NETWORK | _LOADERS]
            if isinstance(node, ast.Call):
                called = node.func.id if isinstance(node.func, ast.Name) else getattr(node.func, "attr", "")
                if called in {"eval", "exec", "system", "popen", "execv", "import_string"} or (
                    called == "compile" and isinstance(node.func, ast.Name)
                ):
                    wrong.append(f"{path.name}: {called}()")
                wrong += [
                    f"{path.name}: allow_pickle"
                    for keyword in node.keywords
                    if keyword.arg == "allow_pickle"
                    and not (isinstance(keyword.value, ast.Constant) and keyword.value.value is False)
                ]
    assert wrong == []


def test_a_report_of_a_foreign_log_asks_nothing_of_the_network(shoot: Path, tmp_path: Path) -> None:
    run(shoot, tmp_path / "out")
    page = tmp_path / "report.html"
    assert cli.run(["report", str(tmp_path / "out" / LOG_NAME), "--out", str(page)]) == 0
    html = page.read_text(encoding="utf-8")
    for tag in ('src="http', "src='http", "@import", '<link rel="stylesheet"', "<iframe"):
        assert tag not in html


def test_errors_of_foreign_logs_are_ours(tmp_path: Path) -> None:
    (tmp_path / LOG_NAME).write_bytes(
        b'{"kind":"run","schema":"grader-log/1"}\n{"kind":"frame","file":"a","status":"graded"}\n'
    )
    try:
        findings = list(grader.check(tmp_path))
    except GraderError:
        return
    assert all(found.problem for found in findings)
    assert read_log(tmp_path / LOG_NAME).lines
