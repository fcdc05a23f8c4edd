"""How large a picture is, from its header alone."""

from __future__ import annotations

from dataclasses import dataclass
from os import PathLike
from pathlib import Path

import PIL.Image
import tifffile

from grader.errors import UnsupportedFile
from grader.files import border, raw
from grader.files.reading import Kind, kind_of
from grader.model import ReadLimits


@dataclass(frozen=True, slots=True)
class Extent:
    """Kind and size of a picture as its header states them."""

    kind: Kind
    width_px: int
    height_px: int
    sample_bytes: int
    """Bytes of one channel's value once decoded: 1, 2 or 4."""


def extent(path: str | PathLike[str], limits: ReadLimits | None = None) -> Extent:
    """Return the extent of a picture without decoding it.

    Raises
    ------
    MissingFile, UnsupportedFile, DamagedFile
        As for `grader.files.read`, as far as the header shows it.
    """
    place, limits = Path(path), limits or ReadLimits()
    with border.reading(place):
        kind = kind_of(place, limits)
        if kind == "raw":
            header = raw.read_header(place, limits)
            return Extent(kind, header.width_px, header.height_px, 2)
        if kind == "tiff":
            with tifffile.TiffFile(place) as tif:
                page = tif.pages.first
                if page.dtype is None:
                    raise UnsupportedFile("the file holds samples of an unknown type")
                return Extent(kind, page.imagewidth, page.imagelength, min(page.dtype.itemsize, 4))
        with PIL.Image.open(place) as image:
            deep = kind == "png" and _png_depth(place) == 16
            return Extent(kind, image.width, image.height, 2 if deep else 1)


def _png_depth(path: Path) -> int:
    with path.open("rb") as stream:
        return stream.read(25)[-1]  # IHDR comes first: signature 8, length and name 8, size 8, then the depth
