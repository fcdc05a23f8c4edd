"""Every error that grader raises, in one tree.

::

    GraderError
    |-- PresetError          (also ValueError)   a preset or a setting cannot be used
    |-- UnsupportedFile                          a sound file of a kind grader does not grade
    |-- DamagedFile                              a file that is cut short, corrupt or not what it says
    |-- MissingFile          (also OSError)      a path that is not there or cannot be opened
    |-- TooFewUsablePixels                       nothing in the frame can be measured
    |-- WriteFailed          (also OSError)      an output could not be written whole
    |   `-- DiskFull                             for want of room
    `-- WorkerFailed                             a worker died, hung or ran out of memory

Foreign exceptions are translated once, at the border in ``grader.files``; a batch turns what is
left into log records and goes on.
"""

from __future__ import annotations

import os
from typing import Any, ClassVar


class GraderError(Exception):
    """A plain sentence about what happened, the file it happened to, and what to do.

    Parameters
    ----------
    message : str
        What happened, without the file name.
    path : path-like, optional
        The file concerned.
    hint : str, optional
        What the reader can do about it.

    Examples
    --------
    >>> print(DamagedFile("the file ends early", path="hall-07.jpg", hint="copy it from the card again"))
    hall-07.jpg: the file ends early; copy it from the card again
    """

    code: ClassVar[str] = "error"

    def __init__(
        self, message: str = "", *, path: str | os.PathLike[str] | None = None, hint: str | None = None
    ) -> None:
        super().__init__(message)
        self.message = message
        self.path = None if path is None else os.fspath(path)
        self.hint = hint

    def __str__(self) -> str:
        """Return ``file: what happened; what to do``."""
        text = self.message if self.path is None else f"{self.path}: {self.message}"
        return text if self.hint is None else f"{text}; {self.hint}"

    def __reduce__(self) -> tuple[Any, ...]:
        """Keep message, path and hint over a process boundary."""
        return (_rebuild, (type(self), self.message, self.path, self.hint))


def _rebuild(kind: type[GraderError], message: str, path: str | None, hint: str | None) -> GraderError:
    return kind(message, path=path, hint=hint)


class PresetError(GraderError, ValueError):
    """A preset or a setting cannot be used."""

    code = "preset"


class UnsupportedFile(GraderError):
    """The file is sound, but of a kind that grader does not grade."""

    code = "unsupported"


class DamagedFile(GraderError):
    """The file is cut short, corrupt, or not what its name says."""

    code = "damaged"


class MissingFile(GraderError, OSError):
    """The path is not there or may not be opened."""

    code = "missing"


class TooFewUsablePixels(GraderError):
    """Nothing in the frame can be measured."""

    code = "too-few-pixels"


class WriteFailed(GraderError, OSError):
    """An output could not be written whole; nothing was left behind."""

    code = "write-failed"


class DiskFull(WriteFailed):
    """The disk, or this user's share of it, is full: no frame can be written until there is room."""

    code = "disk-full"


class WorkerFailed(GraderError):
    """A worker process died, hung or ran out of memory on this frame."""

    code = "worker"
