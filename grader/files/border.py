"""The border to foreign decoders: their exceptions become ours, once.

Decoders of damaged files raise nearly anything: ValueError, IndexError, KeyError, ZeroDivisionError, TypeError,
UnicodeDecodeError, struct.error, zlib.error, errors of their own.  Whatever they raise while a file is being
read means one of four things: the path cannot be opened, the file is of a kind that the decoder does not know,
it is larger than memory, or it is damaged.
"""

from __future__ import annotations

import errno
import logging
import os
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Final

from grader.atomic import FULL
from grader.errors import DamagedFile, DiskFull, GraderError, MissingFile, UnsupportedFile, WriteFailed

CONVERT_HINT: Final = "convert it to a 16-bit RGB TIFF first"
"""What to do with a sound file of a kind that grader does not grade."""
RECOPY_HINT: Final = "copy it again from the card or the backup"
"""What to do with a damaged file."""

_CANNOT_OPEN: Final[dict[int, tuple[str, str]]] = {
    errno.ENOENT: ("there is no such file", "check the path"),
    errno.ENOTDIR: ("there is no such file", "check the path"),
    errno.EISDIR: ("this is a folder", "name a file, or give the folder to a batch command"),
    errno.EACCES: ("the file may not be opened", "check its permissions"),
    errno.EPERM: ("the file may not be opened", "check its permissions"),
    errno.ELOOP: ("the link leads in a circle", "check the path"),
    errno.ENAMETOOLONG: ("the path is too long for this file system", "use a shorter path"),
    errno.EIO: ("the disk reports a read error", "copy the file from the card or the backup again"),
    errno.EMFILE: ("too many files are open", "use fewer workers"),
}

_CANNOT_WRITE: Final[dict[int, tuple[str, str]]] = {
    errno.ENOSPC: ("the disk is full", "free some space and resume"),
    errno.EDQUOT: ("the disk quota is used up", "free some space and resume"),
    errno.EFBIG: ("the file is larger than this file system allows", "write to another disk"),
    errno.EROFS: ("the disk is read-only", "choose another output folder"),
    errno.EACCES: ("the folder may not be written", "check its permissions or choose another output folder"),
    errno.EPERM: ("the folder may not be written", "check its permissions or choose another output folder"),
    errno.ENOENT: ("the folder is not there", "create the output folder first"),
    errno.ENOTDIR: ("the output folder is not a folder", "choose another output folder"),
    errno.EISDIR: ("a folder of that name is in the way", "choose another output folder"),
    errno.ENAMETOOLONG: ("the file name is too long for this file system", "shorten the name"),
    errno.EEXIST: ("the file exists already", "allow overwriting or choose another output folder"),
    errno.EIO: ("the disk reports a write error", "check the disk"),
}

for _name in ("tifffile", "PIL"):  # their complaints about a file reach the user as one sentence of ours
    logging.getLogger(_name).addHandler(logging.NullHandler())


@contextmanager
def reading(path: str | os.PathLike[str]) -> Iterator[None]:
    """Let only a `GraderError` that names the file leave the block.

    Raises
    ------
    MissingFile, DamagedFile, UnsupportedFile
        By the kind of the foreign exception.
    """
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            yield
    except GraderError as problem:
        if problem.path is None:
            problem.path = os.fspath(path)
        raise
    except MemoryError as problem:
        message = "the picture does not fit into memory"
        raise UnsupportedFile(message, path=path, hint="use fewer workers or a larger machine") from problem
    except NotImplementedError as problem:
        raise UnsupportedFile(_words(problem), path=path, hint=CONVERT_HINT) from problem
    except OSError as problem:
        raise _unreadable(problem, path) from problem
    except Exception as problem:  # the one place: what decoders raise on damaged files has no bounds
        message = f"the picture cannot be decoded ({_words(problem)})"
        raise DamagedFile(message, path=path, hint=RECOPY_HINT) from problem


def _unreadable(problem: OSError, path: str | os.PathLike[str]) -> GraderError:
    if problem.errno in _CANNOT_OPEN:
        message, hint = _CANNOT_OPEN[problem.errno]
        return MissingFile(message, path=path, hint=hint)
    message = f"the picture cannot be decoded ({_words(problem)})"  # Pillow raises OSError for damage
    return DamagedFile(message, path=path, hint=RECOPY_HINT)


@contextmanager
def writing(path: str | os.PathLike[str]) -> Iterator[None]:
    """Let only a `GraderError` that names the output leave the block.

    Raises
    ------
    DiskFull, WriteFailed
        With the cause and what to do about it.
    """
    try:
        yield
    except GraderError as problem:
        if problem.path is None:
            problem.path = os.fspath(path)
        raise
    except MemoryError as problem:
        raise WriteFailed("there is not enough memory to encode the picture", path=path) from problem
    except OSError as problem:
        message, hint = _CANNOT_WRITE.get(
            problem.errno or 0, (f"the file cannot be written ({_words(problem)})", "")
        )
        kind = DiskFull if problem.errno in FULL else WriteFailed
        raise kind(message, path=path, hint=hint or None) from problem
    except Exception as problem:  # as above, for encoders
        raise WriteFailed(f"the picture cannot be encoded ({_words(problem)})", path=path) from problem


def _words(problem: BaseException) -> str:
    """Return the exception in at most one short line."""
    text = " ".join(str(problem).split())
    return (f"{type(problem).__name__}: {text}" if text else type(problem).__name__)[:160]
