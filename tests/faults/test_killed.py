"""Runs that are killed, at any moment, go on to the end that an uninterrupted run has, byte for byte.

The outside check is the run that nobody killed: same files, same log but for times.
"""

import json
import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import psutil
import pytest
from faults.faultkit import assert_same_end, digests, write_shoot

import grader
from grader.options import LOG_NAME

pytestmark = pytest.mark.skipif(not hasattr(os, "fork"), reason="forks and signals are POSIX")
SCRIPT = Path(__file__).with_name("crashing.py")


def crash(mode: str, folder: Path, preset: str) -> dict:
    done = subprocess.run(
        [sys.executable, SCRIPT, mode, folder, preset], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout)


@pytest.mark.parametrize("preset", ["shoot", "each"])
def test_killed_at_every_call_that_changes_a_file(preset: str, tmp_path: Path) -> None:
    told = crash("steps", tmp_path, preset)
    assert told["kills"] > 30
    assert told["different"] == []


@pytest.mark.parametrize("preset", ["shoot", "each"])
def test_killed_at_20_random_moments_of_40_frames(preset: str, tmp_path: Path) -> None:
    told = crash("random", tmp_path, preset)
    assert (told["kills"], told["frames"]) == (20, 40)
    assert told["different"] == []


def test_killed_with_workers_that_leave_with_it(tmp_path: Path) -> None:
    shoot, out, whole = write_shoot(tmp_path / "shoot", 24), tmp_path / "out", tmp_path / "whole"
    command = [
        sys.executable,
        "-m",
        "grader",
        "neutralise",
        str(shoot),
        "--workers",
        "2",
        "--resume",
        "--quiet",
    ]
    chance = random.Random(7)
    for lines in sorted(chance.sample(range(2, 60), 2)):
        process = subprocess.Popen([*command, "--out", str(out)])
        wait_for_lines(out / LOG_NAME, lines, process)
        family = psutil.Process(process.pid).children(recursive=True)
        process.send_signal(signal.SIGKILL)
        process.wait()
        _, alive = psutil.wait_procs(family, timeout=30)
        assert alive == []
    subprocess.run([*command, "--out", str(out)], check=True)
    list(grader.neutralise([shoot], whole))
    assert len(digests(out)) == 24
    assert_same_end(out, whole)


def wait_for_lines(log: Path, lines: int, process: subprocess.Popen) -> None:
    while process.poll() is None and (not log.exists() or log.read_bytes().count(b"\n") < lines):
        time.sleep(0.005)


def test_a_second_run_is_kept_out_while_the_first_lives_and_let_in_when_it_is_killed(tmp_path: Path) -> None:
    shoot, out = write_shoot(tmp_path / "shoot", 6), tmp_path / "out"
    hold = (
        "import sys, time; from grader.batch import Batch\n"
        "with Batch([sys.argv[1]], sys.argv[2]): print('holding', flush=True); time.sleep(600)"
    )
    command = [sys.executable, "-m", "grader", "neutralise", str(shoot), "--out", str(out), "--workers", "0"]
    first = subprocess.Popen([sys.executable, "-c", hold, shoot, out], stdout=subprocess.PIPE)
    assert first.stdout is not None
    assert first.stdout.readline() == b"holding\n"
    second = subprocess.run([*command, "--resume"], capture_output=True, text=True, check=False)
    assert second.returncode == 2
    assert "another run is writing into this folder" in second.stderr
    first.send_signal(signal.SIGKILL)
    first.communicate()
    assert (out / ".grader.lock").exists(), "the dead run's lock file is still there"
    assert subprocess.run([*command, "--resume"], capture_output=True, check=False).returncode == 0
    assert len(digests(out)) == 6
