"""Decoders that die, hang, are stopped or eat memory cost their own frame; it is tried once more, then left."""

import operator
import os
import shutil
import signal
import sys
import threading
import time
from pathlib import Path

import psutil
import pytest
from faults import faultkit
from faults.faultkit import digests, unfinished, write_shoot

import grader
from grader import jobs, processes, workers
from grader.batch import Options
from grader.errors import WorkerFailed
from grader.workers import Pool, Stop

pytestmark = pytest.mark.skipif(os.name != "posix", reason="signals and limits are POSIX")
FAULTS = {
    "crashes": "SIGSEGV",
    "exits": "exit code 7",
    "stops": "--frame-timeout",
    "eats": "memory",
}


def run(shoot: Path, out: Path, timeout_s: float = 60.0) -> dict[str, dict]:
    pool = Pool(processes=2, timeout_s=timeout_s, memory_bytes=1 << 30)
    lines = grader.neutralise([shoot], out, options=Options(pool=pool, resume=True))
    return {Path(line["file"]).stem: line for line in lines}


@pytest.mark.skipif(sys.platform != "linux", reason="RLIMIT_DATA bounds allocations on Linux alone")
def test_a_bad_decoder_costs_its_frame_is_tried_once_more_by_itself_then_left(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    shoot, out = write_shoot(tmp_path / "shoot", 6), tmp_path / "out"
    for name in FAULTS:
        shutil.copy(shoot / "f0000.tif", shoot / f"{name}.tif")
    alone = []
    monkeypatch.setattr(workers, "run", spied(workers.run, alone))
    with monkeypatch.context() as patch:
        patch.setattr(jobs, "measure_file", faultkit.measure_file)
        for tries, timeout_s in ((1, 10.0), (2, 5.0)):  # the good frames are measured in the first
            lines = run(shoot, out, timeout_s)
            assert sum(line["status"] == "graded" for line in lines.values()) == 6
            for name, words in FAULTS.items():
                line = lines[name]
                assert (line["status"], line["error"]["code"], line["tries"]) == ("failed", "worker", tries)
                assert words in line["error"]["message"]
            assert len(digests(out)) == 6
            assert unfinished(out) == []
    assert sorted(alone) == sorted(FAULTS), "on resume each was tried once, by itself"
    lines = run(shoot, out)
    assert {name: lines[name]["status"] for name in FAULTS} == dict.fromkeys(FAULTS, "failed")
    assert all("left after two tries" in lines[name]["error"]["hint"] for name in FAULTS)
    os.utime(shoot / "exits.tif", ns=(1, 1))  # the file was replaced: it deserves another try
    assert run(shoot, out)["exits"]["status"] == "graded"


def spied(function, seen: list[str]):
    def spy(call, work, *rest):
        work = list(work)
        seen.extend(Path(job.path).stem for job in work)
        return function(call, work, *rest)

    return spy


def test_a_job_that_hangs_or_is_stopped_is_ended(tmp_path: Path) -> None:
    pool = Pool(processes=2, timeout_s=1.0)
    outcomes = {o.job: o.error for o in workers.run(faultkit.misbehave, ["good", "hangs", "stops"], pool)}
    assert outcomes["good"] is None
    assert all("--frame-timeout" in outcomes[name].message for name in ("hangs", "stops"))


def test_killing_workers_at_random_loses_only_what_they_were_doing() -> None:
    # Idle, starting and busy workers are killed alike while 60 jobs run; every job comes back once.
    killing = threading.Event()
    killer = threading.Thread(target=kill_some, args=(killing,), daemon=True)
    killer.start()
    outcomes = list(workers.run(faultkit.nap, range(60), Pool(processes=2, timeout_s=60)))
    killing.set()
    killer.join()
    assert sorted(outcome.job for outcome in outcomes) == list(range(60))
    failed = [outcome.error for outcome in outcomes if outcome.error]
    assert all(isinstance(error, WorkerFailed) for error in failed)
    assert len(failed) < 60
    assert all(outcome.result == outcome.job for outcome in outcomes if not outcome.error)


def kill_some(enough: threading.Event) -> None:
    while not enough.wait(0.07):
        for process in psutil.Process().children(recursive=True):
            try:
                if process.ppid() != os.getpid() and process.status() != psutil.STATUS_ZOMBIE:
                    process.kill()
                    break
            except psutil.Error:
                continue


def test_an_idle_worker_that_is_stopped_is_replaced(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(processes, "_BEGIN_S", 1.0)
    crew = processes.Crew(1, timeout_s=60)
    try:
        (first,) = crew.run(operator.neg, [1], Stop())
        (worker,) = crew._workers
        os.kill(worker.process.pid, signal.SIGSTOP)
        (second,) = crew.run(operator.neg, [2], Stop())
    finally:
        crew.close()
    assert (first.result, second.result) == (-1, -2)


def test_a_job_no_worker_can_begin_fails_and_does_not_go_round_for_ever(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setattr(processes, "_serve", os._exit)
    (outcome,) = workers.run(operator.neg, [1], Pool(processes=1))
    assert isinstance(outcome.error, WorkerFailed)


def test_dropping_the_iteration_ends_what_is_in_flight() -> None:
    crew = processes.Crew(2)
    try:
        answers = crew.run(time.sleep, [0, 3600, 3600], Stop())
        next(answers)
        answers.close()
        assert [outcome.job for outcome in crew.run(operator.neg, [5], Stop())] == [5]
    finally:
        crew.close()
    assert not psutil_children_named_worker()


def psutil_children_named_worker() -> list[int]:
    return [p.pid for p in psutil.Process().children(recursive=True) if p.ppid() != os.getpid()]
