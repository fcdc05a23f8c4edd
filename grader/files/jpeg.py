"""JPEG files in and out, through libjpeg-turbo (in imagecodecs and Pillow)."""

from __future__ import annotations

import hashlib
import io
from pathlib import Path
from typing import Any, Final

import imagecodecs
import numpy as np
from numpy.typing import NDArray
from PIL import Image, JpegImagePlugin

from grader.errors import DamagedFile
from grader.files import (
    jpeg_entropy,
    jpeg_markers,
    metadata,
    raster,
    raster_colour,
    raster_depth,
    raster_frame,
    raster_resolution,
)
from grader.files.border import RECOPY_HINT
from grader.model import Frame, Metadata, ReadLimits

_KINDS: Final[dict[str, raster.Kind]] = {"L": "grey", "RGB": "rgb", "CMYK": "cmyk"}
_DEFAULT_QUALITY: Final = 95


def read(path: Path, limits: ReadLimits) -> Frame:
    """Return the (first) picture of a JPEG file.

    Raises
    ------
    DamagedFile
        It is cut short, or its coded data do not make a whole picture.
    UnsupportedFile
        It is coded in a way that is not decoded, or too large.
    """
    data = path.read_bytes()
    layout = jpeg_markers.parse(data)
    jpeg_markers.check_supported(layout)
    raster.check_size(layout.width_px, layout.height_px, limits)
    checked = jpeg_entropy.check(data, layout)
    digest = hashlib.sha256(data).hexdigest()
    if not layout.ended:
        data += b"\xff\xd9"
    image: Any = JpegImagePlugin.JpegImageFile(io.BytesIO(data))
    samples = _samples(data, image, checked=checked)
    decoded = raster.Decoded(samples, _KINDS[image.mode], 8, "jpeg", icc=image.info.get("icc_profile"))
    decoded.encoding = _encoding(image, layout)
    decoded.facts, decoded.metadata = metadata.from_jpeg_info(image.info, limits, image.applist)
    decoded.space = raster_colour.space_by_exif(decoded.metadata)
    _tell(decoded, image, layout)
    return raster_frame.frame_from_decoded(decoded, path, digest)


def _samples(data: bytes, image: Any, *, checked: bool) -> NDArray[Any]:
    """Return (H, W, channels).

    imagecodecs takes a third of Pillow's memory and half its time for the same values, but calls anything a
    whole picture: it decodes what was checked.  Pillow decodes the rest, and inks, whose polarity it knows.
    """
    if checked and image.mode != "CMYK":
        samples = np.asarray(imagecodecs.jpeg8_decode(data))
    else:
        image.load()
        samples = np.asarray(image)
    samples = samples[..., None] if samples.ndim == 2 else samples
    if samples.shape != (image.height, image.width, len(image.mode)):
        raise DamagedFile("the picture has another size than its header claims", hint=RECOPY_HINT)
    return samples


def _tell(decoded: raster.Decoded, image: Any, layout: jpeg_markers.Layout) -> None:
    """Say what the log should know."""
    if "mp" in image.info:
        decoded.notes.append(
            "the file holds further pictures (previews, views or a gain map); they are not kept"
        )
    if not layout.ended:
        decoded.notes.append("the end marker is missing; the picture itself is whole")
    if image.info.get("icc_profile", b"") is None:
        decoded.flag(
            "profile-broken", "the colour profile in the file cannot be used: a part of it is missing"
        )


def _encoding(image: Any, layout: jpeg_markers.Layout) -> dict[str, Any]:
    """Return what a writer needs to write a JPEG of the same quality (keys: see ``grader.files``)."""
    return {
        "quantisation": tuple(tuple(image.quantization.get(c.table, ())) for c in layout.components),
        "sampling": tuple((c.horizontal, c.vertical) for c in layout.components),
        "progressive": layout.progressive,
        "stored_rgb": image.info.get("adobe_transform") == 0 and len(layout.components) == 3,
        "comment": image.info.get("comment"),
        "resolution": raster_resolution.from_jfif(
            image.info.get("jfif_unit", 0), image.info.get("jfif_density", (0, 0))
        ),
    }


def encode(frame: Frame, icc: bytes | None, carried: Metadata) -> tuple[bytes, tuple[str, ...]]:
    """Return the frame as JPEG, and notes on what could not be kept.

    Quantisation and sampling are the source's, or finer; quality 95 and 4:4:4 where the source has none.
    """
    pixels = raster_depth.to_eight_bits(frame.pixels)
    if raster.is_grey(frame):
        pixels = np.ascontiguousarray(pixels[..., 0])
    options: dict[str, Any] = {"subsampling": 0, "extra": metadata.jpeg_segments(carried)}
    options |= _as_source(frame, grey=pixels.ndim == 2)
    if "qtables" not in options:  # beside tables, Pillow would scale them by the quality
        options["quality"] = _DEFAULT_QUALITY
    if icc is not None:
        options["icc_profile"] = icc
    notes: tuple[str, ...] = () if frame.alpha is None else ("the alpha channel was left out: JPEG has none",)
    try:
        data = _saved(pixels, options)
    except OSError:  # Pillow's buffer holds two bytes a pixel; only baseline data go through it in pieces
        if not options.pop("progressive", False):
            raise
        data = _saved(pixels, options)
        notes += ("too much detail for progressive coding here: written as baseline",)
    return _with_resolution(data, raster_resolution.to_jfif(frame.encoding.get("resolution"))), notes


def _saved(pixels: NDArray[Any], options: dict[str, Any]) -> bytes:
    buffer = io.BytesIO()
    Image.fromarray(pixels).save(buffer, "JPEG", **options)
    return buffer.getvalue()


def _with_resolution(data: bytes, density: bytes | None) -> bytes:
    """Return a JPEG with its JFIF header's unit and densities replaced, if it has that header."""
    if density is None or data[2:11] != b"\xff\xe0\0\x10JFIF\0":
        return data
    return data[:13] + density + data[18:]


def _as_source(frame: Frame, *, grey: bool) -> dict[str, Any]:
    options: dict[str, Any] = {}
    encoding = frame.encoding
    if encoding.get("progressive"):
        options["progressive"] = True
    if encoding.get("comment"):
        options["comment"] = encoding["comment"]
    tables = encoding.get("quantisation", ())
    if not tables or any(len(t) != 64 for t in tables):
        return options
    luma = _writable(tables[0])
    if grey or len(tables) == 1:
        options["qtables"] = [luma]
        if not grey:
            options["qtables"] = [luma, luma]
        return options
    if len(tables) == 4:  # inks: no table fits; the finest of them is at least as good
        finest = _writable(np.min(tables, axis=0))
        options["qtables"] = [finest, finest]
        return options
    if encoding.get("stored_rgb"):
        finest = _writable(np.min(tables, axis=0))
        options |= {"qtables": [finest, finest], "keep_rgb": True}
        return options
    options["qtables"] = [luma, _writable(np.min(tables[1:], axis=0))]
    options["subsampling"] = _SUBSAMPLING.get(tuple(encoding.get("sampling", ())), 0)
    return options


_SUBSAMPLING: Final = {
    ((2, 1), (1, 1), (1, 1)): 1,
    ((2, 2), (1, 1), (1, 1)): 2,
}
"""Pillow's numbers for 4:2:2 and 4:2:0; everything else is written 4:4:4."""


def _writable(table: Any) -> list[int]:
    """Return a table that a baseline JPEG can hold."""
    return [int(min(max(v, 1), 255)) for v in table]
