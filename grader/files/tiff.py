"""TIFF files in: the full-size picture of a file, checked from the header before anything is allocated."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from itertools import islice
from pathlib import Path
from typing import Any, Final

import tifffile

from grader.errors import DamagedFile
from grader.files import metadata, raster_colour, raster_frame, tiff_check, tiff_pixels
from grader.files.border import RECOPY_HINT
from grader.model import Frame, ReadLimits

_MOST_PAGES: Final = 256
_REDUCED, _MASK = 1, 4


@dataclass(frozen=True, slots=True, eq=False)
class Choice:
    """The page that is graded, and what to say about the others."""

    page: Any
    others: int
    place: str


def read(path: Path, limits: ReadLimits) -> Frame:
    """Return the full-size picture of a TIFF file.

    Raises
    ------
    UnsupportedFile, DamagedFile
        See `tiff_check.check`.
    """
    with path.open("rb") as handle:
        sha256 = hashlib.file_digest(handle, "sha256").hexdigest()
        size = handle.tell()
        handle.seek(0)
        with tifffile.TiffFile(handle, name=path.name) as tif:
            choice = choose(tif)
            tiff_check.check(choice.page, size, limits)
            decoded = tiff_pixels.decode(choice.page)
    if choice.others:
        decoded.flag(
            "page-chosen",
            f"{choice.place} of {choice.others + 1} pictures in the file was taken, the full-size one; "
            "only that one is written",
        )
    decoded.facts, decoded.metadata = metadata.from_tiff(path, limits)
    if decoded.samples.dtype.kind == "u":
        decoded.space = raster_colour.space_by_exif(decoded.metadata)
    return raster_frame.frame_from_decoded(decoded, path, sha256)


def choose(tif: Any) -> Choice:
    """Return the largest picture that is neither a preview nor a mask; the first of equal ones."""
    found: list[tuple[str, Any]] = []
    for index, page in enumerate(islice(tif.pages, _MOST_PAGES)):
        found.append((f"picture {index + 1}", page))
        found += [
            (f"a sub-picture of picture {index + 1}", sub) for sub in islice(page.pages or (), _MOST_PAGES)
        ]
    found = [(place, page) for place, page in found if isinstance(page, tifffile.TiffPage)]
    if not found:
        raise DamagedFile("its table of contents is missing or damaged", hint=RECOPY_HINT)
    whole = [(place, page) for place, page in found if not int(page.subfiletype) & (_REDUCED | _MASK)]
    place, page = max(whole or found, key=lambda item: item[1].imagewidth * item[1].imagelength)
    return Choice(page, len(found) - 1, place)
