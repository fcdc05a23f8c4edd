"""Starting up, and planning and reporting very long shoots."""

from __future__ import annotations

import json
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from datetime import datetime, timedelta
from pathlib import Path

import material
from timing import Row

from grader import cast
from grader.colour.frames import frame_from_array
from grader.log import measured_line

LINES = (25_000, 50_000, 100_000)


def rows() -> Iterator[Row]:
    yield _help()
    yield from _long_logs()


def _help() -> Row:
    """CPU time of ``grader --help`` in a fresh process, the best of seven."""
    best = float("inf")
    for _ in range(7):
        before = resource.getrusage(resource.RUSAGE_CHILDREN)
        subprocess.run([sys.executable, "-m", "grader", "--help"], capture_output=True, check=True)
        after = resource.getrusage(resource.RUSAGE_CHILDREN)
        used = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
        best = min(best, used)
    return Row("grader --help, CPU time", best * 1e3, 120, digits=0, unit=" ms")


PLAN = """
import resource, sys, time
from grader import cast
from grader.log import cast_from_line, read_log
from grader.report.recount import read_shoot
start = time.perf_counter()
log = read_log(sys.argv[1])
lines = log.latest()
casts = [cast_from_line(line) for line in lines]
read = time.perf_counter()
corrections = cast.plan(casts)
planned = time.perf_counter()
read_shoot(log.records())
reported = time.perf_counter()
peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
print(read - start, planned - read, reported - planned, peak)
"""


def _long_logs() -> Iterator[Row]:
    with tempfile.TemporaryDirectory() as name:
        found = {count: _plan_and_report(Path(name) / f"{count}.jsonl", count) for count in LINES}
    small, large = found[LINES[0]], found[LINES[-1]]
    read, planned, reported, peak = large
    detail = f"read {read:.0f}, plan {planned:.0f}, report data {reported:.0f} s; {peak / 1e9:.2f} GB"
    yield Row(
        "a log of 100,000 lines: plan + report data",
        read + planned + reported,
        digits=0,
        unit=" s",
        detail=detail,
    )
    times = sum(large[:3]) / sum(small[:3])
    yield Row("the same, time of 100,000 lines / 25,000", times, 5, detail="4 would be linear")
    yield Row(
        "the same, memory of 100,000 lines / 25,000", large[3] / small[3], 4.4, detail="4 would be linear"
    )


def _plan_and_report(path: Path, count: int) -> tuple[float, ...]:
    _write_log(path, count)
    done = subprocess.run([sys.executable, "-c", PLAN, str(path)], capture_output=True, text=True, check=True)
    return tuple(map(float, done.stdout.split()))


def _write_log(path: Path, count: int) -> None:
    """Write a log of measured frames of two bodies, the light changing every two hundred frames."""
    lights_k = (3000, 5200, 4000, 6500)
    lines = []
    for light_k in lights_k:
        codes = material.codes(material.linear_picture(0.1, light_k=light_k))
        lines.append(measured_line("", cast.measure(frame_from_array(codes)), seconds=0.1))
    start = datetime(2025, 5, 3, 6)
    with path.open("w", encoding="utf-8") as out:
        first = {
            "kind": "run",
            "schema": "grader-log/1",
            "version": "0",
            "command": [],
            "preset": {},
            "started": "",
        }
        out.write(json.dumps(first) + "\n")
        for index in range(count):
            line = dict(lines[index // 200 % 4])
            line |= {"file": f"{index:06d}.jpg", "body": f"Tarnwick T1 {index % 2}"}
            line["taken_at"] = (start + timedelta(seconds=2 * index)).isoformat()
            line["header"] = {**line["header"], "body": line["body"], "taken_at": line["taken_at"]}
            out.write(json.dumps(line) + "\n")


if __name__ == "__main__":
    began = time.perf_counter()
    for row in rows():
        print(*row.cells())
    print(f"{time.perf_counter() - began:.0f} s in all")
