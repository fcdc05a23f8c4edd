"""What an earlier run into the same folder left that still holds, from its log.

A log may come from anywhere: nothing in it names a file that is read or written.  It is only asked about
sources and outputs that the present run names itself.
"""

from __future__ import annotations

import contextlib
import os
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path, PurePath
from typing import Any, Final

from grader.errors import DamagedFile, GraderError, WorkerFailed
from grader.log import cast_from_line, correction_from_line, written_from_line
from grader.log_file import Line, Log, encode_line, settings_of
from grader.model import Cast, Correction, Counts, Header, Recipe, Written

_MOST_TRIES: Final = 2
_STATUSES: Final = ("measured", "planned", "graded", "failed", "skipped")


@dataclass(frozen=True, slots=True, eq=False)
class Finished:
    """An output that an earlier run wrote, as its log tells."""

    sha256: str
    """Hash of the source it was made from."""
    correction: Correction
    written: Written
    counts: Counts
    seconds: float | None


class Earlier:
    """An earlier run's results, as far as they are this run's too.

    Parameters
    ----------
    log : Log, optional
        Its log; None if there is none.
    first : dict
        The present run's own run line.
    sources : iterable of str
        The present run's files: one that the log has under another path to the same place goes on under the
        new one.
    """

    def __init__(self, log: Log | None, first: Line, sources: Iterable[str] = ()) -> None:
        self._log = log
        self.left_out = set() if log is None else _take_new_names(log, list(sources))
        """Names in the log that are to go from it: of files that this run calls otherwise, and of no files."""
        self._first = first
        self.same_settings = log is not None and settings_of(log.run) == settings_of(first)
        self._same_version = log is not None and log.run.get("version") == first["version"]

    def cast(self, file: str, recipe: Recipe) -> Cast | None:
        """Return the light measured of a file; None where it has to be measured (again)."""
        line = self._line(file, "measured") if self._same_version else None
        if line is None:
            return None
        try:
            cast = cast_from_line(line)
        except DamagedFile:
            return None
        usable = cast.header.sha256 is not None and cast.header.file == file
        same = cast.opponent == recipe.opponent and _as_told_now(cast.header, recipe)
        return cast if usable and same else None

    def holds(self, line: Line) -> bool:
        """Whether the log has exactly this frame line already, but for how long it took."""
        there = self._line(line["file"], line["status"])
        if self.left_out:
            return False
        try:
            return there is not None and _same_but_for_time(there, line)
        except ValueError:  # figures that JSON does not have
            return False

    def finished(self, file: str, target: str) -> Finished | None:
        """Return the output written for a file under the same settings and name."""
        line = self._line(file, "graded") if self.same_settings else None
        if line is None:
            return None
        try:
            written, counts = written_from_line(line)
            correction = correction_from_line(line)
        except DamagedFile:
            return None
        sha256, seconds = line.get("sha256"), line.get("seconds")
        if written.file != target or not isinstance(sha256, str):
            return None
        return Finished(
            sha256, correction, written, counts, seconds if isinstance(seconds, int | float) else None
        )

    def owns(self, target: str) -> bool:
        """Whether an earlier run set out to write this output: what stands there may be replaced."""
        return self._log is not None and target in self._log.outputs

    def superseded(self, folder: Path, targets: Mapping[str, str]) -> list[str]:
        """Return outputs of this log that are still in the folder, but that no frame has for its own any more.

        Parameters
        ----------
        folder : Path
        targets : mapping
            The present run's outputs, by source.
        """
        if self._log is None:
            return []
        kept = {
            by_status["graded"]["output"]["file"]
            for file, by_status in self._log.lines.items()
            if self.same_settings and file not in targets and _has_output(by_status.get("graded", {}))
        }
        return sorted(
            name
            for name in self._log.outputs - set(targets.values()) - kept
            if is_below(PurePath(name)) and os.path.lexists(folder / name)
        )

    def tries(self, file: str) -> int:
        """Return how often a worker died, hung or ran out of memory on this very file."""
        error = self._line(file, "failed") if self._same_version else None
        if error is None or worker_tries(error) == 0 or error.get("seen") != seen(file):
            return 0
        return worker_tries(error)

    def tried(self, file: str, error: GraderError) -> dict[str, Any]:
        """Return what a failed line tells besides, so that a file that costs workers is not tried for ever."""
        if not isinstance(error, WorkerFailed):
            return {}
        return {"tries": min(self.tries(file) + 1, _MOST_TRIES), "seen": seen(file)}

    def given_up(self, file: str) -> WorkerFailed | None:
        """Return the error of a file that is not tried any more; None for any other."""
        if self.tries(file) < _MOST_TRIES:
            return None
        error = (self._line(file, "failed") or {}).get("error")
        told = error.get("message") if isinstance(error, dict) else None
        return WorkerFailed(
            told if isinstance(told, str) else "the worker process died on this frame",
            hint="it is left after two tries; grade it by itself into another folder to try again",
        )

    def others(self, files: set[str]) -> Iterator[tuple[str, Line | None]]:
        """Yield the files of the log that are not among ``files``, each with the line that stands for it.

        The line is None where the file is gone before it was graded, or its line cannot be used.  What failed and
        is no file (any more), a folder that was not there for example, is left out of the log from now on.
        """
        if self._log is None:
            return
        for file, by_status in self._log.lines.items():
            if file in files:
                continue
            status, line = next(reversed(by_status.items()))
            there = os.path.isfile(file)  # noqa: PTH113 - names may hold bytes that are no UTF-8
            if status in ("failed", "skipped") and not there:
                self.left_out.add(file)
            else:
                stands = _is_plain(line) and (status == "graded" or there)
                yield file, line if stands else None

    def _line(self, file: str, status: str) -> Line | None:
        return None if self._log is None else self._log.lines.get(file, {}).get(status)


