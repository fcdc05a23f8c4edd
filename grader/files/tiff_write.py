"""TIFF files out: of the source's kind where the source is a TIFF, else 16 or 8 bits, compressed without loss."""

from __future__ import annotations

from pathlib import Path
from typing import Any, Final

import numpy as np
import tifffile
from numpy.typing import NDArray

from grader.files import metadata, raster, raster_alpha, raster_depth
from grader.files.tiff_pixels import inverted
from grader.model import Frame, Metadata

_DEFLATE: Final = 8
_WRITABLE: Final = {1, 5, 8, 32773, 34925, 50000}
"""None, LZW, deflate, PackBits, LZMA, zstd: kept as they are.  Everything else becomes deflate."""
_PREDICTABLE: Final = {5, 8, 34925, 50000}
_LEVELS: Final = {8: 1, 34925: 1}
"""Deflate level 1: 24 MP at 16 bits in a third of the time of level 6, files some per cent larger."""
_ALPHA: Final = {"associated": 1, "kept-associated": 1, "straight": 2, "unspecified": 0}
_BIG_BYTES: Final = 4_000_000_000


def write(frame: Frame, path: Path, icc: bytes | None, carried: Metadata) -> tuple[str, ...]:
    """Write a frame as TIFF to a path that is nobody else's, and return notes on what could not be kept."""
    encoding = frame.encoding if frame.header.format == "tiff" else {}
    notes: list[str] = []
    data, photometric, alpha = _samples(frame, encoding)
    fixed: dict[str, Any] = {"photometric": photometric, "iccprofile": icc, **_resolution(frame.encoding)}
    if alpha is not None:
        fixed["extrasamples"] = [alpha]
    if encoding.get("planar") and data.ndim == 3:
        data = np.ascontiguousarray(np.moveaxis(data, -1, 0))
        fixed["planarconfig"] = "separate"
    options = _layout(data, encoding, notes)
    options |= _packing(data, frame, encoding, options, notes)
    big = bool(encoding.get("bigtiff")) or data.nbytes > _BIG_BYTES
    byteorder = encoding.get("byteorder", metadata.byte_order(carried))
    try:
        _save(path, data, fixed | options, big=big, byteorder=byteorder)
    except ValueError:  # a layout that was read but that no writer makes
        notes.append("its layout cannot be written: deflate in strips was taken")
        _save(path, data, fixed | _layout(data, {}, notes), big=big, byteorder=byteorder)
    del data
    metadata.write_into_tiff(path, carried)
    return tuple(notes)


def _save(path: Path, data: NDArray[Any], options: dict[str, Any], *, big: bool, byteorder: str) -> None:
    with tifffile.TiffWriter(path, bigtiff=big, byteorder=byteorder) as writer:
        writer.write(data, software=False, metadata=None, maxworkers=1, **options)


def _samples(frame: Frame, encoding: Any) -> tuple[NDArray[Any], str, int | None]:
    """Return the samples as they are stored, their photometric kind, and the kind of the extra one."""
    pixels, photometric = frame.pixels, "rgb"
    alpha_kind = frame.encoding.get("alpha", "straight")
    if frame.alpha is not None and alpha_kind == "associated":
        pixels = raster_alpha.associated(pixels, frame.alpha)
    if raster.is_grey(frame):
        pixels, photometric = pixels[..., :1], "minisblack"
    pixels = _depth(pixels, frame, encoding)
    if photometric == "minisblack" and encoding.get("min_is_white"):
        photometric = "miniswhite"
        pixels = inverted(pixels, _bits(pixels, frame, encoding))
    if frame.alpha is not None:
        alpha = _depth(frame.alpha, frame, encoding)
        return np.concatenate([pixels, alpha[..., None]], axis=2), photometric, _ALPHA[alpha_kind]
    return (pixels[..., 0] if pixels.shape[2] == 1 else pixels), photometric, None


def _bits(pixels: NDArray[Any], frame: Frame, encoding: Any) -> int:
    if encoding and not _recoded(frame):
        return int(encoding["bits"])
    return 8 * pixels.dtype.itemsize


def _recoded(frame: Frame) -> bool:
    """Return whether the frame's pixels are no longer what the file stored (inks, palettes, tables)."""
    return "converted" in frame.header.flags


def _depth(pixels: NDArray[Any], frame: Frame, encoding: Any) -> NDArray[Any]:
    """Return pixels at the depth that the source stored."""
    if not encoding or _recoded(frame):
        return pixels
    if encoding["sample"] == "uint":
        return raster_depth.unscaled(pixels, encoding["bits"])
    if pixels.dtype != np.float32:
        return pixels
    kind = {2: np.float16, 8: np.float64}.get(encoding["sample_bytes"], np.float32)
    with np.errstate(over="ignore"):
        return pixels.astype(kind, copy=False)


def _layout(data: NDArray[Any], encoding: Any, notes: list[str]) -> dict[str, Any]:
    """Return compression, predictor, strips or tiles: the source's, where they can be written."""
    compression = encoding.get("compression", _DEFLATE)
    predictor = encoding.get("predictor", 2 if data.dtype.kind == "u" else 3)
    if compression == 32946:  # the same deflate under its older number
        compression = _DEFLATE
    if compression not in _WRITABLE:
        notes.append("its compression cannot be written without loss: deflate was taken")
        compression, predictor = _DEFLATE, 2 if data.dtype.kind == "u" else 3
    options: dict[str, Any] = {}
    if encoding.get("tile") and all(side % 16 == 0 for side in encoding["tile"]):
        options["tile"] = encoding["tile"]
    elif encoding.get("rows_per_strip"):
        options["rowsperstrip"] = encoding["rows_per_strip"]
    if compression != 1:
        options["compression"] = compression
        if compression in _LEVELS:
            options["compressionargs"] = {"level": _LEVELS[compression]}
    if compression in _PREDICTABLE and predictor in (2, 3):
        options["predictor"] = 2 if data.dtype.kind == "u" else 3
    return options


def _packing(
    data: NDArray[Any], frame: Frame, encoding: Any, options: dict[str, Any], notes: list[str]
) -> dict[str, Any]:
    """Return the bits per sample where they are odd and can be packed; else they stay spread over whole bytes."""
    bits = _bits(data, frame, encoding)
    if data.dtype.kind != "u" or bits == 8 * data.dtype.itemsize:
        return {}
    if "compression" in options or "tile" in options:
        notes.append(f"{bits}-bit samples are packed without compression, in strips")
        options.pop("compression", None)
        options.pop("compressionargs", None)
        options.pop("predictor", None)
        options.pop("tile", None)
    return {"bitspersample": bits}


def _resolution(encoding: Any) -> dict[str, Any]:
    resolution = encoding.get("resolution")
    if resolution is None:
        return {}
    x, y, unit = resolution
    return {"resolution": (x, y), "resolutionunit": unit if unit in (1, 2, 3) else 1}
