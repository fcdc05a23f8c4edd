"""A file's SHA-256, by which a run knows its sources and outputs again."""

from __future__ import annotations

import hashlib
import stat
from os import PathLike
from pathlib import Path

from grader.errors import UnsupportedFile
from grader.files import border


def hash_file(path: str | PathLike[str]) -> str:
    """Return the SHA-256 of a file as hexadecimal digits, read in pieces.

    Raises
    ------
    MissingFile
        It is not there or may not be opened.
    UnsupportedFile
        It is a pipe, a device or the like, which might never end.
    """
    with border.reading(Path(path)):
        if not stat.S_ISREG(Path(path).stat().st_mode):
            raise UnsupportedFile("it is not a regular file")
    with border.reading(Path(path)), Path(path).open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()