def _take_new_names(log: Log, sources: list[str]) -> set[str]:
    """Move the lines of files that are now called by another path; return the old names.

    What is reused of them depends on the files' hashes, not on their names.
    """
    given = set(sources)
    strangers = [file for file in log.lines if file not in given]
    if not strangers:
        return set()
    now = {os.path.realpath(source): source for source in sources if source not in log.lines}
    renamed = {}
    for file in strangers:
        with contextlib.suppress(OSError, ValueError):
            if os.path.realpath(file) in now:
                renamed[file] = now[os.path.realpath(file)]
    for old, new in renamed.items():
        log.lines[new] = {status: line | {"file": new} for status, line in log.lines.pop(old).items()}
    return set(renamed)


def _same_but_for_time(one: Line, other: Line) -> bool:
    return encode_line(one | {"seconds": None}) == encode_line(other | {"seconds": None})


def _has_output(line: Line) -> bool:
    output = line.get("output")
    return isinstance(output, dict) and isinstance(output.get("file"), str)


def is_below(place: PurePath) -> bool:
    """Whether a path from a log stays below the folder that it is relative to, links aside."""
    return bool(place.parts) and not place.is_absolute() and not place.drive and ".." not in place.parts


def _is_plain(line: Line) -> bool:
    """Whether a frame line of a log can be counted: its figures are figures, its words words."""
    figures = [line.get("cast"), line.get("residual")]
    flags = line.get("flags") or []
    return (
        line.get("status") in _STATUSES
        and all(one is None or (isinstance(one, dict) and _are_figures(one)) for one in figures)
        and isinstance(flags, list)
        and all(isinstance(flag, str) for flag in flags)
    )


def _are_figures(values: Mapping[str, Any]) -> bool:
    names = ("yellow_blue", "green_magenta", "delta_e_2000")
    return all(values.get(name) is None or type(values.get(name)) in (int, float) for name in names)


def worker_tries(line: Mapping[str, Any]) -> int:
    """Return the number of tries that a failed line tells; 0 where no worker was lost."""
    error, tries = line.get("error"), line.get("tries")
    if not isinstance(error, dict) or error.get("code") != WorkerFailed.code:
        return 0
    return tries if isinstance(tries, int) and tries > 0 else 1


def seen(file: str) -> list[int] | None:
    """Return size [bytes] and time [ns] of a file as they are now, to tell whether it was replaced since."""
    try:
        state = os.stat(file)  # noqa: PTH116 - names may hold bytes that are no UTF-8
    except OSError:
        return None
    return [state.st_size, state.st_mtime_ns]


def _as_told_now(header: Header, recipe: Recipe) -> bool:
    """Return whether a file was measured as the recipe takes it; of a TIFF that could be linear the log does not say."""
    return header.format != "tiff" or header.referred == recipe.linear_tiff
