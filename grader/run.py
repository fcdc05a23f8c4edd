"""One run's book-keeping in the parent: the lines written so far, what stands, the closing summary."""

from __future__ import annotations

import datetime as dt
import time
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from grader.atomic import write_atomic
from grader.errors import GraderError, PresetError
from grader.log import FINISHED, Line, Log, LogWriter, encode_line, failed_line, read_log
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
        An interrupted run's log that is continued; its whole lines are kept.
    """

    def __init__(self, path: Path | None, first: Line, earlier: Log | None = None) -> None:
        self.first = first
        self.earlier = earlier
        self.standing: dict[str, Line] = {}
        self._start = time.monotonic()
        self._writer: LogWriter | None = None
        if path is not None:
            self._writer = LogWriter(path, keep_bytes=None if earlier is None else earlier.good_bytes)
            if earlier is None:
                self._writer.write(first)

    def add(self, line: Line) -> Line:
        """Write one frame line; it stands for its file from now on."""
        if self._writer is not None:
            self._writer.write(line)
        self.standing[line["file"]] = {key: value for key, value in line.items() if key != "evidence"}
        return line

    def fail(self, file: str, error: GraderError, *, base: Mapping[str, Any] | None = None) -> Line:
        """Write that a frame failed."""
        return self.add(failed_line(file, error, base=base))

    def earlier_line(self, file: str, status: str) -> Line | None:
        """Return what an earlier run logged for this file at that stage."""
        return None if self.earlier is None else self.earlier.lines.get(file, {}).get(status)

    def summarise(self, *, interrupted: bool = False, **facts: Any) -> Line:
        """Return the closing line: counts, and the mean cast before and after."""
        lines = list(self.standing.values())
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

    def finish(self, summary: Line, order: Sequence[str]) -> None:
        """Write the summary and put the log's lines into the order of the sources, whole or not at all."""
        if self._writer is None:
            return
        self._writer.write(summary)
        self._writer.close()
        if not summary["interrupted"]:
            write_atomic(
                self._writer.path, b"".join(_ordered(read_log(self._writer.path), order)), overwrite=True
            )

    def close(self) -> None:
        """Close the log as it is."""
        if self._writer is not None:
            self._writer.close()


def _ordered(log: Log, order: Sequence[str]) -> Iterable[bytes]:
    known = set(order)
    files = [*order, *(file for file in log.lines if file not in known)]
    yield encode_line(log.run)
    for status in _STATUS_ORDER:
        yield from (encode_line(log.lines[f][status]) for f in files if status in log.lines.get(f, {}))
    for file in files:
        by_status = log.lines.get(file, {})
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
    """
    if path is None or not path.exists():
        return None
    if resume:
        return read_log(path)
    if overwrite:
        return None
    raise PresetError(
        "a run's log is there already",
        path=path,
        hint="continue it with --resume, replace it with --overwrite, or choose another --out",
    )
