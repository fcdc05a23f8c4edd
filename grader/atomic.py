"""Write a small file whole or not at all."""

from __future__ import annotations

import contextlib
import os
import tempfile
from pathlib import Path

from grader.errors import WriteFailed


def write_atomic(path: str | os.PathLike[str], data: bytes, *, overwrite: bool = False) -> None:
    """Write bytes to a file so that a reader sees the old file or the new one, never a part.

    The data goes to a temporary file in the same folder, to the disk, and takes the name at the end.

    Parameters
    ----------
    path : path-like
        The file; its folder must exist.
    data : bytes
        Everything the file is to hold.
    overwrite : bool
        Replace a file that stands there already.

    Raises
    ------
    WriteFailed
        The file exists and may not be replaced, or the folder cannot be written; nothing is left behind.
    """
    target = Path(path)
    if not overwrite and os.path.lexists(target):
        raise WriteFailed(
            "the file exists already", path=target, hint="choose another name or allow overwriting"
        )
    try:
        _replace(target, data, overwrite=overwrite)
    except FileExistsError:
        raise WriteFailed(
            "the file exists already", path=target, hint="choose another name or allow overwriting"
        ) from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise WriteFailed(
            f"cannot be written ({reason})", path=target, hint="check the folder and its permissions"
        ) from error


def _replace(target: Path, data: bytes, *, overwrite: bool) -> None:
    handle, name = tempfile.mkstemp(dir=target.parent, prefix=f".{target.name[:40]}.", suffix=".part")
    try:
        with os.fdopen(handle, "wb") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
        Path(name).chmod(0o666 & ~_umask())
        if overwrite or not _linked(name, target):
            Path(name).replace(target)
    finally:
        with contextlib.suppress(FileNotFoundError):
            Path(name).unlink()


def _linked(name: str, target: Path) -> bool:
    """Give the file its name only if nobody took it meanwhile; False where links are unknown."""
    try:
        target.hardlink_to(name)
    except FileExistsError:
        raise
    except (OSError, NotImplementedError):
        return False
    return True


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask
