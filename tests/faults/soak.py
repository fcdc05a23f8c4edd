"""Grade many tiny frames and print what the processes hold meanwhile: ``python soak.py FOLDER FRAMES``."""

from __future__ import annotations

import json
import sys
import tempfile
from pathlib import Path

import psutil

sys.path[:0] = [str(Path(__file__).parents[1])]

from faults.faultkit import digests, unfinished, write_shoot  # noqa: E402

import grader  # noqa: E402
from grader.batch import Options  # noqa: E402
from grader.workers import Pool  # noqa: E402


def held(process: psutil.Process) -> dict[str, int]:
    return {
        "rss": process.memory_info().rss,
        "handles": process.num_fds() if hasattr(process, "num_fds") else process.num_handles(),
        "threads": process.num_threads(),
    }


def temporary_files() -> set[str]:
    """Return what lies in the temporary folder; but for multiprocessing's own, which goes with the process."""
    names = {path.name for path in Path(tempfile.gettempdir()).iterdir()}
    return {name for name in names if not name.startswith("pymp-")}


def watch(folder: Path, frames: int) -> dict:
    """Grade the frames with one worker; sample parent and worker twenty times a pass."""
    shoot, out = write_shoot(folder / "shoot", frames), folder / "out"
    samples: list[dict] = []
    temporary = temporary_files()

    def sample(stage: str, done: int, total: int) -> None:
        if done % max(total // 20, 1) or not done:
            return
        me = psutil.Process()
        workers = [child for child in me.children(recursive=True) if child.ppid() != me.pid]
        samples.append(
            {
                "stage": stage,
                "done": done,
                "parent": held(me),
                "worker": held(workers[0]) if workers else None,
            }
        )

    options = Options(pool=Pool(processes=1, timeout_s=300.0))
    statuses = [line["status"] for line in grader.neutralise([shoot], out, options=options, progress=sample)]
    return {
        "graded": statuses.count("graded"),
        "outputs": len(digests(out)),
        "unfinished": unfinished(out),
        "temporary": sorted(temporary_files() - temporary),
        "after": held(psutil.Process()),
        "samples": samples,
    }


if __name__ == "__main__":
    print(json.dumps(watch(Path(sys.argv[1]), int(sys.argv[2]))))
