"""What a worker does with one file: module-level functions, small values in, small values out."""

from __future__ import annotations

import os
import time
from dataclasses import dataclass, replace

from grader import cast as casts
from grader import files, pixels
from grader.errors import DamagedFile, PresetError
from grader.model import Cast, Correction, Counts, Fixed, ReadLimits, Recipe, Written
from grader.target import enter


@dataclass(frozen=True, slots=True)
class MeasureJob:
    """Measure one file."""

    path: str
    recipe: Recipe
    limits: ReadLimits
    known_sha256: str | None = None
    """Hash at which the file was measured before; if it still holds, nothing is decoded."""
    cwd: str = ""
    """The folder that a relative path is relative to, where that may not be the worker's own."""


@dataclass(frozen=True, slots=True)
class Measured:
    """One file's measured light; None where the earlier measurement still holds."""

    cast: Cast | None
    seconds: float


@dataclass(frozen=True, slots=True, eq=False)
class GradeJob:
    """Grade one file.

    ``correction`` None measures the frame and takes the settings' own correction for it (one decode).
    """

    path: str
    target: str
    settings: Recipe | Fixed
    limits: ReadLimits
    sha256: str | None = None
    correction: Correction | None = None
    overwrite: bool = False
    known_output_sha256: str | None = None
    """Hash of an output that an earlier run wrote with this correction; if it still holds, it stays."""
    known_sha256: str | None = None
    """Hash of the source of that output, where it was not compared yet."""
    root: str = ""
    """The run's output folder: nothing is written outside it."""
    cwd: str = ""
    """As for `MeasureJob`."""


@dataclass(frozen=True, slots=True)
class Graded:
    """One graded file; ``written`` None where an earlier output still holds."""

    written: Written | None
    counts: Counts
    seconds: float
    cast: Cast | None = None
    correction: Correction | None = None


def measure_file(job: MeasureJob) -> Measured:
    """Pass 1: file -> proxy -> readings, vote, cast."""
    start = time.perf_counter()
    path = _from(job.cwd, job.path)
    if job.known_sha256 is not None and files.hash_file(path) == job.known_sha256:
        return Measured(None, time.perf_counter() - start)
    cast = casts.measure(files.read_reduced(path, job.limits), job.recipe)
    return Measured(_named(cast, job.path), time.perf_counter() - start)


def grade_file(job: GradeJob) -> Graded:
    """Pass 2: file and correction -> graded file.

    Raises
    ------
    DamagedFile
        The file is not the one that was measured.
    """
    start = time.perf_counter()
    path, target = _from(job.cwd, job.path), _from(job.cwd, job.target)
    if _still_holds(job, path, target):
        return Graded(None, Counts(), time.perf_counter() - start)
    frame = files.read(path, job.limits)
    _check_unchanged(job, frame.header.sha256)
    cast, correction = None, job.correction
    if correction is None:
        cast = _named(
            casts.measure(frame, job.settings if isinstance(job.settings, Recipe) else Recipe()), job.path
        )
        correction = own_correction(cast, job.settings)
    output = job.settings.output
    graded, counts = pixels.correct(frame, correction, output, overwrite=True)
    del frame
    _enter(job, target)
    written = files.write(graded, target, output, correction=correction, overwrite=job.overwrite)
    return Graded(written, counts, time.perf_counter() - start, cast, correction)


def rewrite_file(job: GradeJob) -> Graded:
    """Pass 2 for ``--format dng``: a copy of the raw file whose as-shot neutral is the planned light."""
    start = time.perf_counter()
    path, target = _from(job.cwd, job.path), _from(job.cwd, job.target)
    if _still_holds(job, path, target):
        return Graded(None, Counts(), time.perf_counter() - start)
    if job.correction is None:
        raise PresetError("a raw copy needs a plan", path=job.path)
    _check_unchanged(job, files.hash_file(path))
    _enter(job, target)
    written = files.rewrite_raw(path, target, job.correction, job.limits, overwrite=job.overwrite)
    return Graded(written, Counts(), time.perf_counter() - start)


def own_correction(cast: Cast, settings: Recipe | Fixed) -> Correction:
    """Return the correction that the settings give this frame by itself, without its shoot."""
    if isinstance(settings, Fixed):
        return casts.fixed_correction(settings, cast.header)
    return casts.plan([cast], settings)[0]


def _from(cwd: str, path: str) -> str:
    return os.path.join(cwd, path)  # noqa: PTH118 - names may hold bytes that are no UTF-8


def _named(cast: Cast, path: str) -> Cast:
    """Return the cast under the name that the run knows the file by."""
    return replace(cast, header=replace(cast.header, file=path))


def _still_holds(job: GradeJob, path: str, target: str) -> bool:
    if job.known_output_sha256 is None or os.path.islink(target) or not os.path.isfile(target):  # noqa: PTH113, PTH114
        return False
    if files.hash_file(target) != job.known_output_sha256:
        return False
    return job.known_sha256 is None or files.hash_file(path) == job.known_sha256


def _check_unchanged(job: GradeJob, sha256: str | None) -> None:
    if job.sha256 is not None and sha256 != job.sha256:
        raise DamagedFile(
            "the file changed after it was measured", path=job.path, hint="--resume measures it anew"
        )


def _enter(job: GradeJob, target: str) -> None:
    if job.root:
        enter(_from(job.cwd, job.root), target)
    else:
        os.makedirs(os.path.dirname(target) or ".", exist_ok=True)  # noqa: PTH103, PTH120
