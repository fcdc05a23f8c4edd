"""Room for a run: how many frames fit into memory side by side, and whether the results fit onto the disk."""

from __future__ import annotations

import os
from collections import defaultdict
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from pathlib import Path, PurePath
from typing import Final

from grader.errors import GraderError
from grader.files.extent import Extent, extent
from grader.model import Output, ReadLimits
from grader.workers import Pool

_WORKER_BYTES: Final = 256 << 20
"""A worker with everything loaded and nothing to do takes 190 MiB of data (VmData, Linux, CPython 3.11)."""
_LEAST_BYTES: Final = 512 << 20
"""No worker gets less: compiling the pixel loops for the first time takes 257 MiB of data."""
_PEAK_PER_PX: Final[Mapping[tuple[bool, int], int]] = {
    (True, 2): 34,
    (False, 1): 16,
    (False, 2): 22,
    (False, 4): 32,
}
"""Most bytes for each pixel while a frame is graded, by (raw, bytes of a sample); measured on 24-megapixel frames
of each kind (31; 10 JPEG, 14.6 PNG; 15.3 TIFF, 18.6 PNG; 28.0), rounded up."""
_LOOKED_AT: Final = 2
"""Headers that are read of each kind of file: those of the largest files."""
_UNIT: Final = 1_000_000_000


@dataclass(frozen=True, slots=True)
class Sizes:
    """What is known of a batch's files before any is decoded."""

    total_bytes: Mapping[str, int]
    """By suffix."""
    count: Mapping[str, int]
    largest: Mapping[str, Extent]
    """The largest picture that the looked-at headers show."""


def sizes_of(paths: Iterable[str], limits: ReadLimits) -> Sizes:
    """Look at all sizes and at the headers of the largest files of each kind."""
    by_suffix: dict[str, list[tuple[int, str]]] = defaultdict(list)
    for path in paths:
        try:
            by_suffix[PurePath(path).suffix.lower()].append((os.stat(path).st_size, path))  # noqa: PTH116
        except OSError:
            continue
    largest: dict[str, Extent] = {}
    for suffix, files in by_suffix.items():
        for _, path in sorted(files, reverse=True)[:_LOOKED_AT]:
            try:
                found = extent(path, limits)
            except GraderError:
                continue
            if suffix not in largest or peak_bytes(found) > peak_bytes(largest[suffix]):
                largest[suffix] = found
    return Sizes(
        {suffix: sum(size for size, _ in files) for suffix, files in by_suffix.items()},
        {suffix: len(files) for suffix, files in by_suffix.items()},
        largest,
    )


def peak_bytes(picture: Extent) -> int:
    """Return the most memory that a worker takes for a frame, itself included.

    Examples
    --------
    >>> round(peak_bytes(Extent("raw", 6000, 4000, 2)) / 2**20)
    1034
    """
    raw = picture.kind == "raw"
    per_px = _PEAK_PER_PX[raw, 2 if raw else picture.sample_bytes]
    return _WORKER_BYTES + per_px * picture.width_px * picture.height_px


def make_room(
    pool: Pool, paths: list[str], limits: ReadLimits, output: Output | None, disk_free_bytes: int | None
) -> tuple[Pool, list[str]]:
    """Fit a pool to the memory, and foresee a disk that is too small.

    Parameters
    ----------
    pool : Pool
    paths : list of str
        The files that are still to be done.
    limits : ReadLimits
    output : Output, optional
        None where no pictures are written.
    disk_free_bytes : int, optional
        Room for the results; None where it is not known.

    Returns
    -------
    Pool, list of str
        The pool to use, and what a person should know before the run.
    """
    if output is None and pool.processes < 1:
        return pool, []
    sizes = sizes_of(paths, limits)
    pool, notes = fitted(pool, sizes, free_memory())
    warning = None if output is None else note_on_disk(output_bytes(sizes, output), disk_free_bytes)
    return pool, notes if warning is None else [*notes, warning]


