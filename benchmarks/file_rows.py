"""Whole files: what measuring and correcting cost beside decoding and encoding alone."""

from __future__ import annotations

import subprocess
import sys
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path

import material
import numpy as np
import tifffile
from PIL import Image
from timing import Row, by_turns

from grader import cast, files, jobs, pixels
from grader.model import Output, ReadLimits, Recipe

GOALS = {"RAW": (1.06, 1.30), "zstd TIFF": (1.2, 1.45), "JPEG": (1.6, 2.0)}
LIMITS = ReadLimits()


def rows(megapixels: float) -> Iterator[Row]:
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        paths = material.write_frame_files(folder, megapixels)
        for kind, path in paths.items():
            yield from _whole_frame(kind, path, folder)
        yield _measuring_raw(paths["RAW"])
        if Path("/proc/self/status").exists():
            yield _memory(paths["zstd TIFF"], folder)


def _whole_frame(kind: str, path: Path, folder: Path) -> Iterator[Row]:
    target = folder / f"out{'.jpg' if kind == 'JPEG' else '.tif'}"
    recipe = Recipe(pooling=False)
    known = cast.plan([cast.measure(files.read_reduced(path))], recipe)[0]

    def grade(correction: object) -> None:
        jobs.grade_file(
            jobs.GradeJob(str(path), str(target), recipe, LIMITS, correction=correction, overwrite=True)
        )

    def two_passes() -> None:
        jobs.measure_file(jobs.MeasureJob(str(path), recipe, LIMITS))
        grade(known)

    graded = pixels.correct_frame(files.read(path, LIMITS), known)

    def in_and_out() -> None:
        files.read(path, LIMITS)
        files.write(graded, target, Output(), overwrite=True)

    times = by_turns(
        {
            "codec": _codec_alone(kind, path, target, graded.pixels),
            "files": in_and_out,
            "one": lambda: grade(None),
            "two": two_passes,
        },
        rounds=3,
    )
    alone = times["codec"]
    one, two = GOALS[kind]
    detail = f"{alone:.2f} s"
    yield Row(
        f"{kind}: one decode (per frame) / decode + encode alone", times["one"] / alone, one, detail=detail
    )
    yield Row(f"{kind}: the two passes of a shoot / decode + encode alone", times["two"] / alone, two)
    detail = "profile, metadata, hashes, safe on disk"
    yield Row(
        f"{kind}: grader's reading and writing / decode + encode alone", times["files"] / alone, detail=detail
    )


def _codec_alone(kind: str, path: Path, target: Path, graded: np.ndarray) -> Callable[[], None]:
    """Return what decodes the file, and encodes the graded picture (the time depends on what is encoded)."""

    def raw() -> None:
        material.develop(path)
        tifffile.imwrite(target, graded, photometric="rgb", **_deflate())

    def tiff() -> None:
        tifffile.imread(path, maxworkers=1)
        tifffile.imwrite(target, graded, photometric="rgb", compression="zstd", predictor=True, maxworkers=1)

    def jpeg() -> None:
        with Image.open(path) as picture:
            np.asarray(picture)
            tables = picture.quantization
        Image.fromarray(graded).save(target, qtables=tables, subsampling="4:2:0")

    return {"RAW": raw, "zstd TIFF": tiff, "JPEG": jpeg}[kind]


def _deflate() -> dict[str, object]:
    return {"compression": "zlib", "compressionargs": {"level": 1}, "predictor": True, "maxworkers": 1}


def _measuring_raw(path: Path) -> Row:
    times = by_turns(
        {"decode": lambda: material.develop(path), "measure": lambda: cast.measure(files.read_reduced(path))},
        rounds=3,
    )
    detail = f"{times['decode']:.2f} s"
    return Row(
        "measuring a raw file / its full decode", times["measure"] / times["decode"], 0.3, detail=detail
    )


PEAK = """
import sys
from grader import jobs
from grader.model import Recipe, ReadLimits
def peak():
    status = open("/proc/self/status").read()
    return int(status.split("VmHWM:")[1].split()[0]) * 1024
small, big, target = sys.argv[1:]
def grade(path):
    jobs.grade_file(jobs.GradeJob(path, target, Recipe(pooling=False), ReadLimits(), overwrite=True))
grade(small)
before = peak()
grade(big)
print(before, peak())
"""


def _memory(path: Path, folder: Path) -> Row:
    """Measure a fresh process: its peak with this frame less its peak with a small one."""
    frame_bytes = tifffile.imread(path).nbytes
    small = folder / "small.tif"
    tifffile.imwrite(
        small, tifffile.imread(path)[:64, :64], photometric="rgb", compression="zstd", predictor=True
    )
    arguments = [sys.executable, "-c", PEAK, str(small), str(path), str(folder / "peak.tif")]
    done = subprocess.run(arguments, capture_output=True, text=True, check=True)
    before, peak = map(int, done.stdout.split())
    detail = f"{before / 1e6:.0f} MB without it"
    return Row(
        "peak memory of a worker, TIFF at 16 bit / frame", (peak - before) / frame_bytes, 2.5, detail=detail
    )
