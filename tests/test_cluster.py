"""A cluster gives the same bytes, loses no frame with a worker, and refuses workers that would lose some."""

import json
import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import psutil
import pytest
from faults import faultkit
from faults.faultkit import assert_same_end, digests, write_shoot

import grader
from grader import cluster, workers
from grader.batch import Options
from grader.errors import PresetError, WorkerFailed, WriteFailed
from grader.workers import Pool

pytest.importorskip("distributed")


@pytest.fixture(scope="module")
def shoot(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_shoot(tmp_path_factory.mktemp("cluster") / "shoot", 16)


@pytest.fixture(scope="module")
def whole(shoot: Path) -> Path:
    list(grader.neutralise([shoot], shoot.parent / "whole"))
    return shoot.parent / "whole"


def worker_processes() -> list[psutil.Process]:
    return [
        child
        for child in psutil.Process().children(recursive=True)
        if any("spawn_main" in word for word in child.cmdline())
    ]


@pytest.mark.skipif(os.name != "posix", reason="SIGKILL")
def test_a_worker_killed_in_the_middle_costs_no_frame(
    shoot: Path, whole: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(shoot.parent)  # workers are given relative paths, and may have been started elsewhere
    killed = 0
    options = Options(pool=Pool(cluster="local:2"))
    for line in grader.neutralise(["shoot"], tmp_path / "out", options=options):
        assert line["status"] == "graded", line
        if not killed:
            victim = worker_processes()[0]
            victim.kill()
            killed = victim.pid
    assert killed
    assert digests(tmp_path / "out") == digests(whole)


def test_a_frame_that_hangs_there_is_given_up() -> None:
    jobs = ["good", "hangs", *map(str, range(8))]
    outcomes = {
        o.job: o for o in workers.run(faultkit.misbehave, jobs, Pool(cluster="local:2", timeout_s=6.0))
    }
    assert set(outcomes) == set(jobs)
    assert [job for job, outcome in outcomes.items() if outcome.error] == ["hangs"]
    assert "--frame-timeout" in outcomes["hangs"].error.message


# ---------------------------------------------------------------- schedulers and workers of their own


class Away:
    """A scheduler, and workers, as processes that know nothing of this one."""

    def __init__(self, folder: Path) -> None:
        self._file = folder / "scheduler.json"
        self._environment = os.environ | {
            "PYTHONPATH": os.pathsep.join([str(Path(__file__).parent), *filter(None, sys.path)]),
            "DASK_DISTRIBUTED__SCHEDULER__WORK_STEALING": "False",
        }
        self._folder = folder
        self.processes: list[subprocess.Popen] = []
        self.scheduler = self._start(
            "scheduler",
            "--host",
            "127.0.0.1",
            "--port",
            "0",
            "--no-dashboard",
            "--scheduler-file",
            str(self._file),
        )
        while not self._file.exists():
            assert self.scheduler.poll() is None, "the scheduler ended"
            time.sleep(0.05)
        self.address = json.loads(self._file.read_text(encoding="utf-8"))["address"]

    def worker(self, *before: str) -> None:
        self._start(
            "worker", self.address, "--nthreads", "1", "--no-dashboard", "--local-directory", str(self._folder),
            before=before,
        )  # fmt: skip

    def _start(self, *arguments: str, before: tuple[str, ...] = ()) -> subprocess.Popen:
        process = subprocess.Popen(
            [*before, sys.executable, "-m", "dask", *arguments],
            env=self._environment,
            cwd="/",
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
            start_new_session=True,
        )
        self.processes.append(process)
        return process

    def wait_for_workers(self, count: int) -> None:
        import distributed

        with distributed.Client(self.address, set_as_default=False) as client:
            client.wait_for_workers(count, timeout=120)

    def close(self) -> None:
        for process in self.processes:
            with_children = [process.pid, *(c.pid for c in _children(process.pid))]
            for pid in with_children:
                try:
                    os.kill(pid, signal.SIGKILL)
                except ProcessLookupError:
                    continue
            process.wait()


def _children(pid: int) -> list[psutil.Process]:
    try:
        return psutil.Process(pid).children(recursive=True)
    except psutil.NoSuchProcess:
        return []


@pytest.fixture
def away(tmp_path: Path) -> Iterator[Away]:
    (tmp_path / "away").mkdir()
    cluster = Away(tmp_path / "away")
    yield cluster
    cluster.close()


@pytest.mark.skipif(os.name != "posix", reason="SIGKILL")
def test_the_same_bytes_from_elsewhere_and_a_scheduler_that_is_gone_can_be_done_without(
    away: Away, shoot: Path, whole: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    away.worker()
    away.wait_for_workers(1)
    frames = grader.neutralise([shoot], "out", options=Options(pool=Pool(cluster=away.address)))
    for _ in range(3):
        assert next(frames)["status"] == "graded"
    away.scheduler.kill()
    with pytest.raises(WorkerFailed, match="gone") as stopped:
        list(frames)
    assert "--resume" in str(stopped.value)
    assert 3 <= len([name for name in digests(tmp_path / "out") if name.endswith(".tif")]) < 16
    list(grader.neutralise([shoot], "out", options=Options(resume=True)))
    assert_same_end(tmp_path / "out", whole)


@pytest.mark.skipif(sys.platform != "linux", reason="mount namespaces are Linux's")
@pytest.mark.parametrize("hidden", ["out", "shoot"])
def test_a_worker_that_does_not_see_the_storage_is_refused_at_the_start(
    hidden: str, away: Away, tmp_path: Path
) -> None:
    # Another machine is played by a worker with mounts of its own, in which that folder is an empty disk.
    folder = tmp_path / hidden
    shoot, out = write_shoot(tmp_path / "shoot", 2), tmp_path / "out"
    out.mkdir()
    covered = ["unshare", "-m", "sh", "-c", f'mount -t tmpfs none "{folder}" && exec "$@"', "sh"]
    if shutil.which("unshare") is None or subprocess.run([*covered, "true"], check=False).returncode:
        pytest.skip("this user may not make mounts of its own")
    away.worker(*covered)
    away.wait_for_workers(1)
    words = "does not see the output folder" if hidden == "out" else "cannot read"
    with pytest.raises(PresetError, match=words) as refused:
        list(grader.neutralise([shoot], out, options=Options(pool=Pool(cluster=away.address))))
    assert "docs/CLUSTER.md" in str(refused.value)
    assert digests(out) == {}


# ---------------------------------------------------------------- the checks by themselves


class Pretended:
    """A client whose one worker answers as it is told."""

    def __init__(self, answer: object) -> None:
        self.answer = answer

    def run(self, function: object, *arguments: object) -> dict[str, object]:
        return {"tcp://studio-2:4040": self.answer}


@pytest.mark.parametrize("name", ["grader", "numpy", "imagecodecs"])
def test_other_versions_are_refused_by_name(name: str) -> None:
    theirs = cluster.worker_versions() | {name: "0.0.1"}
    with pytest.raises(PresetError, match=rf"studio-2:4040 runs {name} 0\.0\.1"):
        cluster._check_versions(Pretended(theirs), "tcp://x")
    cluster._check_versions(Pretended(cluster.worker_versions()), "tcp://x")


def test_what_a_worker_does_not_see_is_said(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cluster, "_SEEN_S", 0.0)
    sign, file = tmp_path / "sign", tmp_path / "file"
    assert "does not see" in str(cluster.what_is_not_seen(str(sign), None, None))
    sign.touch()
    assert cluster.what_is_not_seen(str(sign), None, None) is None
    assert "cannot read" in str(cluster.what_is_not_seen(None, str(file), 3))
    file.write_bytes(b"abcd")
    assert "another file" in str(cluster.what_is_not_seen(None, str(file), 3))
    assert cluster.what_is_not_seen(str(sign), str(file), 4) is None
    assert sorted(path.name for path in tmp_path.iterdir()) == ["file", "sign"]


def test_the_sign_is_taken_away_again(tmp_path: Path) -> None:
    cluster._check_storage(Pretended(None), str(tmp_path), None)
    assert list(tmp_path.iterdir()) == []
    with pytest.raises(PresetError, match="is blind"):
        cluster._check_storage(Pretended("is blind"), str(tmp_path), None)
    assert list(tmp_path.iterdir()) == []
    with pytest.raises(WriteFailed):
        cluster._check_storage(Pretended(None), str(tmp_path / "nowhere"), None)
