"""The log as a file: JSON Lines, one object a line, flushed as each frame ends; and back again.

Format ``grader-log/1``, published as ``docs/log.schema.json``.  For one file the later line stands.
"""

from __future__ import annotations

import contextlib
import errno
import json
import os
import stat
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, BinaryIO, Final

from grader.atomic import FULL, flush_folder
from grader.errors import DamagedFile, DiskFull, MissingFile, PresetError, WriteFailed

try:
    import fcntl
except ImportError:  # not on every system
    fcntl = None  # type: ignore[assignment]

SCHEMA: Final = "grader-log/1"
FINISHED: Final = ("graded", "failed", "skipped")
Line = dict[str, Any]

_MAX_LINE_BYTES: Final = 1 << 20
_RUN_LINE: Final = b'{"kind":"run",'
"""How every log of ours begins."""


def encode_line(line: Mapping[str, Any]) -> bytes:
    r"""Return one line of the log, newline included; never NaN or Infinity.

    Examples
    --------
    >>> encode_line({"kind": "frame", "file": "é.tif"}).decode()
    '{"kind":"frame","file":"é.tif"}\n'
    """
    compact = {"allow_nan": False, "separators": (",", ":")}
    try:
        return (json.dumps(line, ensure_ascii=False, **compact) + "\n").encode()  # type: ignore[arg-type]
    except UnicodeEncodeError:  # a file name that is no UTF-8: keep its bytes as escapes
        return (json.dumps(line, ensure_ascii=True, **compact) + "\n").encode()  # type: ignore[arg-type]


