"""``grader check``: read a finished run again and tell what differs from its log."""

from __future__ import annotations

import os
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from grader import cast as casts
from grader import files
from grader.errors import DamagedFile, GraderError, MissingFile
from grader.log import Line, read_log
from grader.model import ReadLimits, Recipe
from grader.workers import Pool, Stop, run


@dataclass(frozen=True, slots=True)
class CheckJob:
    """One output to re-read."""

    path: str
    sha256: str
    limits: ReadLimits
    source: str
    source_sha256: str | None
    recipe: Recipe
    tolerance_delta_e_2000: float | None


@dataclass(frozen=True, slots=True)
class Finding:
    """What re-reading one frame's output showed; ``problem`` is None where all is as logged."""

    file: str
    output: str
    problem: str | None
    residual_delta_e_2000: float | None = None


def check(
    folder: str | os.PathLike[str],
    *,
    log: str | os.PathLike[str] | None = None,
    tolerance_delta_e_2000: float | None = None,
    pool: Pool | None = None,
    limits: ReadLimits | None = None,
    stop: Stop | None = None,
) -> Iterator[Finding]:
    """Re-read a finished run: every output there, its hash as logged, decodable, its cast re-measured.

    Parameters
    ----------
    folder : path-like
        The run's output folder.
    log : path-like, optional
        Its log, when it lies elsewhere.
    tolerance_delta_e_2000 : float, optional
        Largest residual cast of an output, as Delta E 2000 of a mid grey; None only reports it.
    pool : Pool, optional
        Where to compute; default this process.

    Yields
    ------
    Finding
        One for each frame of the log that should have an output.
    """
    root = Path(folder)
    read = read_log(root / "grader-log.jsonl" if log is None else log)
    limits = limits or ReadLimits()
    jobs: list[CheckJob] = []
    for line in read.latest():
        if line["status"] == "graded":
            jobs.append(_job(root, line, limits, tolerance_delta_e_2000))
        elif line["status"] != "failed":
            yield Finding(line["file"], "", f"the frame is only {line['status']}; go on with --resume")
    for outcome in run(check_file, jobs, pool or Pool(), stop):
        if outcome.error is not None:
            yield Finding(outcome.job.source, outcome.job.path, str(outcome.error.message or outcome.error))
        elif outcome.result is not None:
            yield outcome.result


def _job(root: Path, line: Line, limits: ReadLimits, tolerance: float | None) -> CheckJob:
    output: dict[str, Any] = line["output"]
    name = Path(output["file"])
    if name.is_absolute() or ".." in name.parts:
        raise DamagedFile("the log names an output outside its folder", path=str(name))
    return CheckJob(
        path=str(root / name),
        sha256=output["sha256"],
        limits=limits,
        source=line["file"],
        source_sha256=line.get("sha256"),
        recipe=Recipe(),
        tolerance_delta_e_2000=tolerance,
    )


def check_file(job: CheckJob) -> Finding:
    """Re-read one output (in a worker)."""
    if not os.path.lexists(job.path):
        raise MissingFile("the output is gone", path=job.path, hint="grade it again with --resume")
    if files.hash_file(job.path) != job.sha256:
        return Finding(job.source, job.path, "the output changed after it was written")
    if job.source_sha256 and os.path.isfile(job.source) and files.hash_file(job.source) != job.source_sha256:  # noqa: PTH113
        return Finding(job.source, job.path, "the original changed after it was measured")
    files.read(job.path, job.limits)
    residual = _residual(job)
    limit = job.tolerance_delta_e_2000
    beyond = residual is not None and limit is not None and residual > limit
    problem = f"residual cast Delta E 2000 {residual:.2f} is beyond {limit:g}" if beyond else None
    return Finding(job.source, job.path, problem, residual)


def _residual(job: CheckJob) -> float | None:
    try:
        return casts.measure(files.read_reduced(job.path, job.limits), job.recipe).delta_e_2000
    except GraderError:
        return None
