"""The passes over many files: measure, plan, grade.  The one place where errors become records.

``Batch`` keeps one run together; `neutralise`, `apply` and `measure_files` are the calls for scripts.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import asdict, dataclass, field
from pathlib import Path, PurePath
from typing import Any, Self

from grader import cast as casts
from grader import files, jobs
from grader.colour.difference import grey_delta_e_2000
from grader.errors import GraderError, PresetError, WriteFailed
from grader.log import (
    Line,
    Log,
    cast_from_line,
    correction_from_line,
    graded_line,
    measured_line,
    planned_line,
    run_line,
)
from grader.model import Cast, Correction, Fixed, ReadLimits, Recipe
from grader.preset import Preset, make_preset
from grader.run import Run, now, open_earlier
from grader.shootfile import known_lights, read_stretches, resolve_against, resolve_toward
from grader.sources import RAW_SUFFIXES, Source, check_target_folder, find_sources, name_targets
from grader.workers import Outcome, Pool, Stop
from grader.workers import run as run_jobs

LOG_NAME = "grader-log.jsonl"
Paths = Iterable[str | os.PathLike[str]]
Progress = Callable[[str, int, int], None]
"""Called with the stage (``measure`` or ``grade``), frames done, frames in all."""


@dataclass(frozen=True, slots=True)
class Options:
    """How a batch is run; what it does to the pictures is in its preset."""

    recurse: bool = False
    pool: Pool = field(default_factory=Pool)
    limits: ReadLimits = field(default_factory=ReadLimits)
    log: str | os.PathLike[str] | None = None
    overwrite: bool = False
    resume: bool = False
    dry_run: bool = False
    clocks: Mapping[str, float] = field(default_factory=dict)
    """Seconds to add to the clock of a body."""
    grey_cards: tuple[str, ...] = ()
    """``FRAME@X,Y,W,H``: a known neutral in a frame."""
    stretches: str | os.PathLike[str] | None = None
    """CSV of first file, last file: boundaries fixed by a person."""
    regrade_deg: float = 0.2
    """On resume, a finished frame is graded again when its correction moved by more than this angle."""
    against: str | os.PathLike[str] | None = None
    """A frame or fixed preset whose light every frame is compared with."""
    command: tuple[str, ...] = ()


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
    WriteFailed
        The log cannot be written.
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


class Batch:
    """One run over many files; use as a context manager, then iterate `grade` or `measure`.

    After the iteration ``summary`` holds the closing line and ``log_path`` the log.
    """

    def __init__(
        self,
        paths: Paths,
        out: str | os.PathLike[str] | None,
        *,
        preset: Preset | Recipe | Fixed | None = None,
        options: Options | None = None,
        progress: Progress | None = None,
        stop: Stop | None = None,
    ) -> None:
        self.options = options or Options()
        self.stop = stop or Stop()
        self.out = None if out is None else Path(out)
        self.log_path = _log_path(self.out, self.options)
        self.summary: Line = {}
        self._progress = progress or (lambda _stage, _done, _total: None)
        self.preset = _resolved(preset, self.options.limits)
        self.settings = self.preset.settings
        self.against = resolve_against(self.options.against, self.options.limits)
        paths = list(paths)
        if self.out is not None:
            check_target_folder(paths, self.out)
        self.sources, self.missing = find_sources(
            paths, recurse=self.options.recurse, leave_out=[] if self.out is None else [self.out]
        )
        self.targets = self._name_targets()
        self.casts: dict[str, Cast] = {}
        self.corrections: dict[str, Correction] = {}
        self._measured: dict[str, Line] = {}
        self._lock: Any = None
        self.run: Run

    def __enter__(self) -> Self:
        """Take the target folder and open the log."""
        if self.out is not None and not self.options.dry_run:
            self._lock = _take(self.out)
        try:
            log = None if self.options.dry_run else self.log_path
            earlier = open_earlier(log, resume=self.options.resume, overwrite=self.options.overwrite)
            self._check_existing(earlier)
            self.run = Run(log, self._run_line(), earlier)
        except BaseException:
            self._release()
            raise
        return self

    def __exit__(self, *_: object) -> None:
        """Close the log and leave the target folder."""
        self.run.close()
        self._release()

    # ------------------------------------------------------------ passes

    def grade(self) -> Iterator[Line]:
        """Do all passes; yield the final line of each frame."""
        yield from self._fail_missing()
        if self._one_decode():
            yield from self._grade_each_by_itself()
        else:
            yield from self._measure_all()
            if not self.stop.asked:
                planned = self._plan()
                yield from planned if self.options.dry_run else self._grade_planned(planned)
        self._close()

    def measure(self) -> Iterator[Line]:
        """Do pass 1 and the plan; yield the line of each frame: failed, or planned."""
        yield from self._fail_missing()
        yield from self._measure_all()
        if not self.stop.asked:
            yield from self._plan()
        self._close()

    def _fail_missing(self) -> Iterator[Line]:
        for error in self.missing:
            yield self.run.fail(str(error.path), error)

    def _measure_all(self) -> Iterator[Line]:
        recipe = self.settings if isinstance(self.settings, Recipe) else Recipe()
        work = [
            jobs.MeasureJob(source.path, recipe, self.options.limits, self._known_sha256(source))
            for source in self.sources
        ]
        for outcome in self._run_jobs("measure", jobs.measure_file, work):
            path = outcome.job.path
            try:
                if outcome.error is not None:
                    raise outcome.error
                self._note_measured(path, outcome.result)
            except GraderError as error:
                yield self.run.fail(path, error)

    def _note_measured(self, path: str, measured: jobs.Measured | None) -> None:
        assert measured is not None  # noqa: S101 - an outcome without an error has a result
        if measured.cast is None:
            line = self.run.earlier_line(path, "measured")
            assert line is not None  # noqa: S101 - it gave the hash that still holds
            self.casts[path] = cast_from_line(line)
        else:
            self.casts[path] = measured.cast
            line = measured_line(path, measured.cast, seconds=round(measured.seconds, 4))
        self._measured[path] = line
        self.run.add(line)

    def _plan(self) -> list[Line]:
        paths = [source.path for source in self.sources if source.path in self.casts]
        found = [self.casts[path] for path in paths]
        if isinstance(self.settings, Fixed):
            corrections = [casts.fixed_correction(self.settings, cast.header) for cast in found]
        else:
            corrections = casts.plan(
                found,
                self.settings,
                stretches=read_stretches(self.options.stretches),
                pins=known_lights(self.options.grey_cards, self.options.limits),
                clocks=self.options.clocks,
            )
        self.corrections = dict(zip(paths, corrections, strict=True))
        return [self._planned(path) for path in paths]

    def _planned(self, file: str) -> Line:
        correction = self.corrections[file]
        facts = {} if self.out is None else {"output": {"file": self.targets[file].as_posix()}}
        cast = self.casts[file]
        line = planned_line(self._measured[file], correction, residual=_residual(cast, correction), **facts)
        if correction.from_xy is not None:
            multipliers = files.sensor_multipliers(cast.header, correction.from_xy)
            line["correction"]["sensor_multipliers"] = None if multipliers is None else multipliers.tolist()
        return self.run.add(line)

    def _grade_planned(self, planned: list[Line]) -> Iterator[Line]:
        function = jobs.rewrite_file if self.settings.output.format == "dng" else jobs.grade_file
        lines = {line["file"]: line for line in planned}
        work = [self._grade_job(line["file"], self.corrections[line["file"]], line) for line in planned]
        for outcome in self._run_jobs("grade", function, work):
            path = outcome.job.path
            if outcome.error is not None:
                yield self.run.fail(path, outcome.error, base=lines[path])
            elif outcome.result is not None:
                yield self._graded(path, lines[path], outcome.result)

    def _grade_each_by_itself(self) -> Iterator[Line]:
        work = [self._grade_job(source.path, None, None) for source in self.sources]
        for outcome in self._run_jobs("grade", jobs.grade_file, work):
            path, result = outcome.job.path, outcome.result
            if outcome.error is not None:
                yield self.run.fail(path, outcome.error)
                continue
            assert result is not None  # noqa: S101 - an outcome without an error has a result
            if result.written is None:
                yield self._graded(path, {}, result)
                continue
            assert result.cast is not None  # noqa: S101 - this pass measures
            assert result.correction is not None  # noqa: S101
            self.casts[path], self.corrections[path] = result.cast, result.correction
            self._measured[path] = self.run.add(measured_line(path, result.cast))
            yield self._graded(path, self._planned(path), result)

    def _graded(self, path: str, planned: Line, result: jobs.Graded) -> Line:
        if result.written is None:
            line = self.run.earlier_line(path, "graded")
            assert line is not None  # noqa: S101 - it gave the hash that still holds
            return self.run.add(line)
        line = graded_line(planned, result.written, result.counts, seconds=round(result.seconds, 4))
        line["output"]["file"] = self.targets[path].as_posix()
        return self.run.add(line)

    def records(self) -> list[Line]:
        """Return the run line, the line that stands for each frame, and the summary."""
        return [self.run.first, *self.run.standing.values(), self.summary]

    # ------------------------------------------------------------ jobs

    def _run_jobs(
        self, stage: str, function: Callable[[Any], Any], work: list[Any]
    ) -> Iterator[Outcome[Any, Any]]:
        self._progress(stage, 0, len(work))
        for done, outcome in enumerate(run_jobs(function, work, self.options.pool, self.stop), start=1):
            self._progress(stage, done, len(work))
            yield outcome

    def _one_decode(self) -> bool:
        """Whether no frame's correction depends on another, so that each can be done in one go."""
        alone = isinstance(self.settings, Fixed) or not self.settings.pooling
        return alone and not self.options.dry_run and self.settings.output.format != "dng"

    def _known_sha256(self, source: Source) -> str | None:
        line = self.run.earlier_line(source.path, "measured")
        return None if line is None or not self._same_version() else line.get("sha256")

    def _grade_job(self, path: str, correction: Correction | None, planned: Line | None) -> jobs.GradeJob:
        earlier = self._finished_before(path, correction)
        return jobs.GradeJob(
            path=path,
            target=str(self._target(path)),
            settings=self.settings,
            limits=self.options.limits,
            sha256=earlier["sha256"]
            if earlier is not None
            else None
            if planned is None
            else planned["sha256"],
            correction=correction,
            overwrite=self.options.overwrite or self.run.earlier is not None,
            known_output_sha256=None if earlier is None else earlier["output"]["sha256"],
        )

    def _finished_before(self, path: str, correction: Correction | None) -> Line | None:
        """Return the line of an output that an earlier run wrote as this one would."""
        line = self.run.earlier_line(path, "graded")
        if line is None or not self._same_version() or not self._same_preset():
            return None
        if line["output"]["file"] != self.targets[path].as_posix():
            return None
        if correction is None:
            return line
        moved = casts.correction_moved(correction_from_line(line), correction)
        return line if moved <= self.options.regrade_deg else None

    def _same_version(self) -> bool:
        earlier = self.run.earlier
        return earlier is not None and earlier.run.get("version") == self.run.first["version"]

    def _same_preset(self) -> bool:
        earlier = self.run.earlier
        return earlier is not None and earlier.run.get("preset", {}).get("digest") == self.preset.digest

    # ------------------------------------------------------------ targets, log, end

    def _name_targets(self) -> dict[str, PurePath]:
        if self.out is None:
            return {}
        suffixes = [_suffix(source, self.settings.output.format) for source in self.sources]
        return {s.path: t for s, t in zip(self.sources, name_targets(self.sources, suffixes), strict=True)}

    def _target(self, path: str) -> Path:
        assert self.out is not None  # noqa: S101 - graded frames have a folder
        return self.out / self.targets[path]

    def _check_existing(self, earlier: Log | None) -> None:
        """Refuse to begin where a file stands in the way that is not an earlier run's."""
        if self.out is None or self.options.overwrite or earlier is not None:
            return
        for target in self.targets.values():
            if os.path.lexists(self.out / target):
                raise PresetError(
                    "the output is there already",
                    path=self.out / target,
                    hint="choose another --out folder, or replace it with --overwrite",
                )

    def _run_line(self) -> Line:
        from grader import __version__  # noqa: PLC0415 - the package is complete by now

        preset = {"name": self.preset.name, "kind": self.preset.kind, "digest": self.preset.digest}
        return run_line(
            version=__version__,
            command=self.options.command,
            preset=preset | {"settings": asdict(self.settings)},
            started=now(),
            out=None if self.out is None else str(self.out),
        )

    def _close(self) -> None:
        shoot = casts.shoot_summary(
            self.casts,
            self.corrections,
            self.settings,
            clocks=self.options.clocks,
            against=self.against,
        )
        self.summary = self.run.summarise(interrupted=self.stop.asked, **shoot)
        self.run.finish(self.summary, [source.path for source in self.sources])

    def _release(self) -> None:
        if self._lock is not None:
            self._lock.release()


