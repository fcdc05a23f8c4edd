"""What a worker does with one file: module-level functions, small values in, small values out."""

from __future__ import annotations

import os
import time
from dataclasses import dataclass

from grader import cast as casts
from grader import files, pixels
from grader.errors import DamagedFile, PresetError, WriteFailed
from grader.model import Cast, Correction, Counts, Fixed, ReadLimits, Recipe, Written


@dataclass(frozen=True, slots=True)
class MeasureJob:
    """Measure one file."""

    path: str
    recipe: Recipe
    limits: ReadLimits
    known_sha256: str | None = None
    """Hash at which the file was measured before; if it still holds, nothing is decoded."""


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
    if job.known_sha256 is not None and files.hash_file(job.path) == job.known_sha256:
        return Measured(None, time.perf_counter() - start)
    frame = files.read_reduced(job.path, job.limits)
    cast = casts.measure(frame, job.recipe)
    return Measured(cast, time.perf_counter() - start)


def grade_file(job: GradeJob) -> Graded:
    """Pass 2: file and correction -> graded file.

    Raises
    ------
    DamagedFile
        The file is not the one that was measured.
    """
    start = time.perf_counter()
    if _still_holds(job):
        return Graded(None, Counts(), time.perf_counter() - start)
    frame = files.read(job.path, job.limits)
    _check_unchanged(job, frame.header.sha256)
    cast, correction = None, job.correction
    if correction is None:
        cast = casts.measure(frame, job.settings if isinstance(job.settings, Recipe) else Recipe())
        correction = own_correction(cast, job.settings)
    output = job.settings.output
    graded, counts = pixels.correct(frame, correction, output)
    del frame
    _make_folder(job.target)
    written = files.write(graded, job.target, output, correction=correction, overwrite=job.overwrite)
    return Graded(written, counts, time.perf_counter() - start, cast, correction)


def rewrite_file(job: GradeJob) -> Graded:
    """Pass 2 for ``--format dng``: a copy of the raw file whose as-shot neutral is the planned light."""
    start = time.perf_counter()
    if _still_holds(job):
        return Graded(None, Counts(), time.perf_counter() - start)
    if job.correction is None:
        raise PresetError("a raw copy needs a plan", path=job.path)
    _check_unchanged(job, files.hash_file(job.path))
    _make_folder(job.target)
    written = files.rewrite_raw(job.path, job.target, job.correction, job.limits, overwrite=job.overwrite)
    return Graded(written, Counts(), time.perf_counter() - start)


def own_correction(cast: Cast, settings: Recipe | Fixed) -> Correction:
    """Return the correction that the settings give this frame by itself, without its shoot."""
    if isinstance(settings, Fixed):
        return casts.fixed_correction(settings, cast.header)
    return casts.plan([cast], settings)[0]


def _still_holds(job: GradeJob) -> bool:
    if job.known_output_sha256 is None or not os.path.isfile(job.target):  # noqa: PTH113
        return False
    return files.hash_file(job.target) == job.known_output_sha256 and files.hash_file(job.path) == job.sha256


def _check_unchanged(job: GradeJob, sha256: str | None) -> None:
    if job.sha256 is not None and sha256 != job.sha256:
        raise DamagedFile("the file changed after it was measured", path=job.path, hint="run the batch again")


def _make_folder(target: str) -> None:
    folder = os.path.dirname(target) or "."  # noqa: PTH120
    try:
        os.makedirs(folder, exist_ok=True)  # noqa: PTH103
    except OSError as error:
        raise WriteFailed(
            f"the output folder cannot be made ({error.strerror or error})",
            path=folder,
            hint="choose another --out",
        ) from error