def fitted(pool: Pool, sizes: Sizes, free_bytes: int | None) -> tuple[Pool, list[str]]:
    """Return the pool with as many processes as have room for the largest frame, and notes on what was changed.

    Parameters
    ----------
    pool : Pool
        ``memory_bytes`` None takes half of what is free.
    sizes : Sizes
    free_bytes : int, optional
        Free memory; None where it is not known: then only ``pool.memory_bytes`` bounds anything.
    """
    if pool.processes < 1 or pool.cluster is not None:
        return pool, []
    asked = pool.memory_bytes
    memory = asked if asked is not None else None if free_bytes is None else free_bytes // 2
    if memory is None:
        return pool, []
    need = max([*map(peak_bytes, sizes.largest.values()), _LEAST_BYTES])
    processes = max(1, min(pool.processes, memory // need))
    by_itself = memory if asked is not None or free_bytes is None else max(memory, free_bytes * 9 // 10)
    limit = max(by_itself if processes == 1 else memory // processes, _LEAST_BYTES)
    notes = []
    if processes < pool.processes:
        notes.append(
            f"{processes} frame{'s' if processes > 1 else ''} at a time instead of {pool.processes}: the largest takes "
            f"about {_gb(need)} of memory, and {_gb(memory)} may be used (--memory)"
        )
    return replace(pool, processes=processes, worker_bytes=limit), notes


def alone(pool: Pool) -> Pool:
    """Return the pool for a frame that is tried by itself: one process, with all the memory there is."""
    memory = pool.memory_bytes if pool.memory_bytes is not None else free_memory()
    limit = None if memory is None else max(memory, _LEAST_BYTES)
    return replace(pool, processes=1, cluster=None, worker_bytes=limit)


def output_bytes(sizes: Sizes, output: Output) -> int:
    """Estimate the room that a batch's results need.

    Compressed sizes depend on the pictures: files that keep their format are taken to keep their size and a
    tenth, others for what their pixels take uncompressed (a JPEG: one byte a pixel).
    """
    total = 0.0
    for suffix, size in sizes.total_bytes.items():
        picture = sizes.largest.get(suffix)
        if picture is None or output.format == "dng" or _keeps_format(picture, output):
            total += 1.1 * size
            continue
        per_px = 1 if output.format == "jpeg" else 3 * picture.sample_bytes
        total += per_px * picture.width_px * picture.height_px * sizes.count[suffix]
    return int(total)


def _keeps_format(picture: Extent, output: Output) -> bool:
    return picture.kind != "raw" and output.format in ("same", picture.kind)


def note_on_disk(needed_bytes: int, free_bytes: int | None) -> str | None:
    """Return a warning where the results are likely not to fit."""
    if free_bytes is None or needed_bytes <= free_bytes:
        return None
    return (
        f"the results may need about {_gb(needed_bytes)}, and {_gb(free_bytes)} are free there: a full disk stops "
        "the run, and --resume goes on once there is room"
    )


def _gb(size: int) -> str:
    return f"{size / _UNIT:.1f} GB" if size >= _UNIT // 10 else f"{size / (_UNIT // 1000):.1f} MB"


def free_memory() -> int | None:
    """Return the memory that is free to use, containers' limits respected; None where it is not known. [bytes]."""
    free = [size for size in (_system_free(), _group_free()) if size is not None]
    return min(free) if free else None


def _system_free() -> int | None:
    try:
        for line in Path("/proc/meminfo").read_text(encoding="ascii").splitlines():
            if line.startswith("MemAvailable:"):
                return int(line.split()[1]) << 10
    except (OSError, ValueError):
        pass
    try:
        return os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") // 2  # not told: take half of all
    except (AttributeError, ValueError, OSError):
        return None


def _group_free() -> int | None:
    """Return what the control group (version 2) of a container leaves."""
    folder = Path("/sys/fs/cgroup")
    try:
        own = Path("/proc/self/cgroup").read_text(encoding="ascii").strip().rpartition(":")[2].lstrip("/")
    except OSError:
        return None
    free = []
    for place in (folder / own, folder):
        try:
            limit = (place / "memory.max").read_text(encoding="ascii").strip()
            used = int((place / "memory.current").read_text(encoding="ascii"))
        except (OSError, ValueError):
            continue
        if limit.isdecimal():
            free.append(max(int(limit) - used, 0))
    return min(free) if free else None
