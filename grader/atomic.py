"""Write a file whole or not at all, whenever the process or the machine stops.

The data goes to a new file in the same folder, to the disk, and takes its name at the end in one step;
then the folder goes to the disk too.  Why each step is there:

* a new file: ``open`` with ``O_CREAT | O_EXCL`` fails where the name exists, a link included [1]_, so that
  nobody's file is opened by mistake;
* to the disk before the new name: a system may otherwise write the name first, and after a power cut show
  an empty file under it [2]_;
* one step: of a name that is replaced, "a link named *new* shall remain visible ... throughout the renaming
  operation and refer either to the file referred to by *new* or *old* before the operation began" [3]_; where
  nothing may be replaced, ``link`` fails if the name exists [4]_ (what python-atomicwrites calls a race-free
  assertion that the target does not exist);
* the folder: ``fsync`` of a file "does not necessarily ensure that the entry in the directory containing the
  file has also reached disk.  For that an explicit fsync() on a file descriptor for the directory is also
  needed" [2]_.

References
----------
.. [1] POSIX.1-2017, open(), O_EXCL.
.. [2] Linux man-pages, fsync(2).
.. [3] POSIX.1-2017, rename().
.. [4] POSIX.1-2017, link(), EEXIST.
"""

from __future__ import annotations

import contextlib
import errno
import os
import re
import secrets
from collections.abc import Iterator
from pathlib import Path
from typing import Final

from grader.errors import DiskFull, WriteFailed

PART: Final = re.compile(r"\.grader-[0-9a-f]{12}\.part")
"""What our unfinished files are called; nothing else is."""

FULL: Final = frozenset({errno.ENOSPC, errno.EDQUOT})
"""What a system says when a disk or a user's share of it is full."""


def write_atomic(path: str | os.PathLike[str], data: bytes, *, overwrite: bool = False) -> None:
    """Write bytes to a file so that a reader sees the old file or the new one, never a part.

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
    DiskFull
        There is no room for it.
    WriteFailed
        The file exists and may not be replaced, or the folder cannot be written; nothing is left behind.
    """
    target = Path(path)
    try:
        with whole_file(target, overwrite=overwrite) as part:
            part.write_bytes(data)
    except FileExistsError:
        raise WriteFailed(
            "the file exists already", path=target, hint="choose another name or allow overwriting"
        ) from None
    except (OSError, ValueError) as error:
        if getattr(error, "errno", None) in FULL:
            raise DiskFull("the disk is full", path=target, hint="free some space") from error
        reason = getattr(error, "strerror", None) or str(error)
        raise WriteFailed(
            f"cannot be written ({reason})", path=target, hint="check the folder and its permissions"
        ) from error


@contextlib.contextmanager
def whole_file(place: Path, *, overwrite: bool = False) -> Iterator[Path]:
    """Yield an empty file to fill beside ``place``; give it that name when the block ends well.

    Raises
    ------
    FileExistsError
        ``place`` is taken, by whomever and whenever, and ``overwrite`` is not set.
    OSError
        As the system says it; nothing is left behind.
    """
    part = place.parent / f".grader-{secrets.token_hex(6)}.part"
    os.close(os.open(part, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o666))
    try:
        yield part
        _flush(part)
        _put_in_place(part, place, overwrite=overwrite)
    finally:
        part.unlink(missing_ok=True)
    flush_folder(place.parent)


def _flush(part: Path) -> None:
    with part.open("rb+") as stream:
        os.fsync(stream.fileno())


def _put_in_place(part: Path, place: Path, *, overwrite: bool) -> None:
    if overwrite:
        part.replace(place)
        return
    try:
        os.link(part, place)  # fails where the name is taken, whoever took it in the meantime
    except FileExistsError:
        raise
    except OSError:  # a file system without links, as most memory cards have
        if os.path.lexists(place):
            raise FileExistsError(errno.EEXIST, os.strerror(errno.EEXIST), str(place)) from None
        part.rename(place)  # between the look and this, another program could take the name (not on Windows)


def flush_folder(folder: Path) -> None:
    """Make the names in a folder safe, where the system allows it (not on Windows)."""
    with contextlib.suppress(OSError):
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
