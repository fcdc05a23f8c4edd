"""Tell raw files from pictures by their content."""

from __future__ import annotations

from os import PathLike, fspath
from pathlib import Path
from typing import BinaryIO, Final

import rawpy

from grader.files.metadata_tree import BrokenStructure, Places, Structure, numbers
from grader.files.raw_colour import AS_SHOT_WHITE_XY, COLOUR_MATRICES, DngColour

_DNG_VERSION, _MAKE, _WIDTH, _HEIGHT, _PHOTOMETRIC = 0xC612, 0x010F, 0x0100, 0x0101, 0x0106
_SENSOR_PHOTOMETRIC: Final = {32_803, 34_892}
"""Colour filter array (TIFF/EP, ISO 12234-2) and linear raw (DNG)."""
_PICTURE_PHOTOMETRIC: Final = set(range(11))
_PICTURE_STARTS: Final = (
    b"\xff\xd8\xff",
    b"\x89PNG\r\n\x1a\n",
    b"GIF8",
    b"BM",
    b"%PDF",
    b"8BPS",
    b"PK\x03\x04",
)
_RAW_STARTS: Final = (b"FUJIFILMCCD-RAW", b"\0MRM", b"FOVb", b"IIRO", b"IIRS", b"MMOR", b"IIU\0")
_HEADER_BYTES: Final = 32
_COLOUR_BYTES: Final = 512


def is_raw(path: str | PathLike[str]) -> bool:
    """Return whether a file holds sensor data, by its content.

    A TIFF structure is raw when it is a DNG (its DNGVersion tag), when one of its directories holds a mosaic or
    linear sensor data, or when it is a camera's file whose largest picture only LibRaw knows to read.  Other files
    are raw when they begin like one, or when LibRaw identifies them.

    Parameters
    ----------
    path : path-like

    Raises
    ------
    OSError
        The file cannot be opened.
    """
    with Path(path).open("rb") as stream:
        head = stream.read(_HEADER_BYTES)
        if head.startswith(_PICTURE_STARTS) or len(head) < _HEADER_BYTES:
            return False
        if head.startswith(_RAW_STARTS) or head[6:14] == b"HEAPCCDR" or head[4:12] == b"ftypcrx ":
            return True
        if (
            head[:4] == b"II*\0" and head[8:10] == b"CR"
        ):  # its preview may be as large as the sensor's picture
            return True
        if head[:4] not in (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+"):
            return _libraw_size(path) > 0
        return _tiff_is_raw(path, stream)


def is_dng(path: str | PathLike[str]) -> bool:
    """Return whether a file is a DNG: a TIFF structure with a DNGVersion tag in its first directory."""
    return dng_colour(path) is not None


def dng_colour(path: str | PathLike[str]) -> DngColour | None:
    """Return a DNG's colour tags as numbers; None where the file is no DNG."""
    try:
        with Path(path).open("rb") as stream:
            structure = Structure(stream)
            places, _ = structure.directory(structure.first)
            if _DNG_VERSION not in places:
                return None
            tags = {}
            for tag in (*COLOUR_MATRICES, AS_SHOT_WHITE_XY):
                field = structure.field(places[tag], _COLOUR_BYTES) if tag in places else None
                if field is not None:
                    tags[tag] = numbers(field, structure.order)
            return tags
    except BrokenStructure:
        return None


def _tiff_is_raw(path: str | PathLike[str], stream: BinaryIO) -> bool:
    try:
        structure = Structure(stream)
        directories = list(structure.walk())
    except BrokenStructure:
        return False
    if not directories:
        return False
    if _DNG_VERSION in directories[0]:
        return True
    if any(_value(structure, d, _PHOTOMETRIC) in _SENSOR_PHOTOMETRIC for d in directories):
        return True
    if _MAKE not in directories[0]:
        return False
    pictures = [_picture_size(structure, d) for d in directories]
    return _libraw_size(path) > 1.05 * max(pictures)


def _value(structure: Structure, places: Places, tag: int) -> int | None:
    values = structure.offsets(places[tag]) if tag in places else []
    return values[0] if values else None


def _picture_size(structure: Structure, places: Places) -> int:
    """Return the number of pixels of a directory's ordinary picture; 0 where it is none."""
    width, height = (_value(structure, places, tag) or 0 for tag in (_WIDTH, _HEIGHT))
    return width * height if _value(structure, places, _PHOTOMETRIC) in _PICTURE_PHOTOMETRIC else 0


def _libraw_size(path: str | PathLike[str]) -> int:
    """Return the number of pixels that LibRaw would decode; 0 where it does not know the file."""
    raw = rawpy.RawPy()
    try:
        raw.open_file(fspath(path))
        return int(raw.sizes.width) * int(raw.sizes.height)
    except (rawpy.LibRawError, OSError, ValueError, RuntimeError):
        return 0
    finally:
        raw.close()
