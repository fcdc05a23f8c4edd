"""Frames in: the kind of a file is told by what it holds, never by its name."""

from __future__ import annotations

import stat
from collections.abc import Callable
from os import PathLike
from pathlib import Path
from typing import Final, Literal

from grader.errors import DamagedFile, UnsupportedFile
from grader.files import border, jpeg, png, raster_reduce, raw, tiff
from grader.files.border import CONVERT_HINT, RECOPY_HINT
from grader.model import Frame, ReadLimits

Kind = Literal["raw", "tiff", "jpeg", "png"]
_LIMITS: Final = ReadLimits()
_TIFF_MAGIC: Final = (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")
_PNG_MAGIC: Final = b"\x89PNG\r\n\x1a\n"
_MOST_BYTES_PER_PIXEL: Final = 16

_OTHERS: Final[tuple[tuple[int, bytes, str], ...]] = (
    (0, b"GIF8", "a GIF picture"),
    (0, b"BM", "a BMP picture"),
    (8, b"WEBP", "a WebP picture"),
    (4, b"ftypheic", "a HEIF picture"),
    (4, b"ftypheix", "a HEIF picture"),
    (4, b"ftypmif1", "a HEIF picture"),
    (4, b"ftypavif", "an AVIF picture"),
    (0, b"\0\0\0\x0cjP  ", "a JPEG 2000 picture"),
    (0, b"\xff\x4f\xff\x51", "a JPEG 2000 picture"),
    (0, b"\0\0\0\x0cJXL ", "a JPEG XL picture"),
    (0, b"\xff\x0a", "a JPEG XL picture"),
    (0, b"v/1\x01", "an OpenEXR picture"),
    (0, b"8BPS", "a layered picture"),
    (0, b"8BPB", "a layered picture"),
    (0, b"\x8aMNG", "an MNG animation"),
    (0, b"\x8bJNG", "a JNG picture"),
    (0, b"II\xbc", "a JPEG XR picture"),
    (0, b"SIMPLE  =", "a FITS picture"),
    (0, b"#?RADIANCE", "a Radiance picture"),
    (0, b"%PDF", "a PDF document"),
    (0, b"PK\x03\x04", "a ZIP archive"),
    (4, b"ftyp", "a film or a picture in a film container"),
)
"""Kinds that are known and not graded, by the bytes at a place."""


def read(path: str | PathLike[str], limits: ReadLimits = _LIMITS) -> Frame:
    """Return a whole photograph.

    Parameters
    ----------
    path : path-like
        A raw file, TIFF, JPEG or PNG; what it is, is told by its contents.
    limits : ReadLimits
        What to refuse from the header.

    Returns
    -------
    Frame
        Pixels as stored (orientation not applied) and what is needed to write the same kind of file again.

    Raises
    ------
    MissingFile
        It is not there or may not be opened.
    UnsupportedFile
        It is sound, but not of a kind that is graded, or too large.
    DamagedFile
        It is cut short or corrupt.
    """
    place = Path(path)
    with border.reading(place):
        return _READERS[kind_of(place, limits)](place, limits)


def read_reduced(path: str | PathLike[str], limits: ReadLimits = _LIMITS, target_px: int = 600) -> Frame:
    """Return a small frame that measures like the whole one.

    Its longer side is between ``target_px`` and twice that, or what the file has; values are averaged in
    linear light.

    Raises
    ------
    MissingFile, UnsupportedFile, DamagedFile
        As for `read`.
    """
    place = Path(path)
    with border.reading(place):
        kind = kind_of(place, limits)
        if kind == "raw":
            return raw.read_reduced(place, limits, target_px)
        return raster_reduce.reduced(_READERS[kind](place, limits), target_px)


def kind_of(path: Path, limits: ReadLimits = _LIMITS) -> Kind:
    """Return what a file is, by its first bytes.

    Raises
    ------
    MissingFile, UnsupportedFile, DamagedFile
    """
    with border.reading(path):
        state = path.stat()
        if not stat.S_ISREG(state.st_mode) and not stat.S_ISDIR(state.st_mode):
            raise UnsupportedFile("it is not a regular file")
        with path.open("rb") as stream:
            head = stream.read(512)
        if not head:
            raise DamagedFile("the file is empty", hint=RECOPY_HINT)
        if head.startswith((b"\xff\xd8\xff", _PNG_MAGIC)):
            _check_length(state.st_size, limits)
            return "jpeg" if head[0] == 0xFF else "png"
        if raw.is_raw(path):
            return "raw"
        if head.startswith(_TIFF_MAGIC):
            return "tiff"
        raise _unknown(head)


def _check_length(size: int, limits: ReadLimits) -> None:
    if size > limits.max_pixels * _MOST_BYTES_PER_PIXEL + limits.max_metadata_bytes:
        raise UnsupportedFile(f"the file is too large ({size / 1e9:.1f} GB) for any picture within the limit")


def _unknown(head: bytes) -> UnsupportedFile | DamagedFile:
    if not head.strip(b"\0"):
        return DamagedFile("the file holds only zeros", hint=RECOPY_HINT)
    if head[1:4] == b"PNG" or head[:2] == b"\xff\xd8":
        return DamagedFile(
            "the first bytes of the picture are damaged", hint="copy it again without conversion"
        )
    for offset, magic, name in _OTHERS:
        if head.startswith(magic, offset):
            return UnsupportedFile(f"it is {name}, which is not graded", hint=CONVERT_HINT)
    return UnsupportedFile("it is not a picture of a kind that is graded (raw, TIFF, JPEG, PNG)")


_READERS: Final[dict[Kind, Callable[[Path, ReadLimits], Frame]]] = {
    "raw": raw.read,
    "tiff": tiff.read,
    "jpeg": jpeg.read,
    "png": png.read,
}
