"""The output folder of a run: taken, checked, cleaned; and what of it a worker has to respect."""

from __future__ import annotations

import contextlib
import os
import secrets
import shutil
import time
from collections.abc import Iterable
from pathlib import Path, PurePath
from typing import Any, Final

from grader.atomic import FULL, PART
from grader.errors import DiskFull, PresetError, WriteFailed

_ARRIVAL_TRIES: Final = 20
_ARRIVAL_S: Final = 0.25
LOCK_NAME: Final = ".grader.lock"
_RESUME: Final = "then the same command with --resume goes on"
_CHOOSE: Final = "choose another --out folder"


class Target:
    """The folder that a run writes into; one run at a time.

    Parameters
    ----------
    folder : Path
        Made by `take` if need be.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._lock: Any = None

    def take(self) -> None:
        """Take the folder for this run.

        The lock is the system's own (``flock``, on Windows ``msvcrt.locking``), which ends with its process:
        a lock file that a killed run left behind locks nothing.  On a file system without such locks filelock
        falls back to a file that names its process and host.

        Raises
        ------
        PresetError
            Another run writes into the folder.
        WriteFailed
            The folder cannot be made or written.
        """
        from filelock import FileLock, Timeout  # noqa: PLC0415 - only where pictures are written

        try:
            self.folder.mkdir(parents=True, exist_ok=True)
            lock = FileLock(self.folder / LOCK_NAME)
            lock.acquire(timeout=0)
        except Timeout as error:
            raise PresetError(
                "another run is writing into this folder",
                path=self.folder,
                hint="wait for it, or choose another --out",
            ) from error
        except (OSError, NotImplementedError) as error:
            raise _unusable(self.folder, error, _CHOOSE) from error
        self._lock = lock

    def release(self) -> None:
        """Let others have the folder."""
        if self._lock is not None:
            self._lock.release()
            self._lock = None

    def clean(self, places: Iterable[PurePath]) -> int:
        """Remove unfinished files of ours, told by their names, that a killed run or worker left.

        Call it only while the folder is taken and no worker writes.

        Parameters
        ----------
        places : iterable of PurePath
            The run's outputs below the folder; only their folders are looked at.

        Returns
        -------
        int
            How many were removed.
        """
        folders = {self.folder, *(self.folder / place.parent for place in places)}
        return sum(_clean(folder) for folder in folders if _is_inside(folder, self.folder))

    def trouble(self) -> WriteFailed | None:
        """Return why nothing can be written into the folder any more; None if something can."""
        trial = self.folder / f".grader-{secrets.token_hex(6)}.part"
        try:
            if not os.path.lexists(self.folder / LOCK_NAME):
                return WriteFailed(
                    "the output folder is gone", path=self.folder, hint=f"bring it back, {_RESUME}"
                )
            handle = os.open(trial, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o666)
            try:
                os.write(handle, b"\0")
            finally:
                os.close(handle)
        except OSError as error:
            return _unusable(self.folder, error, f"make it writable, {_RESUME}")
        finally:
            with contextlib.suppress(OSError):
                trial.unlink()
        return None

    def free_bytes(self) -> int | None:
        """Return the room on the folder's disk for this user; None where it is not known."""
        place = self.folder
        while not place.exists() and place != place.parent:
            place = place.parent
        try:
            return shutil.disk_usage(place).free
        except OSError:
            return None


def _unusable(folder: Path, error: Exception, hint: str) -> WriteFailed:
    if getattr(error, "errno", None) in FULL:
        return DiskFull("the disk is full", path=folder, hint=f"free some space, {_RESUME}")
    reason = getattr(error, "strerror", None) or str(error)
    return WriteFailed(f"the output folder cannot be written ({reason})", path=folder, hint=hint)


def _clean(folder: Path) -> int:
    removed = 0
    with contextlib.suppress(OSError), os.scandir(folder) as entries:
        for entry in entries:
            if PART.fullmatch(entry.name) and entry.is_file(follow_symlinks=False):
                with contextlib.suppress(OSError):
                    os.unlink(entry.path)  # noqa: PTH108
                    removed += 1
    return removed


def has_arrived(place: Path, size: int) -> bool:
    """Whether a result that another machine wrote is seen here; network storage may take a moment."""
    for _ in range(_ARRIVAL_TRIES):
        if place.is_file() and place.stat().st_size == size:
            return True
        time.sleep(_ARRIVAL_S)
    return False


def written_elsewhere() -> WriteFailed:
    """Return the error of a result that a worker wrote on its own machine."""
    return WriteFailed(
        "the result was written where this machine does not see it",
        hint="mount the storage on every worker under the same path (see docs/CLUSTER.md)",
    )


def enter(root: str, target: str) -> None:
    """Make the folder of an output (in a worker), unless it would not lie in the run's folder.

    Parameters
    ----------
    root : str
        The run's output folder.
    target : str
        An output below it.

    Raises
    ------
    WriteFailed
        The run's folder is not there (an unmounted disk, or a machine that does not share it), a link leads
        out of it, or a folder cannot be made.
    """
    if not os.path.lexists(os.path.join(root, LOCK_NAME)):  # noqa: PTH118
        raise WriteFailed(
            "the output folder is gone, or this worker does not see it",
            path=root,
            hint=f"bring it back, {_RESUME}",
        )
    folder = Path(os.path.dirname(target))  # noqa: PTH120
    if not _is_inside(folder, Path(root)):
        raise WriteFailed(
            "a link in the output folder leads out of it",
            path=str(folder),
            hint="remove the link, or " + _CHOOSE,
        )
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise _unusable(folder, error, _CHOOSE) from error


def _is_inside(folder: Path, root: Path) -> bool:
    """Whether a folder, links followed, lies in another; parts that do not exist yet count as they are written."""
    real, real_root = os.path.realpath(folder), os.path.realpath(root)
    return real == real_root or real.startswith(real_root.rstrip(os.path.sep) + os.path.sep)