class LogWriter:
    """Append lines to a log, each handed to the system whole as it is written.

    A file takes one writer at a time, as far as the system has locks (``flock``: they end with their process,
    so that none is ever stale).
    """

    def __init__(
        self, path: str | os.PathLike[str], *, keep_bytes: int | None = None, through_link: bool = True
    ) -> None:
        """Open ``path``; keep its first ``keep_bytes`` (a log that is continued), else start anew.

        Raises
        ------
        PresetError
            Another run writes into it, or it is a link and ``through_link`` is not set.
        DiskFull, WriteFailed
            It cannot be written.
        """
        self.path = Path(path)
        self._end = keep_bytes or 0
        self._handle = -1
        flags = os.O_RDWR | os.O_CREAT | getattr(os, "O_BINARY", 0)
        try:
            self.path.parent.mkdir(parents=True, exist_ok=True)
            self._handle = os.open(
                self.path, flags | (0 if through_link else getattr(os, "O_NOFOLLOW", 0)), 0o666
            )
            self._is_file = stat.S_ISREG(os.fstat(self._handle).st_mode)
            self._take()
            if self._is_file:
                os.ftruncate(self._handle, self._end)
                os.lseek(self._handle, self._end, os.SEEK_SET)
        except OSError as error:
            self._leave()
            raise self._failed(error) from error
        except PresetError:
            self._leave()
            raise

    def write(self, line: Mapping[str, Any]) -> None:
        """Write one line, whole or not at all."""
        data = memoryview(encode_line(line))
        length = len(data)
        try:
            while data:
                data = data[os.write(self._handle, data) :]
        except OSError as error:
            if self._is_file:
                with contextlib.suppress(OSError):
                    os.ftruncate(self._handle, self._end)
            raise self._failed(error) from error
        self._end += length

    def sync(self) -> None:
        """Flush to the disk what was written so far."""
        if not self._is_file:
            return
        try:
            os.fsync(self._handle)
        except OSError as error:
            if error.errno not in (errno.EINVAL, errno.ENOTSUP):  # a file system without it
                raise self._failed(error) from error
        flush_folder(self.path.parent)

    @property
    def can_be_replaced(self) -> bool:
        """Whether another file may take this one's name: it is no pipe and no terminal."""
        return self._is_file

    def close(self) -> None:
        """Flush to the disk and close."""
        if self._handle < 0:
            return
        try:
            self.sync()
        finally:
            self._leave()

    def _leave(self) -> None:
        if self._handle >= 0:
            os.close(self._handle)
            self._handle = -1

    def _take(self) -> None:
        if fcntl is None or not self._is_file:
            return
        try:
            fcntl.flock(self._handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            if error.errno in (errno.EWOULDBLOCK, errno.EACCES):
                raise PresetError(
                    "another run is writing this log",
                    path=self.path,
                    hint="wait for it, or choose another --log",
                ) from error

    def _failed(self, error: OSError) -> WriteFailed:
        if error.errno in FULL:
            return DiskFull(
                "the disk is full; the log cannot be written",
                path=self.path,
                hint="free some space, then the same command with --resume goes on",
            )
        if error.errno == errno.ELOOP:
            return WriteFailed("the log is a link", path=self.path, hint="remove it, or choose a --log FILE")
        return WriteFailed(
            f"the log cannot be written ({error.strerror or error})",
            path=self.path,
            hint="choose another place with --log FILE",
        )


@dataclass(slots=True)
class Log:
    """A log that was read: the run line, the lines of each file by status, the summary."""

    run: Line = field(default_factory=dict)
    lines: dict[str, dict[str, Line]] = field(default_factory=dict)
    summary: Line | None = None
    outputs: set[str] = field(default_factory=set)
    """Every output that the run, or an earlier one in this log, set out to write, by its place in the folder."""
    good_bytes: int = 0
    """Length of the part that is whole; what follows is a torn last line."""
    torn: bool = False

    def latest(self) -> list[Line]:
        """Return the line that stands for each file, in the order of first mention."""
        return [next(reversed(by_status.values())) for by_status in self.lines.values()]

    def records(self) -> list[Line]:
        """Return the run line, the line that stands for each file, and the summary if there is one."""
        return [self.run, *self.latest(), *([] if self.summary is None else [self.summary])]

    def add(self, line: Line) -> None:
        """Take one more line: the later line for a file stands."""
        kind = line.get("kind")
        if kind == "summary":
            self.summary = line
            return
        self.summary = None  # of a run that went on since
        if kind == "run":
            self._begin(line)
        elif kind in ("frame", "target") and isinstance(line.get("file"), str):
            output = line.get("output")
            if isinstance(output, dict) and isinstance(output.get("file"), str):
                self.outputs.add(output["file"])
            if kind == "frame":
                by_status = self.lines.setdefault(line["file"], {})
                by_status.pop(str(line.get("status")), None)
                by_status[str(line.get("status"))] = line

    def _begin(self, run: Line) -> None:
        """Begin another run: what one with other settings planned and graded does not stand for this one."""
        if self.run and settings_of(run) != settings_of(self.run):
            stays = {"measured"} if run.get("version") == self.run.get("version") else set()
            for file, by_status in list(self.lines.items()):
                self.lines[file] = {status: line for status, line in by_status.items() if status in stays}
                if not self.lines[file]:
                    del self.lines[file]
        self.run = run


def settings_of(run: Mapping[str, Any]) -> tuple[Any, Any]:
    """Return what two runs must share for their results to be the same: version and preset digest."""
    preset = run.get("preset")
    return run.get("version"), preset.get("digest") if isinstance(preset, dict) else None


def read_log(path: str | os.PathLike[str]) -> Log:
    """Read a log; a torn last line is left out and noted, damage before it is an error.

    Raises
    ------
    MissingFile
        The log cannot be opened.
    DamagedFile
        A line is not JSON, or the file is no log of a schema that this version reads.
    """
    log = read_begun_log(path)
    if not log.run:
        raise DamagedFile("this is no grader log: it has no run line", path=path)
    return log


def read_begun_log(path: str | os.PathLike[str]) -> Log:
    """Read a log as `read_log` does, but allow one that ends before its run line was whole."""
    log = Log()
    try:
        with Path(path).open("rb") as file:
            _read_lines(file, log, os.fspath(path))
    except OSError as error:
        raise MissingFile(f"the log cannot be opened ({error.strerror or error})", path=path) from error
    return log


def _read_lines(file: BinaryIO, log: Log, path: str) -> None:
    number = 0
    while raw := file.readline(_MAX_LINE_BYTES):
        number += 1
        try:
            line = json.loads(raw) if raw.endswith(b"\n") else None
        except (ValueError, RecursionError):
            line = None
        if not isinstance(line, dict):
            if _is_torn(raw, file, begun=bool(log.run)):
                log.torn = True
                return
            raise DamagedFile(f"line {number} of the log is not a JSON object", path=path, hint="run anew")
        if line.get("kind") == "run" and line.get("schema") != SCHEMA:
            raise DamagedFile(
                f"the log has schema {line.get('schema')!r}; this version reads {SCHEMA!r}",
                path=path,
                hint="measure the frames again with this version",
            )
        log.add(line)
        log.good_bytes += len(raw)


def _is_torn(raw: bytes, file: BinaryIO, *, begun: bool) -> bool:
    """Whether a line that is none is the torn end of a log of ours, and not damage or another kind of file.

    After a power cut, file systems may show zeros where data had not reached the disk.
    """
    if not begun and not _RUN_LINE.startswith(raw[: len(_RUN_LINE)].rstrip(b"\0")):
        return False
    return not file.read(_MAX_LINE_BYTES).strip(b"\0") and not file.read(1)
