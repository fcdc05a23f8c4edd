"""``grader check``: read a finished run again and tell what differs from its log."""

from __future__ import annotations

import os
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path, PurePath

from grader import cast as casts
from grader import files, room
from grader.colour.difference import grey_delta_e_2000
from grader.errors import DamagedFile, GraderError, MissingFile
from grader.log import Line, Log, correction_from_line, read_log, written_from_line
from grader.model import XY, ReadLimits, Recipe, Written
from grader.resume import is_below
from grader.workers import Pool, Stop, run


@dataclass(frozen=True, slots=True)
class CheckJob:
    """One output to re-read."""

    path: str
    written: Written
    limits: ReadLimits
    source: str
    source_sha256: str | None
    aim_xy: XY | None
    """Where its correction puts a neutral."""
    tolerance_delta_e_2000: float | None


@dataclass(frozen=True, slots=True)
class Finding:
    """What re-reading one frame's output showed; ``problem`` is None where all is as logged.

    ``residual_delta_e_2000`` is how far the cast measured in the written file lies from where its correction
    aims, as Delta E 2000 of a mid grey: an estimate from a picture like any other.
    """

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
        How far the cast measured in an output may lie from where its correction aims, as Delta E 2000 of a
        mid grey; None only reports it.
    pool : Pool, optional
        Where to compute; default this process.

    Yields
    ------
    Finding
        One for each frame of the log that should have an output, and one for a run that was not finished.

    Raises
    ------
    MissingFile, DamagedFile
        There is no readable log.
    """
    root = Path(folder)
    place = root / "grader-log.jsonl" if log is None else Path(log)
    read = read_log(place)
    yield from _unfinished(read, place)
    limits = limits or ReadLimits()
    jobs: list[CheckJob] = []
    for file, by_status in read.lines.items():
        status, line = next(reversed(by_status.items()))
        if status not in ("graded", "failed", "skipped"):
            yield Finding(file, "", f"the frame is only {status}; go on with --resume")
        elif status == "graded":
            try:
                jobs.append(_job(root, file, line, limits, tolerance_delta_e_2000))
            except GraderError as error:
                yield Finding(file, "", error.message)
    pool, _ = room.make_room(pool or Pool(), [job.path for job in jobs], limits, None, None)
    for outcome in run(check_file, jobs, pool, stop):
        if outcome.error is not None:
            yield Finding(outcome.job.source, outcome.job.path, str(outcome.error.message or outcome.error))
        elif outcome.result is not None:
            yield outcome.result


def _unfinished(log: Log, place: Path) -> Iterator[Finding]:
    if log.torn or log.summary is None or log.summary.get("interrupted"):
        yield Finding("", str(place), "the run was not finished; go on with --resume")


def _job(root: Path, file: str, line: Line, limits: ReadLimits, tolerance: float | None) -> CheckJob:
    written, _ = written_from_line(line)
    name = PurePath(written.file)
    if not is_below(name):
        raise DamagedFile(f"the log names an output outside its folder: {written.file}")
    sha256 = line.get("sha256")
    return CheckJob(
        path=str(root / name),
        written=written,
        limits=limits,
        source=file,
        source_sha256=sha256 if isinstance(sha256, str) else None,
        aim_xy=_aim(line),
        tolerance_delta_e_2000=tolerance,
    )


def _aim(line: Line) -> XY | None:
    """Return where the frame's correction puts a neutral; None where nothing was corrected."""
    try:
        correction = correction_from_line(line)
    except DamagedFile:
        return None
    return None if correction.from_xy is None else correction.toward_xy


def check_file(job: CheckJob) -> Finding:
    """Re-read one output (in a worker)."""
    if not os.path.lexists(job.path):
        raise MissingFile("the output is gone", path=job.path, hint="grade it again with --resume")
    if os.path.islink(job.path):  # noqa: PTH114 - names may hold bytes that are no UTF-8
        return Finding(job.source, job.path, "the output is a link, not the file that was written")
    if files.hash_file(job.path) != job.written.sha256:
        return Finding(job.source, job.path, "the output changed after it was written")
    if job.source_sha256 and os.path.isfile(job.source) and files.hash_file(job.source) != job.source_sha256:  # noqa: PTH113
        return Finding(job.source, job.path, "the original changed after it was measured")
    files.read(job.path, job.limits)
    if job.written.format == "dng" or job.aim_xy is None:
        return Finding(
            job.source, job.path, None
        )  # a raw copy shows its light at the daylight setting, as before
    return _measured(job, job.aim_xy)


def _measured(job: CheckJob, aim_xy: XY) -> Finding:
    """Measure the cast in the written file and hold it against the aim."""
    cast = casts.measure(files.read_reduced(job.path, job.limits), Recipe())
    if cast.white_xy is None:
        return Finding(job.source, job.path, None)
    residual, limit = grey_delta_e_2000(cast.white_xy, aim_xy), job.tolerance_delta_e_2000
    beyond = limit is not None and residual > limit
    problem = f"residual cast Delta E 2000 {residual:.2f} is beyond {limit:g}" if beyond else None
    return Finding(job.source, job.path, problem, residual)