def _resolved(preset: Preset | Recipe | Fixed | None, limits: ReadLimits) -> Preset:
    """Return the preset with its aim in figures, whatever the caller gave."""
    if not isinstance(preset, Preset):
        return make_preset("unsaved", resolve_toward(Recipe() if preset is None else preset, limits))
    settings = resolve_toward(preset.settings, limits)
    return preset if settings is preset.settings else make_preset(preset.name, settings, preset.description)


def _residual(cast: Cast, correction: Correction) -> dict[str, float] | None:
    """Return the cast that the frame's own measurement would still show after its correction."""
    left = casts.residual(cast, correction)
    if left is None or cast.white_xy is None:
        return None
    xy = casts.corrected_xy(cast.white_xy, cast.header, correction)
    return {"yellow_blue": left[0], "green_magenta": left[1], "delta_e_2000": float(grey_delta_e_2000(xy))}


def _log_path(out: Path | None, options: Options) -> Path | None:
    if options.log is not None:
        return Path(options.log)
    return None if out is None else out / LOG_NAME


def _suffix(source: Source, output_format: str) -> str:
    own = source.relative.suffix
    raw = own.lower() in RAW_SUFFIXES
    if output_format == "same":
        return ".tif" if raw else own
    return {"tiff": ".tif", "jpeg": ".jpg", "png": ".png", "dng": own}[output_format]


def _take(out: Path) -> Any:
    """Take the target folder for this run: two runs into one folder exclude each other."""
    from filelock import FileLock, Timeout  # noqa: PLC0415 - only where pictures are written

    try:
        out.mkdir(parents=True, exist_ok=True)
        lock = FileLock(out / ".grader.lock")
        lock.acquire(timeout=0)
    except Timeout as error:
        raise PresetError(
            "another run is writing into this folder", path=out, hint="wait for it, or choose another --out"
        ) from error
    except OSError as error:
        raise WriteFailed(
            f"the output folder cannot be written ({error.strerror or error})",
            path=out,
            hint="choose another --out",
        ) from error
    return lock
