"""Kill runs and let them go on: ``python crashing.py steps|random FOLDER PRESET [KILLS]`` prints what came of it.

A program of its own, because it forks: one process loads everything, each run is a fork of it, in its own
process, ended by SIGKILL.  ``steps`` kills before every single call that changes a file, and in the middle of every
write to the log; ``random`` at random moments, KILLS times.
"""

from __future__ import annotations

import json
import os
import random
import shutil
import signal
import sys
import time
import traceback
from collections.abc import Callable
from pathlib import Path

os.environ |= {"OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
sys.path[:0] = [str(Path(__file__).parents[1])]

from faults.faultkit import comparable, digests, unfinished, write_shoot  # noqa: E402

import grader  # noqa: E402
from grader.batch import Options  # noqa: E402
from grader.model import Fixed, Recipe  # noqa: E402

PRESETS = {
    "shoot": Recipe(),
    "each": Recipe(pooling=False),
    "fixed": Fixed((0.40, 0.385), (0.3127, 0.3290)),
}
CALLS = ("open", "write", "fsync", "link", "replace", "unlink", "ftruncate", "mkdir")
KILLED = -signal.SIGKILL


def grade(shoot: Path, out: Path, preset: str) -> None:
    list(grader.neutralise([shoot], out, preset=PRESETS[preset], options=Options(resume=True)))


def in_a_fork(work: Callable[[], None], kill_after_s: float | None = None) -> int:
    """Do ``work`` in a fork; return its exit code, negative for a signal."""
    child = os.fork()
    if child == 0:
        try:
            work()
            os._exit(0)
        except BaseException:
            traceback.print_exc()
            os._exit(1)
    if kill_after_s is not None:
        time.sleep(kill_after_s)
        os.kill(child, signal.SIGKILL)
    return os.waitstatus_to_exitcode(os.waitpid(child, 0)[1])


def dying_at(step: int, work: Callable[[], None]) -> Callable[[], None]:
    """Return work that is killed before its file call number ``step``; inside it, where it writes."""
    count = 0

    def before(name: str, call: Callable) -> Callable:
        def counted(*arguments, **named):
            nonlocal count
            count += 1
            if count > step:
                if name == "write":
                    call(arguments[0], bytes(arguments[1])[: len(arguments[1]) // 2])
                os.kill(os.getpid(), signal.SIGKILL)
            return call(*arguments, **named)

        return counted

    def run() -> None:
        for name in CALLS:
            setattr(os, name, before(name, getattr(os, name)))
        work()

    return run


def differences(out: Path, whole: Path) -> list[str]:
    found = []
    if digests(out) != digests(whole):
        found.append("outputs")
    if comparable(out) != comparable(whole):
        found.append("log")
    return found + unfinished(out)


def at_every_step(shoot: Path, folder: Path, preset: str) -> dict:
    whole, out, kills, different = folder / "whole", folder / "out", 0, []
    assert in_a_fork(lambda: grade(shoot, whole, preset)) == 0
    for step in range(10_000):
        shutil.rmtree(out, ignore_errors=True)
        code = in_a_fork(dying_at(step, lambda: grade(shoot, out, preset)))
        if code == 0:
            break
        kills += 1
        resumed = in_a_fork(lambda: grade(shoot, out, preset))
        if code != KILLED or resumed != 0 or differences(out, whole):
            different.append([step, code, resumed, differences(out, whole) if resumed == 0 else []])
    return {"kills": kills, "different": different}


def at_random(shoot: Path, folder: Path, preset: str, wanted: int) -> dict:
    whole, out = folder / "whole", folder / "out"
    assert in_a_fork(lambda: grade(shoot, whole, preset)) == 0
    start = time.monotonic()
    assert in_a_fork(lambda: grade(shoot, folder / "again", preset)) == 0
    longest_s = (time.monotonic() - start) / 5
    chance, kills, different, ends = random.Random(20), 0, [], 0
    while kills < wanted or not out.exists():
        code = in_a_fork(lambda: grade(shoot, out, preset), chance.uniform(0, longest_s))
        kills += code == KILLED
        if code == 0 or kills == wanted:
            final = in_a_fork(lambda: grade(shoot, out, preset))
            ends += 1
            if final != 0 or differences(out, whole):
                different.append([kills, final, differences(out, whole) if final == 0 else []])
            if kills < wanted:
                shutil.rmtree(out)
        elif code != KILLED:
            different.append([kills, code, []])
    return {"kills": kills, "ends": ends, "frames": len(digests(whole)), "different": different}


def main(mode: str, folder: Path, preset: str, kills: int) -> dict:
    shoot = write_shoot(folder / "shoot", 2 if mode == "steps" else 40)
    grade(write_shoot(folder / "warm", 2), folder / "warmed", preset)  # so that the forks need not compile
    if mode == "steps":
        return at_every_step(shoot, folder, preset)
    return at_random(shoot, folder, preset, kills)


if __name__ == "__main__":
    print(json.dumps(main(sys.argv[1], Path(sys.argv[2]), sys.argv[3], int((*sys.argv, "20")[4]))))
