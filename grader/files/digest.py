"""A file's SHA-256, by which a run knows its sources and outputs again."""

from __future__ import annotations

import hashlib
from os import PathLike
from pathlib import Path

from grader.files import border


def hash_file(path: str | PathLike[str]) -> str:
    """Return the SHA-256 of a file as hexadecimal digits, read in pieces.

    Raises
    ------
    MissingFile
        It is not there or may not be opened.
    """
    with border.reading(Path(path)), Path(path).open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()
