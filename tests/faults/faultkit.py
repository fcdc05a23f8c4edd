"""Small shoots, what two runs must have in common, and decoders that misbehave."""

from __future__ import annotations

import hashlib
import json
import os
import signal
import sys
import time
from pathlib import Path

import tifffile
from batchkit import encoded_scene

from grader import jobs
from grader.atomic import PART
from grader.options import LOG_NAME

LIGHTS = ((0.40, 0.385), (0.36, 0.365), (0.3127, 0.3290))


def write_shoot(folder: Path, count: int, height: int = 40, width: int = 56) -> Path:
    """Write ``count`` tiny 8-bit TIFF frames under three lights, one after the other."""
    folder.mkdir(parents=True, exist_ok=True)
    for number in range(count):
        light = LIGHTS[number * len(LIGHTS) // count]
        pixels = (encoded_scene(light, number, height=height, width=width) * 255 + 0.5).astype("u1")
        tifffile.imwrite(folder / f"f{number:04}.tif", pixels, photometric="rgb")
    return folder


def digests(folder: Path) -> dict[str, str]:
    """Return the SHA-256 of every output, by name."""
    return {
        path.relative_to(folder).as_posix(): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file() and path.name not in {LOG_NAME, ".grader.lock"}
    }


def unfinished(folder: Path) -> list[str]:
    """Return what is left of files that were not finished."""
    return [path.name for path in folder.rglob(".*") if PART.fullmatch(path.name)]


def comparable(folder: Path) -> list[dict]:
    """Return the log's lines without what differs between runs by nature: times, and how each was called."""
    lines = [json.loads(text) for text in (folder / LOG_NAME).read_text(encoding="utf-8").splitlines()]
    return [
        {k: v for k, v in line.items() if k not in {"seconds", "started", "out", "command"}} for line in lines
    ]


def assert_same_end(folder: Path, whole: Path) -> None:
    """Two runs ended alike: the same outputs byte for byte, the same log but for times, nothing else left."""
    assert digests(folder) == digests(whole)
    assert comparable(folder) == comparable(whole)
    assert unfinished(folder) == []


# ---------------------------------------------------------------- decoders that misbehave, by the file's name


_measure = jobs.measure_file


def measure_file(job: jobs.MeasureJob) -> jobs.Measured:
    """Measure a file, unless its name asks for a fault."""
    misbehave(Path(job.path).stem)
    return _measure(job)


def misbehave(stem: str) -> None:
    """Do what a bad decoder does."""
    if stem == "crashes":
        os.kill(os.getpid(), signal.SIGSEGV)
    elif stem == "exits":
        os._exit(7)
    elif stem == "hangs":
        time.sleep(3600)
    elif stem == "stops":
        os.kill(os.getpid(), signal.SIGSTOP)
    elif stem == "eats":
        hoard = []
        while True:
            hoard.append(bytearray(16 << 20))


def nap(job: int) -> int:
    """Return the job, a little later."""
    time.sleep(0.03)
    return job


def talk(job: int) -> int:
    """Print as libraries do, past Python; and as Python does, to stderr."""
    os.write(1, b"hello stdout\n")
    os.write(2, b"\x1b[2J: Unexpected end of file\n")
    print("a warning of ours", file=sys.stderr)
    return job
