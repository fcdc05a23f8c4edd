"""Batches: two workers against one, a growing shoot."""

from __future__ import annotations

import tempfile
import time
from collections.abc import Iterator
from pathlib import Path

import material
from timing import Row

from grader.batch import Options, neutralise
from grader.model import Recipe
from grader.workers import Pool

SHOOT_MEGAPIXELS = 3
COUNTS = (50, 200, 400)


def rows(megapixels: float) -> Iterator[Row]:
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        yield from _workers(folder, megapixels)
        yield from _growth(folder)


def frames_per_second(paths: list[Path], out: Path, processes: int, *, pooling: bool = True) -> float:
    start = time.perf_counter()
    options = Options(pool=Pool(processes=processes), overwrite=True)
    lines = list(neutralise(paths, out, preset=Recipe(pooling=pooling), options=options))
    assert [line["status"] for line in lines] == ["graded"] * len(paths)
    return len(paths) / (time.perf_counter() - start)


def _workers(folder: Path, megapixels: float) -> Iterator[Row]:
    paths = material.write_shoot(folder / "large", 24, megapixels)
    frames_per_second(paths[:2], folder / "warm", 2)
    one, two = (max(frames_per_second(paths, folder / f"w{n}", n) for _ in range(2)) for n in (1, 2))
    detail = f"24 JPEGs of {megapixels:g} MP, {one:.2f} and {two:.2f} frames a second"
    yield Row("two workers / one, frames a second", two / one, 1.8, at_least=True, detail=detail)


def _growth(folder: Path) -> Iterator[Row]:
    speeds = {}
    for count in COUNTS:
        paths = material.write_shoot(folder / f"shoot-{count}", count, SHOOT_MEGAPIXELS)
        speeds[count] = frames_per_second(paths, folder / f"graded-{count}", 2)
    detail = f"JPEGs of {SHOOT_MEGAPIXELS} MP, two workers, both passes"
    yield Row("a shoot of 200 frames, frames a second", speeds[200], digits=1, detail=detail)
    detail = ", ".join(f"{count}: {speed:.1f}" for count, speed in speeds.items())
    yield Row("frames a second, 400 frames / 50", speeds[400] / speeds[50], digits=2, detail=detail)
