"""The calls over many files: measure, plan, grade.

``Batch`` (in `grader.passes`) keeps one run together; `neutralise`, `apply` and `measure_files` are the calls
for scripts.
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from typing import Any

from grader.log import Line
from grader.model import Fixed, Recipe
from grader.options import Options, Paths, Progress
from grader.passes import Batch
from grader.preset import Preset
from grader.workers import Stop

__all__ = ["Batch", "Options", "apply", "measure_files", "neutralise"]


def neutralise(
    paths: Paths,
    out: str | os.PathLike[str],
    *,
    preset: Preset | Recipe | Fixed | None = None,
    options: Options | None = None,
    progress: Progress | None = None,
    stop: Stop | None = None,
) -> Iterator[Line]:
    """Measure, plan and grade a batch; yield each frame's final log line as it ends.

    Parameters
    ----------
    paths : iterable of path-like
        Files, folders, globs.
    out : path-like
        Folder for graded files and the log; originals are never touched.
    preset : Preset, Recipe or Fixed, optional
        What to do; default a full correction to neutral.
    options : Options, optional
        How to run; by default in this process (``Pool(processes=4)`` computes in four).
    progress : callable, optional
        Called as frames end with ``(stage, done, total)``.
    stop : Stop, optional
        Ask it from another thread or a signal handler to end the batch early, resumable.

    Yields
    ------
    dict
        A frame line as in ``docs/log.schema.json``, status graded, failed or (dry run) planned.

    Raises
    ------
    PresetError
        The settings or the target folder cannot be used.
    DiskFull, WriteFailed
        The log or the target folder cannot be written (any more).
    MissingFile
        The folder of the originals is gone.
    WorkerFailed
        No worker can be started, or the cluster is gone.

    Notes
    -----
    After any of these, and after a kill, the same call with ``Options(resume=True)`` goes on.
    """
    with Batch(paths, out, preset=preset, options=options, progress=progress, stop=stop) as batch:
        yield from batch.grade()


def apply(
    preset: Preset | Recipe | Fixed, paths: Paths, out: str | os.PathLike[str], **how: Any
) -> Iterator[Line]:
    """Apply a saved preset to a batch; the arguments after ``out`` are those of `neutralise`."""
    return neutralise(paths, out, preset=preset, **how)


def measure_files(
    paths: Paths,
    *,
    preset: Preset | Recipe | Fixed | None = None,
    options: Options | None = None,
    progress: Progress | None = None,
    stop: Stop | None = None,
) -> Iterator[Line]:
    """Measure and plan a batch without writing pictures; yield each frame's planned line."""
    with Batch(paths, None, preset=preset, options=options, progress=progress, stop=stop) as batch:
        yield from batch.measure()
