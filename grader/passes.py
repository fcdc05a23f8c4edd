"""One run over many files: measure, plan, grade; what comes of each frame becomes a line of the log."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from dataclasses import asdict, replace
from pathlib import Path
from typing import Any, Self

from grader import cast as casts
from grader import jobs, room
from grader.errors import GraderError, MissingFile, PresetError
from grader.halt import cause_to_halt, told_how_far
from grader.log import Line, graded_line, measured_line, run_line
from grader.model import Cast, Correction, Fixed, ReadLimits, Recipe
from grader.options import Options, Paths, Progress
from grader.preset import Preset, make_preset
from grader.records import graded_before_record, planned_record
from grader.resume import Earlier, Finished
from grader.run import Run, in_order, now, open_earlier
from grader.shootfile import known_lights, read_stretches, resolve_against, resolve_toward
from grader.sources import check_target_folder, find_sources, targets_for
from grader.target import Target, has_arrived, written_elsewhere
from grader.workers import Outcome, Pool, Staff, Stop


class Batch:
    """One run over many files; use as a context manager, then iterate `grade` or `measure`.

    After the iteration ``summary`` holds the closing line and ``log_path`` the log; ``notes`` holds what a
    person should know before it.
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
        self.log_path = self.options.log_path(self.out)
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
        self.targets = {} if self.out is None else targets_for(self.sources, self.settings.output.format)
        self.notes: list[str] = []
        self.casts: dict[str, Cast] = {}
        self.corrections: dict[str, Correction] = {}
        self.run: Run
        self._measured: dict[str, Line] = {}
        self._target = None if self.out is None or self.options.dry_run else Target(self.out)
        self._earlier: Earlier
        self._pool: Pool
        self._staff: Staff
        self._halted: GraderError | None = None

    def __enter__(self) -> Self:
        """Take the target folder and open the log."""
        try:
            if self._target is not None:
                self._target.take()
                self._target.clean(self.targets.values())
            log = None if self.options.dry_run else self.log_path
            earlier = open_earlier(log, resume=self.options.resume, overwrite=self.options.overwrite)
            first = self._run_line()
            self._earlier = Earlier(earlier, first, [source.path for source in self.sources])
            self._check_existing()
            self._make_room()
            self.run = Run(log, first, earlier, through_link=self.options.log is not None)
        except BaseException:
            self._release()
            raise
        return self

    def __exit__(self, *_: object) -> None:
        """End the workers, close the log and leave the target folder."""
        try:
            self._staff.close()
            if self._target is not None:
                self._target.clean(self.targets.values())
            self.run.close()
        finally:
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
        yield from self._close()

    def measure(self) -> Iterator[Line]:
        """Do pass 1 and the plan; yield the line of each frame: failed, or planned."""
        yield from self._fail_missing()
        yield from self._measure_all()
        if not self.stop.asked:
            yield from self._plan()
        yield from self._close()

    def _fail_missing(self) -> Iterator[Line]:
        for error in self.missing:
            yield self.run.fail(str(error.path), error)

    def _measure_all(self) -> Iterator[Line]:
        recipe = self.settings if isinstance(self.settings, Recipe) else Recipe()
        known: dict[str, Cast] = {}
        work = []
        for path in (source.path for source in self.sources):
            cast = self._earlier.cast(path, recipe)
            given_up = self._earlier.given_up(path)
            if cast is not None:
                known[path] = cast
            elif given_up is not None:
                yield from self._failed(path, given_up)
                continue
            sha256 = None if cast is None else cast.header.sha256
            work.append(jobs.MeasureJob(path, recipe, self.options.limits, sha256, self._cwd()))
        for outcome in self._run_jobs("measure", jobs.measure_file, work):
            path = outcome.job.path
            if outcome.error is not None:
                yield from self._failed(path, outcome.error)
            elif outcome.result is not None:
                self._note_measured(path, outcome.result, known.get(path))

    def _note_measured(self, path: str, result: jobs.Measured | jobs.Graded, known: Cast | None) -> None:
        """Take the light of a file: as it was measured now, or before, when the log has its line already."""
        if result.cast is not None:
            self.casts[path] = result.cast
            line = measured_line(path, result.cast, seconds=round(result.seconds, 4))
            self._measured[path] = self.run.add(line)
        elif known is not None:
            self.casts[path] = known
            line = measured_line(path, known)
            self._measured[path] = self.run.keep(line) if self._earlier.holds(line) else self.run.add(line)

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

    def _planned(self, path: str) -> Line:
        return self.run.add(
            planned_record(
                self._measured[path], self.casts[path], self.corrections[path], self._output_name(path)
            )
        )

    def _grade_planned(self, planned: list[Line]) -> Iterator[Line]:
        self.run.sync()
        lines = {line["file"]: line for line in planned}
        finished: dict[str, Finished | None] = {}
        work = []
        for path, line in lines.items():
            correction, sha256 = self.corrections[path], line["sha256"]
            finished[path] = self._finished(path, correction, sha256)
            given_up = self._earlier.given_up(path)
            if given_up is not None:
                yield from self._failed(path, given_up, base=line)
                continue
            work.append(replace(self._grade_job(path, finished[path]), sha256=sha256, correction=correction))
        function = jobs.rewrite_file if self.settings.output.format == "dng" else jobs.grade_file
        for outcome in self._run_jobs("grade", function, work):
            path = outcome.job.path
            if outcome.error is not None:
                yield from self._failed(path, outcome.error, base=lines[path])
            elif outcome.result is not None:
                yield self._graded(path, lines[path], outcome.result, finished[path])

    def _grade_each_by_itself(self) -> Iterator[Line]:
        recipe = self.settings if isinstance(self.settings, Recipe) else Recipe()
        known: dict[str, tuple[Cast, Finished]] = {}
        work = []
        for path in (source.path for source in self.sources):
            cast, finished = self._earlier.cast(path, recipe), None
            given_up = self._earlier.given_up(path)
            if given_up is not None:
                yield from self._failed(path, given_up)
                continue
            if cast is not None:
                finished = self._finished(path, jobs.own_correction(cast, self.settings), cast.header.sha256)
                if finished is not None:
                    known[path] = cast, finished
            self.run.announce(path, self.targets[path].as_posix())
            sha256 = None if finished is None else finished.sha256
            work.append(replace(self._grade_job(path, finished), known_sha256=sha256))
        self.run.sync()
        for outcome in self._run_jobs("grade", jobs.grade_file, work):
            path, result = outcome.job.path, outcome.result
            if outcome.error is not None:
                yield from self._failed(path, outcome.error)
            elif result is not None:
                cast, finished = known.get(path, (None, None))
                self._note_measured(path, result, cast)
                own = result.correction or jobs.own_correction(self.casts[path], self.settings)
                self.corrections[path] = own
                yield self._graded(path, self._planned(path), result, finished)

    def _graded(self, path: str, planned: Line, result: jobs.Graded, finished: Finished | None) -> Line:
        if result.written is None and finished is not None:
            cast, correction = self.casts[path], self.corrections[path]
            return self.run.add(
                graded_before_record(self._measured[path], cast, correction, finished, planned)
            )
        assert result.written is not None  # noqa: S101 - only a finished output is left as it is
        if self._pool.cluster is not None and not has_arrived(
            self._folder() / self.targets[path], result.written.bytes
        ):
            return self.run.fail(path, written_elsewhere(), base=planned)
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
        """Run the jobs; a file that cost a worker before is tried by itself."""
        self._progress(stage, 0, len(work))
        outcomes = self._staff.run(function, work, lambda job: self._earlier.tries(job.path) > 0)
        for done, outcome in enumerate(outcomes, start=1):
            self._progress(stage, done, len(work))
            yield outcome

    def _failed(self, path: str, error: GraderError, *, base: Line | None = None) -> Iterator[Line]:
        """Write that a frame failed; or halt the run, where the cause is not the frame's and will stay."""
        halting = cause_to_halt(error, path, self._target)
        if halting is None:
            yield self.run.fail(path, error, base=base, **self._earlier.tried(path, error))
            return
        self._halted = self._halted or halting
        if not self.stop.asked:
            self.stop.ask()

    def _one_decode(self) -> bool:
        """Whether no frame's correction depends on another, so that each can be done in one go."""
        alone = isinstance(self.settings, Fixed) or not self.settings.pooling
        return alone and not self.options.dry_run and self.settings.output.format != "dng"

    def _grade_job(self, path: str, finished: Finished | None) -> jobs.GradeJob:
        target = self.targets[path]
        # A frame whose worker was lost is graded again elsewhere in a cluster, perhaps after it was written.
        again = self._pool.cluster is not None or self._earlier.owns(target.as_posix())
        return jobs.GradeJob(
            path=path,
            target=str(self._folder() / target),
            settings=self.settings,
            limits=self.options.limits,
            overwrite=self.options.overwrite or again,
            known_output_sha256=None if finished is None else finished.written.sha256,
            root=str(self._folder()),
            cwd=self._cwd(),
        )

    def _finished(self, path: str, correction: Correction, sha256: str | None) -> Finished | None:
        """Return the output that an earlier run wrote of this source as this one would, if there is one."""
        found = self._earlier.finished(path, self.targets[path].as_posix())
        if found is None or found.sha256 != sha256:
            return None
        moved = casts.correction_moved(found.correction, correction)
        return found if moved <= self.options.regrade_deg else None

    def _cwd(self) -> str:
        """Return what relative paths are relative to, for workers that may have been started elsewhere."""
        return os.getcwd() if self.options.pool.cluster is not None else ""  # noqa: PTH109

    # ------------------------------------------------------------ targets, log, end

    def _output_name(self, path: str) -> str | None:
        return None if self.out is None else self.targets[path].as_posix()

    def _folder(self) -> Path:
        assert self.out is not None  # noqa: S101 - graded frames have a folder
        return self.out

    def _check_existing(self) -> None:
        """Refuse to begin where a file stands in the way that no earlier run of this log set out to write."""
        if self.out is None:
            return
        names = {path: target.as_posix() for path, target in self.targets.items()}
        for name in names.values():
            if self.options.overwrite or self._earlier.owns(name) or not os.path.lexists(self.out / name):
                continue
            raise PresetError(
                "the output is there already",
                path=self.out / name,
                hint="choose another --out folder, or replace it with --overwrite",
            )
        old = self._earlier.superseded(self.out, names)
        if old:
            some = ", ".join(old[:3]) + (", ..." if len(old) > 3 else "")
            self.notes.append(f"{len(old)} outputs of an earlier run get other names now and stay: {some}")

    def _make_room(self) -> None:
        """Fit the workers to the memory, and foresee a disk that is too small."""
        paths = [source.path for source in self.sources if not self._is_done(source.path)]
        target, pool = self._target, self.options.pool
        output = None if target is None else self.settings.output
        free = None if target is None else target.free_bytes()
        pool, notes = room.make_room(pool, paths, self.options.limits, output, free)
        if pool.cluster is not None:
            out = None if target is None else str(target.folder)
            pool = replace(pool, must_write=out, must_read=paths[0] if paths else None)
        self.notes += notes
        self._pool, self._staff = pool, Staff(pool, lambda: room.alone(pool), self.stop)

    def _is_done(self, path: str) -> bool:
        return (
            self.out is not None and self._earlier.finished(path, self.targets[path].as_posix()) is not None
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

    def _close(self) -> Iterator[Line]:
        """Write the summary; raise what halted the run."""
        yield from self._account_for_others()
        order = [source.path for source in self.sources]
        shoot = casts.shoot_summary(
            {path: self.casts[path] for path in in_order(self.casts, order)},
            {path: self.corrections[path] for path in in_order(self.corrections, order)},
            self.settings,
            clocks=self.options.clocks,
            against=self.against,
        )
        self.summary = self.run.summarise(order, interrupted=self.stop.asked, **shoot)
        try:
            self.run.finish(self.summary, order, leave_out=self._earlier.left_out)
        finally:
            if self._halted is not None:
                done = self.summary["measured" if self.out is None else "graded"]
                raise told_how_far(self._halted, done, len(self.sources))

    def _account_for_others(self) -> Iterator[Line]:
        """Let the earlier frames that were not named this time stand as they are; tell those that are gone."""
        for file, line in self._earlier.others(
            {source.path for source in self.sources} | set(self.run.standing)
        ):
            if line is not None:
                self.run.keep(line)
            elif not self.stop.asked:
                gone = MissingFile("it was part of this run before, and is gone")
                yield self.run.fail(file, gone, status="skipped")

    def _release(self) -> None:
        if self._target is not None:
            self._target.release()


def _resolved(preset: Preset | Recipe | Fixed | None, limits: ReadLimits) -> Preset:
    """Return the preset with its aim in figures, whatever the caller gave."""
    if not isinstance(preset, Preset):
        return make_preset("unsaved", resolve_toward(Recipe() if preset is None else preset, limits))
    settings = resolve_toward(preset.settings, limits)
    return preset if settings is preset.settings else make_preset(preset.name, settings, preset.description)
