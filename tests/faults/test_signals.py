"""Ctrl-C and ``kill``: once finishes what is in flight, twice stops now; either way the run goes on later."""

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from faults.faultkit import assert_same_end, unfinished, write_shoot

import grader
from grader.batch import Options
from grader.log import read_log
from grader.options import LOG_NAME

pytestmark = pytest.mark.skipif(os.name != "posix", reason="signals are POSIX")
SLOW = """
import sys
from faults import faultkit
from grader import jobs
from grader.cli import main
if __name__ == "__main__":
    jobs.measure_file = faultkit.measure_file
    main(sys.argv[1:])
"""
"""The command line with a decoder that hangs on a file of that name."""


def command(shoot: Path, out: Path, workers: int) -> list[str]:
    return ["neutralise", str(shoot), "--out", str(out), "--workers", str(workers), "--resume"]


def start(arguments: list[str]) -> subprocess.Popen:
    environment = os.environ | {"PYTHONPATH": os.pathsep.join([str(Path(__file__).parents[1]), *sys.path])}
    return subprocess.Popen(
        [sys.executable, "-c", SLOW, *arguments],
        env=environment,
        stderr=subprocess.PIPE,
        start_new_session=True,
    )


def wait_for(log: Path, words: bytes, count: int, process: subprocess.Popen) -> None:
    while process.poll() is None and (not log.exists() or log.read_bytes().count(words) < count):
        time.sleep(0.01)


@pytest.mark.parametrize(("workers", "number"), [(2, signal.SIGINT), (0, signal.SIGTERM)])
def test_twice_stops_now_and_leaves_a_log_to_go_on_from(
    workers: int, number: signal.Signals, tmp_path: Path
) -> None:
    shoot, out, whole = write_shoot(tmp_path / "shoot", 5), tmp_path / "out", tmp_path / "whole"
    (shoot / "f0004.tif").rename(shoot / "hangs.tif")
    process = start(command(shoot, out, workers))
    wait_for(out / LOG_NAME, b'"status":"measured"', 4, process)
    process.send_signal(number)
    assert process.stderr is not None
    assert b"again" in process.stderr.readline() + process.stderr.readline()
    time.sleep(0.2)
    assert process.poll() is None, "the frame in flight is waited for"
    process.send_signal(number)
    _, said = process.communicate(timeout=60)
    assert process.returncode == 130, said
    log = read_log(out / LOG_NAME)
    assert not log.torn
    assert {line["status"] for line in log.latest()} == {"measured"}
    assert unfinished(out) == []
    list(grader.neutralise([shoot], out, options=Options(resume=True)))
    list(grader.neutralise([shoot], whole))
    assert_same_end(out, whole)


def test_a_signal_to_the_whole_group_costs_no_frame(tmp_path: Path) -> None:
    # A terminal's Ctrl-C, and a script's kill, reach the workers too: they are to finish what they do.
    shoot, out = write_shoot(tmp_path / "shoot", 40), tmp_path / "out"
    process = start(command(shoot, out, 2))
    wait_for(out / LOG_NAME, b'"status":"graded"', 2, process)
    os.killpg(process.pid, signal.SIGINT)
    _, said = process.communicate(timeout=120)
    assert process.returncode == 130, said
    log = read_log(out / LOG_NAME)
    statuses = [line["status"] for line in log.latest()]
    assert "failed" not in statuses
    assert 2 <= statuses.count("graded") < 40
    assert log.summary is not None
    assert log.summary["interrupted"]
    assert json.dumps(log.summary)
