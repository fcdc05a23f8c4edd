"""Print how fast grader is on this machine, beside its goals and beside other ways to do the same.

Run: ``python benchmarks/speed.py`` (all of it takes some minutes), or ``--only kernel`` (also ``files``, ``batch``,
``start``).  Everything is a ratio of best times within one run; nothing here is a test.
"""

from __future__ import annotations

import argparse
import os
import platform
import sys
from collections.abc import Iterator
from datetime import date
from pathlib import Path

for variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(variable, "1")

sys.path.insert(0, str(Path(__file__).parent))
import batch_rows
import file_rows
import kernel_rows
import start_rows
import timing
from timing import Row, table

PARTS = ("kernel", "files", "batch", "start")


def rows(parts: list[str], megapixels: float, seconds: float) -> Iterator[Row]:
    if "kernel" in parts:
        yield from kernel_rows.rows(megapixels, seconds)
    if "files" in parts:
        yield from file_rows.rows(megapixels)
    if "batch" in parts:
        yield from batch_rows.rows(megapixels)
    if "start" in parts:
        yield from start_rows.rows()


def machine() -> str:
    """Return processor, cores and versions in a line."""
    model = platform.processor() or platform.machine()
    cpuinfo = Path("/proc/cpuinfo")
    if cpuinfo.exists():
        names = [line for line in cpuinfo.read_text().splitlines() if line.startswith("model name")]
        model = names[0].split(":")[1].strip() if names else model
    load = f", load average {os.getloadavg()[0]:.1f} at the end" if hasattr(os, "getloadavg") else ""
    return f"{model}, {os.cpu_count()} cores, {platform.system()}, Python {platform.python_version()}, {date.today()}{load}"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--only", action="append", choices=PARTS, help="a part of the table")
    parser.add_argument("--megapixels", type=float, default=24, help="size of the frames (default 24)")
    parser.add_argument("--seconds", type=float, default=20, help="least time for the kernel rows")
    parser.add_argument(
        "--cpu", action="store_true", help="processor time: for a machine that is busy otherwise"
    )
    given = parser.parse_args()
    timing.cpu = given.cpu
    found = []
    for row in rows(given.only or list(PARTS), given.megapixels, given.seconds):
        found.append(row)
        print(*row.cells(), sep="  ", file=sys.stderr, flush=True)
    print(table(found))
    print()
    print(machine() + (", processor time" if given.cpu else ""))


if __name__ == "__main__":
    main()
