"""One run's book-keeping in the parent: the lines written so far, what stands, the closing summary."""

from __future__ import annotations

import datetime as dt
import json
import os
import time
from collections import Counter
from collections.abc import Collection, Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from grader.atomic import write_atomic
from grader.errors import DamagedFile, GraderError, PresetError
from grader.log import FINISHED, Line, Log, LogWriter, encode_line, failed_line, read_log
from grader.log_file import read_begun_log
from grader.model import EYE_FLAGS

_STATUS_ORDER = ("measured", "planned")


class Run:
    """Writes the log as frames end and keeps the line that stands for each file.

    Parameters
    ----------
    path : Path, optional
        The log; None keeps the lines in memory only.
    first : dict
        The run line.
    earlier : Log, optional
        An earlier run's log that is continued; its whole lines are kept.
    through_link : bool
        Whether the log may be a link to somewhere else.
    """

    def __init__(
        self, path: Path | None, first: Line, earlier: Log | None = None, *, through_link: bool = True
    ) -> None:
        self.first = first
        self.standing: dict[str, Line] = {}
        self._start = time.monotonic()
        self._writer: LogWriter | None = None
        if path is None:
            return
        keep = None if earlier is None else earlier.good_bytes
        self._writer = LogWriter(path, keep_bytes=keep, through_link=through_link)
        if earlier is not None and _is_same_run(earlier.run, first):
            self.first = earlier.run
            return
        self._writer.write(first)
        if earlier is not None:
            earlier.add(first)

    def add(self, line: Line) -> Line:
        """Write one frame line; it stands for its file from now on."""
        if self._writer is not None:
            self._writer.write(line)
        return self.keep(line)

    def keep(self, line: Line) -> Line:
        """Let a line stand for its file that an earlier run wrote into this log already."""
        self.standing[line["file"]] = {key: value for key, value in line.items() if key != "evidence"}
        return line

    def fail(
        self, file: str, error: GraderError, *, base: Mapping[str, Any] | None = None, **facts: Any
    ) -> Line:
        """Write that a frame failed."""
        return self.add(failed_line(file, error, base=base, **facts))

    def announce(self, file: str, output: str) -> None:
        """Write where the result of a file is going to be, before it can be there.

        A run that is killed between an output and its line is thus known to have meant to write it.
        """
        if self._writer is not None:
            self._writer.write({"kind": "target", "file": file, "output": {"file": output}})

    def sync(self) -> None:
        """Flush the log to the disk: what it announces must be there before the outputs are."""
        if self._writer is not None:
            self._writer.sync()

    def summarise(self, order: Sequence[str], *, interrupted: bool = False, **facts: Any) -> Line:
        """Return the closing line: counts, and the mean cast before and after."""
        lines = [self.standing[file] for file in in_order(self.standing, order)]
        count = Counter(line["status"] for line in lines)
        return {
            "kind": "summary",
            "frames": len(lines),
            "measured": sum(line.get("cast") is not None for line in lines),
            "graded": count["graded"],
            "failed": count["failed"],
            "skipped": count["skipped"],
            "by_eye": sum(needs_eye(line) for line in lines),
            "mean_cast_before": mean_cast(line.get("cast") for line in lines),
            "mean_cast_after": mean_cast(line.get("residual") for line in lines),
            "interrupted": interrupted,
            **facts,
            "seconds": round(time.monotonic() - self._start, 3),
        }

    def finish(
        self, summary: Line, order: Sequence[str], *, leave_out: Collection[str] = frozenset()
    ) -> None:
        """Write the summary and put the log's lines into the order of the sources, whole or not at all.

        Lines of the files to leave out go: names by which an earlier run called files that are called otherwise.
        """
        if self._writer is None:
            return
        self._writer.write(summary)
        self._writer.close()
        if not summary["interrupted"] and self._writer.can_be_replaced:
            log = read_log(self._writer.path)
            for file in leave_out:
                log.lines.pop(file, None)
            write_atomic(self._writer.path, b"".join(_ordered(log, order)), overwrite=True)

    def close(self) -> None:
        """Close the log as it is."""
        if self._writer is not None:
            self._writer.close()


def _is_same_run(earlier: Line, first: Line) -> bool:
    """Whether an earlier run line says what this run's would, but for when and how it was started."""
    command = earlier.get("command")
    plain = isinstance(earlier.get("started"), str) and isinstance(command, list)
    plain = plain and all(isinstance(word, str) for word in command or ())
    told_apart = {"started", "command"}
    return plain and {k: v for k, v in earlier.items() if k not in told_apart} == {
        k: v for k, v in json.loads(encode_line(first)).items() if k not in told_apart
    }


def in_order(files: Iterable[str], order: Sequence[str]) -> list[str]:
    """Return files in the order of the sources, then the others as they come."""
    found = list(files)
    known, present = set(order), set(found)
    return [*(file for file in order if file in present), *(file for file in found if file not in known)]


def _ordered(log: Log, order: Sequence[str]) -> Iterable[bytes]:
    files = in_order(log.lines, order)
    yield encode_line(log.run)
    for status in _STATUS_ORDER:
        yield from (encode_line(log.lines[f][status]) for f in files if status in log.lines[f])
    for file in files:
        by_status = log.lines[file]
        last = next(reversed(by_status), None)
        if last in FINISHED:
            yield encode_line(by_status[last])
    if log.summary is not None:
        yield encode_line(log.summary)


def needs_eye(line: Mapping[str, Any]) -> bool:
    """Tell whether a person should look at this frame."""
    return line["status"] != "failed" and not EYE_FLAGS.isdisjoint(line.get("flags") or ())


def mean_cast(casts: Iterable[Mapping[str, Any] | None]) -> dict[str, float] | None:
    """Return the mean of casts per axis and of their Delta E 2000; None where there is none."""
    rows = [
        (c["yellow_blue"], c["green_magenta"], c["delta_e_2000"])
        for c in casts
        if c is not None and c.get("delta_e_2000") is not None
    ]
    if not rows:
        return None
    yellow_blue, green_magenta, delta_e = np.mean(rows, axis=0).tolist()
    return {"yellow_blue": yellow_blue, "green_magenta": green_magenta, "delta_e_2000": delta_e}


def now() -> str:
    """Return the local time with its offset, ISO 8601."""
    return dt.datetime.now().astimezone().isoformat(timespec="seconds")


def open_earlier(path: Path | None, *, resume: bool, overwrite: bool) -> Log | None:
    """Return the log that a run continues, or None for a new one.

    Raises
    ------
    PresetError
        A log is there already and neither ``--resume`` nor ``--overwrite`` was asked for.
    DamagedFile
        What is to be continued is no log.
    """
    if path is None or not os.path.lexists(path) or (path.exists() and not path.is_file()):
        return None  # a pipe or a terminal takes lines and keeps none
    if resume:
        log = read_begun_log(path)
        if not log.run and log.good_bytes:
            raise DamagedFile("this is no grader log: it has no run line", path=path)
        return log if log.run else None  # a run that was killed before its first line was whole
    if overwrite:
        return None
    raise PresetError(
        "a run's log is there already",
        path=path,
        hint="continue it with --resume, replace it with --overwrite, or choose another --out",
    )
