"""What ends a whole run early: causes that are not one frame's, and would fail every further one."""

from __future__ import annotations

import os

from grader.errors import DiskFull, GraderError, MissingFile, WriteFailed
from grader.target import Target

_GO_ON = "then the same command with --resume goes on"


def cause_to_halt(error: GraderError, source: str, target: Target | None) -> GraderError | None:
    """Return what would fail the further frames too; None where the error is this frame's own.

    Parameters
    ----------
    error : GraderError
        Why a frame failed.
    source : str
        Its file.
    target : Target, optional
        The folder that the run writes into.
    """
    if isinstance(error, DiskFull):
        place = None if target is None else target.folder
        return DiskFull("the disk is full", path=place, hint=f"free some space, {_GO_ON}")
    if isinstance(error, WriteFailed) and target is not None:
        return target.trouble()
    folder = os.path.dirname(os.path.abspath(source))  # noqa: PTH100, PTH120 - names may be no UTF-8
    if isinstance(error, MissingFile) and not os.path.isdir(folder):  # noqa: PTH112
        return MissingFile(
            "the folder of the originals is gone", path=folder, hint=f"connect it again, {_GO_ON}"
        )
    return None


def told_how_far(error: GraderError, done: int, total: int) -> GraderError:
    """Return the error with how many frames are done in its message."""
    message = f"{error.message}, {done} of {total} frames are done"
    return type(error)(message, path=error.path, hint=error.hint)
