"""One call shape, three places; a job that raises, dies or hangs costs itself only."""

import operator
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from grader import errors, outcome, workers

LOCAL = workers.Pool(processes=2)


def results(function, jobs, pool):
    return {outcome.job: outcome for outcome in workers.run(function, jobs, pool)}


@pytest.mark.parametrize(
    "pool", [workers.Pool(), LOCAL, workers.Pool(cluster="local:2")], ids=["inline", "local", "dask"]
)
def test_every_job_comes_back_once(pool: workers.Pool) -> None:
    outcomes = results(operator.neg, range(20), pool)
    assert {job: o.result for job, o in outcomes.items()} == {job: -job for job in range(20)}
    assert all(o.error is None for o in outcomes.values())


@pytest.mark.parametrize("pool", [workers.Pool(), LOCAL], ids=["inline", "local"])
def test_a_job_that_raises_becomes_an_error(pool: workers.Pool) -> None:
    outcomes = results(int, ["1", "x", "3"], pool)
    assert outcomes["3"].result == 3
    assert isinstance(outcomes["x"].error, errors.GraderError)
    assert "ValueError" in outcomes["x"].error.message


def test_a_worker_that_dies_costs_its_job_only() -> None:
    outcomes = results(_exit_on_three(), [1, 3, 5], LOCAL)
    assert isinstance(outcomes[3].error, errors.WorkerFailed)
    assert "died" in outcomes[3].error.message


def _exit_on_three():
    return os._exit  # every job ends its process; each is told apart


def test_a_killed_worker_is_named_by_its_signal() -> None:
    (outcome,) = workers.run(signal.raise_signal, [signal.SIGKILL], workers.Pool(processes=1))
    assert isinstance(outcome.error, errors.WorkerFailed)
    assert "SIGKILL" in outcome.error.message


def test_a_job_that_hangs_is_ended() -> None:
    outcomes = results(time.sleep, [0, 60], workers.Pool(processes=2, timeout_s=1.5))
    assert outcomes[0].error is None
    assert isinstance(outcomes[60].error, errors.WorkerFailed)
    assert "--frame-timeout" in outcomes[60].error.message


@pytest.mark.parametrize("pool", [workers.Pool(), LOCAL], ids=["inline", "local"])
def test_after_a_stop_no_further_job_begins(pool: workers.Pool) -> None:
    stop = workers.Stop()
    seen = []
    for done in workers.run(operator.neg, range(1000), pool, stop):
        seen.append(done.job)
        stop.ask()
    assert len(seen) <= 4


def test_our_own_errors_come_back_as_they_are() -> None:
    error = errors.DamagedFile("cut short", path="a.tif")
    assert outcome.as_grader_error(error) is error
    assert isinstance(outcome.as_grader_error(MemoryError()), errors.WorkerFailed)


def test_a_cluster_that_does_not_answer_is_a_plain_error(monkeypatch: pytest.MonkeyPatch) -> None:
    from grader import cluster

    monkeypatch.setattr(cluster, "_CONNECT_S", 0.5)
    with pytest.raises(errors.PresetError, match="does not answer"):
        list(workers.run(operator.neg, [1], workers.Pool(cluster="tcp://127.0.0.1:9")))
    with pytest.raises(errors.PresetError, match="local:N"):
        list(workers.run(operator.neg, [1], workers.Pool(cluster="local:none")))


def test_what_decoders_print_reaches_neither_stdout_nor_the_terminal(tmp_path) -> None:
    # LibRaw prints a damaged file's name, whatever is in it; libpng and others print too.
    code = (
        "import os, sys, warnings\n"
        "from grader import workers\n"
        "from faults.faultkit import talk\n"
        "if __name__ == '__main__':\n"
        "    print([o.result for o in workers.run(talk, [1], workers.Pool(processes=1))])"
    )
    path = os.pathsep.join([str(Path(__file__).parent), *sys.path])
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, env=os.environ | {"PYTHONPATH": path}, check=True
    )
    assert done.stdout == b"[1]\n"
    assert done.stderr == b"a warning of ours\n"
