"""The command line as a person and a script meet it: words, streams, exit codes."""

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import click
import pytest
from batchkit import WARM, write_jpeg, write_tiff

from grader import cli

COMMANDS = ["neutralise", "measure", "apply", "sample", "presets", "export", "report", "check"]


@pytest.fixture
def shoot(tmp_path: Path) -> Path:
    folder = tmp_path / "shoot"
    for seed in range(3):
        write_tiff(folder / f"t{seed}.tif", seed=seed)
    return folder


def call(*arguments: object) -> int:
    return cli.run([str(argument) for argument in arguments])


def test_every_command_has_help_with_examples(capsys: pytest.CaptureFixture[str]) -> None:
    for command in COMMANDS:
        assert call(command, "--help") == 0
        text = capsys.readouterr().out
        assert f"  grader {command}" in text, f"{command} shows no example"
        assert "Options:" in text


def test_every_option_is_described(capsys: pytest.CaptureFixture[str]) -> None:
    for name in COMMANDS:
        command = cli.grader.get_command(None, name)
        assert command.help
        for parameter in command.params:
            assert not isinstance(parameter, click.Option) or parameter.help, f"{name} {parameter.name}"


def test_every_command_and_option_is_documented() -> None:
    text = (Path(__file__).parents[2] / "docs" / "COMMANDS.md").read_text(encoding="utf-8")
    for name in COMMANDS:
        assert f"## grader {name}" in text
        for parameter in cli.grader.get_command(None, name).params:
            for option in parameter.opts:
                assert option in text or not option.startswith("-"), f"{name} {option}"


def test_a_batch_ends_with_words_on_stderr_and_nothing_on_stdout(
    shoot: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert call("neutralise", shoot, "--out", tmp_path / "out", "--workers", 0) == 0
    said = capsys.readouterr()
    assert said.out == ""
    assert "graded 3 of 3 frames" in said.err
    assert "mean cast before" in said.err
    assert "mean cast after" in said.err


def test_json_goes_to_stdout_line_by_line(
    shoot: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert call("neutralise", shoot, "--out", tmp_path / "out", "--workers", 0, "--json", "--quiet") == 0
    said = capsys.readouterr()
    assert [json.loads(line)["status"] for line in said.out.splitlines()] == ["graded"] * 3
    assert said.err == ""


def test_quiet_still_tells_failures(shoot: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (shoot / "bad.jpg").write_bytes(b"\xff\xd8\xff nothing")
    assert call("neutralise", shoot, "--out", tmp_path / "out", "--workers", 0, "--quiet") == 3
    assert "bad.jpg" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("arguments", "code", "words"),
    [
        (["neutralise"], 2, "PATH"),
        (["neutralise", "{shoot}"], 2, "--out"),
        (["neutralise", "{shoot}", "--out", "{shoot}"], 2, "originals"),
        (["neutralise", "{shoot}", "--out", "{tmp}/o", "--preset", "no-such"], 2, "no-such"),
        (["neutralise", "{shoot}", "--out", "{tmp}/o", "--keep-yellow-blue", "7"], 2, "keep_yellow_blue"),
        (["neutralise", "{shoot}", "--out", "{tmp}/o", "--toward", "elsewhere"], 2, "toward"),
        (["neutralise", "{shoot}", "--out", "{tmp}/o", "--space", "mauve"], 2, "mauve"),
        (["neutralise", "{shoot}", "--out", "{tmp}/o", "--memory", "lots"], 2, "--memory"),
        (["neutralise", "{shoot}", "--out", "{tmp}/o", "--clock", "B"], 2, "--clock"),
        (["neutralise", "{tmp}/nothing-here", "--out", "{tmp}/o"], 5, "nothing-here"),
        (["neutralise", "{shoot}", "--out", "/proc/none/o"], 6, "/proc/none"),
        (["measure", "{tmp}/nothing-here"], 5, "nothing-here"),
        (["apply", "no-such", "{shoot}", "--out", "{tmp}/o"], 2, "no-such"),
        (["apply", "../climb", "{shoot}", "--out", "{tmp}/o"], 2, "climb"),
        (["report", "{tmp}/none.jsonl", "--out", "{tmp}/r.html"], 5, "none.jsonl"),
        (["check", "{tmp}"], 5, "grader-log.jsonl"),
        (["frobnicate"], 2, "frobnicate"),
    ],
)
def test_exit_codes_and_one_plain_line(
    shoot: Path,
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
    arguments: list[str],
    code: int,
    words: str,
) -> None:
    given = [text.format(shoot=shoot, tmp=tmp_path) for text in arguments]
    assert call(*given) == code
    said = capsys.readouterr().err
    assert words in said
    assert "Traceback" not in said


def test_all_frames_failed_is_another_code_than_some(tmp_path: Path) -> None:
    (tmp_path / "in").mkdir()
    (tmp_path / "in" / "a.tif").write_bytes(b"")
    assert call("neutralise", tmp_path / "in", "--out", tmp_path / "out", "--workers", 0) == 5


def test_names_from_stdin(shoot: Path, tmp_path: Path) -> None:
    names = b"\0".join(os.fsencode(path) for path in sorted(shoot.iterdir()))
    command = [
        sys.executable,
        "-m",
        "grader",
        "neutralise",
        "-",
        "-0",
        "--out",
        str(tmp_path / "o"),
        "--workers",
        "1",
    ]
    done = subprocess.run(command, input=names, capture_output=True, check=False)
    assert done.returncode == 0, done.stderr
    assert len(list((tmp_path / "o").glob("*.tif"))) == 3


def test_drift_beyond_tolerance_is_exit_4(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    for minute in range(6):
        write_jpeg(tmp_path / "in" / f"{minute}.jpg", seed=3, taken_at=f"2031:05:04 18:{minute:02}:00")
    same = ("measure", tmp_path / "in", "--workers", 0, "--quiet", "--against", tmp_path / "in" / "0.jpg")
    assert call(*same, "--tolerance", 1) == 0
    write_jpeg(tmp_path / "in" / "6.jpg", (0.36, 0.37), seed=3, taken_at="2031:05:04 18:06:00")
    assert call(*same, "--tolerance", 1) == 4
    assert call(*same, "--tolerance", 60) == 0
    assert "Traceback" not in capsys.readouterr().err


def test_sample_then_apply(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    frame = write_tiff(tmp_path / "in" / "a.tif", WARM)
    saved = tmp_path / "hall.json"
    assert call("sample", frame, "--hero", "--save", saved) == 0
    assert json.loads(saved.read_text())["schema"] == "grader-preset/1"
    assert call("sample", frame, "--hero", "--save", saved) == 6
    assert call("apply", saved, frame, "--out", tmp_path / "o", "--workers", 0) == 0
    assert call("export", saved, "--out", tmp_path / "luts") == 0
    assert list((tmp_path / "luts").glob("*.clf"))
    capsys.readouterr()


def test_presets_are_listed(capsys: pytest.CaptureFixture[str]) -> None:
    assert call("presets") == 0
    assert "evening-warmth" in capsys.readouterr().out
    assert call("presets", "--json") == 0
    assert all("digest" in json.loads(line) for line in capsys.readouterr().out.splitlines())


def test_a_fixed_preset_is_for_apply(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    frame = write_tiff(tmp_path / "in" / "a.tif", WARM)
    call("sample", frame, "--hero", "--save", tmp_path / "p.json")
    assert call("neutralise", frame, "--out", tmp_path / "o", "--preset", tmp_path / "p.json") == 2
    assert "grader apply" in capsys.readouterr().err


@pytest.mark.skipif(sys.platform == "win32", reason="POSIX signals")
def test_ctrl_c_finishes_what_is_in_flight_and_can_be_resumed(tmp_path: Path) -> None:
    for seed in range(30):
        write_tiff(tmp_path / "in" / f"{seed:02}.tif", seed=seed)
    out = tmp_path / "out"
    command = [
        sys.executable,
        "-m",
        "grader",
        "neutralise",
        str(tmp_path / "in"),
        "--out",
        str(out),
        "--workers",
        "1",
    ]
    process = subprocess.Popen(command, stderr=subprocess.PIPE)
    deadline = time.monotonic() + 120
    while not list(out.glob("*.tif")) and time.monotonic() < deadline:
        time.sleep(0.01)
    process.send_signal(signal.SIGINT)
    _, said = process.communicate(timeout=120)
    assert process.returncode == 130, said
    assert b"--resume" in said
    assert 0 < len(list(out.glob("*.tif"))) < 30
    assert not [path for path in out.iterdir() if path.suffix not in {".tif", ".jsonl", ".lock"}]
    done = subprocess.run([*command, "--resume"], capture_output=True, check=False)
    assert done.returncode == 0, done.stderr
    assert len(list(out.glob("*.tif"))) == 30


def test_completion_for_three_shells() -> None:
    for shell in ("bash", "zsh", "fish"):
        done = subprocess.run(
            [sys.executable, "-m", "grader"],
            env={**os.environ, "_GRADER_COMPLETE": f"{shell}_source"},
            capture_output=True,
            text=True,
            check=False,
        )
        assert "_GRADER_COMPLETE" in done.stdout, shell


def test_the_documented_help_is_current() -> None:
    import importlib.util

    script = Path(__file__).parents[2] / "docs" / "make_commands.py"
    spec = importlib.util.spec_from_file_location("make_commands", script)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    assert module.TARGET.read_text(encoding="utf-8") == module.document(), "run: python docs/make_commands.py"
