"""Raw files through LibRaw: linear Rec.2020 at the camera's own balance, the light of the scene."""

from __future__ import annotations

import hashlib
import io
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from os import PathLike, fspath
from pathlib import Path
from typing import Any, Final

import numpy as np
import PIL
import PIL.Image
import rawpy
from numpy.typing import NDArray

from grader.colour.spaces import SPACES
from grader.errors import DamagedFile, UnsupportedFile
from grader.files import border, metadata, raster_reduce
from grader.files.raw_colour import (
    RawColour,
    colour_of,
    daylight_from_decoded,
    sensor_multipliers,
    sensor_of,
)
from grader.files.raw_identify import dng_colour, is_dng, is_raw
from grader.files.raw_reduce import pattern_of, reduce_mosaic
from grader.model import Frame, Header, Metadata, ReadLimits

__all__ = ["is_dng", "is_raw", "read", "read_header", "read_reduced", "sensor_multipliers"]

_DECODE: Final[dict[str, Any]] = {
    "gamma": (1, 1),
    "no_auto_bright": True,
    "adjust_maximum_thr": 0.0,  # else LibRaw stretches each picture by its own maximum
    "output_bps": 16,
    "output_color": rawpy.ColorSpace.Rec2020,
    "highlight_mode": rawpy.HighlightMode.Clip,  # the others darken the picture by the ratio of the balance
    "user_flip": 0,
}
_ORIENTATION: Final = {0: 1, 1: 2, 3: 3, 2: 4, 4: 5, 6: 6, 7: 7, 5: 8}
"""Exif orientation by LibRaw's flip (bits: 1 mirror columns, 2 mirror rows, 4 swap axes)."""
_SIX_LEAST_PX: Final = 512
"""LibRaw's own demosaicing of 6x6 filter arrays works in tiles of this size and refuses smaller pictures."""
_TINY_PX: Final = 64
_BLACK_LEVEL: Final = 0.002
"""A frame whose 99.9th percentile stays below this share of white is called all black. (judgement)"""
_WHITE_LEVEL, _WHITE_SHARE = 0.995, 0.99
"""A frame of which 99 % is at white (its top half per cent) is called all white. (judgement)"""
_TOP: Final = 65_535
_RECOPY: Final = "copy it again from the card or the backup"


def read(path: str | PathLike[str], limits: ReadLimits | None = None) -> Frame:
    """Return a raw file as a frame: uint16, linear Rec.2020, balanced as shot, stored orientation.

    Parameters
    ----------
    path : path-like
    limits : ReadLimits, optional

    Returns
    -------
    Frame
        ``header.daylight_from_decoded`` undoes the balance of the shot; flags tell where it, or the camera's
        matrix, could not be used.  Without a matrix the light's chromaticity is not known, only how far it is from
        the balance of the shot: such a frame is display-referred.

    Raises
    ------
    MissingFile, UnsupportedFile, DamagedFile
    """
    bounds = limits or ReadLimits()
    with _opened(path, bounds) as raw:
        header, blobs, colour = _header(raw, path, bounds)
        pixels = _decoded(raw, colour)
        header = replace(header, width_px=pixels.shape[1], height_px=pixels.shape[0])
        return _frame(header, blobs, pixels, grey=colour.colours == 1)


def read_header(path: str | PathLike[str], limits: ReadLimits | None = None) -> Header:
    """Return a raw file's header without developing its picture.

    Raises
    ------
    MissingFile, UnsupportedFile, DamagedFile
    """
    bounds = limits or ReadLimits()
    with _opened(path, bounds) as raw:
        return _header(raw, path, bounds)[0]


def read_reduced(path: str | PathLike[str], limits: ReadLimits | None = None, target_px: int = 600) -> Frame:
    """Return a raw file as a small frame for measuring, averaged from the mosaic itself.

    Its colours are those of `read`'s pixels averaged; a cell that is mostly clipped is white.

    Parameters
    ----------
    path : path-like
    limits : ReadLimits, optional
    target_px : int
        The longer side comes out at about this, the shorter at most at two thirds of it.

    Raises
    ------
    MissingFile, UnsupportedFile, DamagedFile
    """
    bounds = limits or ReadLimits()
    with _opened(path, bounds) as raw:
        header, blobs, colour = _header(raw, path, bounds)
        pixels = reduce_mosaic(raw, colour, target_px)
        if pixels is not None:
            return _frame(header, blobs, pixels)
        return raster_reduce.reduced(_frame(header, blobs, _decoded(raw, colour, half_size=True)), target_px)


@contextmanager
def _opened(path: str | PathLike[str], limits: ReadLimits) -> Iterator[Any]:
    """Open a raw file, refuse it by its header, unpack it; translate what LibRaw raises."""
    raw = rawpy.RawPy()
    with border.reading(path):
        try:
            _open(raw, path)
            _check_size(raw, limits)
            raw.unpack()
            yield raw
        except (rawpy.LibRawFileUnsupportedError, rawpy.LibRawNotImplementedError) as problem:
            hint = "convert it to DNG or TIFF"
            raise UnsupportedFile("this kind of raw file is not known, or too small", hint=hint) from problem
        except (rawpy.LibRawTooBigError, rawpy.LibRawUnsufficientMemoryError) as problem:
            raise UnsupportedFile("the raw file needs more memory than LibRaw allows") from problem
        except rawpy.LibRawError as problem:
            raise DamagedFile(
                f"the raw file cannot be decoded ({_words(problem)})", hint=_RECOPY
            ) from problem
        finally:
            raw.close()


def _check_size(raw: Any, limits: ReadLimits) -> None:
    sizes = raw.sizes
    pixels = max(sizes.raw_width * sizes.raw_height, sizes.width * sizes.height)
    if pixels > limits.max_pixels:
        raise UnsupportedFile(
            f"the picture has {pixels / 1e6:.0f} million pixels, the limit is {limits.max_pixels / 1e6:.0f}",
            hint="raise --max-pixels if the file is sound",
        )


def _words(problem: BaseException) -> str:
    """Return what LibRaw says (it says it in bytes), or the exception's name."""
    said = problem.args[0] if problem.args else ""
    return (
        said.decode("utf-8", "replace") if isinstance(said, bytes) else str(problem) or type(problem).__name__
    )


def _open(raw: Any, path: str | PathLike[str]) -> None:
    with Path(path).open("rb") as stream:  # LibRaw does not say why a file cannot be opened
        try:
            raw.open_file(fspath(path))
        except UnicodeEncodeError:  # a name that is no UTF-8: LibRaw gets the bytes instead
            raw.open_buffer(stream)


def _decoded(raw: Any, colour: RawColour, *, half_size: bool = False) -> NDArray[np.uint16]:
    """Return LibRaw's decode (H, W, 3); a sensor without colour gives three equal channels."""
    pixels = raw.postprocess(half_size=half_size, **{**_DECODE, **_options(raw, colour)})
    if pixels.ndim == 2 or pixels.shape[2] == 1:
        pixels = np.repeat(pixels.reshape(*pixels.shape[:2], 1), 3, axis=2)
    return np.ascontiguousarray(pixels[..., :3])


def _options(raw: Any, colour: RawColour) -> dict[str, Any]:
    """Return what this file's decode asks for beyond `_DECODE`."""
    stacked = raw.raw_type == rawpy.RawType.Stack
    options: dict[str, Any] = {"user_wb": [float(m) for m in colour.balance]}
    if stacked and colour.as_shot_usable:
        options = {"use_camera_wb": True}  # some of these have their balance applied already; LibRaw knows
    black = raw.black_level_per_channel
    if stacked and black[3] < min(black[:3]):  # LibRaw forgets black when it scales demosaiced kinds
        options["user_sat"] = max(raw.white_level - min(black[:3]), 1)
    if (
        colour.working_from_balanced is None
    ):  # sensor colours lie near Rec.2020's: better than a broken matrix
        options["output_color"] = rawpy.ColorSpace.raw
    pattern = pattern_of(raw)
    if pattern is not None and len(pattern) == 6 and min(raw.sizes.width, raw.sizes.height) < _SIX_LEAST_PX:
        options["demosaic_algorithm"] = rawpy.DemosaicAlgorithm.LINEAR
    return options


def _header(raw: Any, path: str | PathLike[str], limits: ReadLimits) -> tuple[Header, Metadata, RawColour]:
    colour = colour_of(raw, dng_colour(path))
    facts, blobs = _facts(raw, path, limits)
    flags, notes = _judged_colour(raw, colour)
    sizes = raw.sizes
    if min(sizes.width, sizes.height) < _TINY_PX:
        flags.append("few-usable-pixels")
        notes.append(f"the picture is tiny ({sizes.width} x {sizes.height} pixels)")
    with Path(path).open("rb") as stream:
        digest = hashlib.file_digest(stream, "sha256").hexdigest()
    facts |= {"orientation": _ORIENTATION.get(sizes.flip, 1), "notes": (*facts.get("notes", ()), *notes)}
    header = Header(
        file=fspath(path),
        format="raw",
        width_px=sizes.width,
        height_px=sizes.height,
        referred="display" if colour.daylight_from_balanced is None else "scene",
        daylight_from_decoded=daylight_from_decoded(colour),
        sensor=sensor_of(colour),
        sha256=digest,
        flags=tuple(flags),
        **facts,
    )
    return header, blobs, colour


def _judged_colour(raw: Any, colour: RawColour) -> tuple[list[str], list[str]]:
    """Return the flags and notes that the balance and the matrix give rise to."""
    flags, notes = [], []
    if colour.colours == 1:
        flags.append("grey")
        notes.append("the sensor sees no colour; the picture is grey")
    elif colour.working_from_balanced is None:
        flags.append("matrix-missing")
        notes.append("this camera's colour matrix is not known; sensor colours were taken as they are")
    if not colour.as_shot_usable:
        flags.append("balance-unusable")
        given = ", ".join(f"{m:.4g}" for m in raw.camera_whitebalance[:3])
        notes.append(f"the as-shot balance ({given}) is missing or nonsense; the daylight setting was taken")
    return flags, notes


def _frame(header: Header, blobs: Metadata, pixels: NDArray[np.uint16], *, grey: bool = False) -> Frame:
    """Return the frame, flagged where the decode is all black or all white."""
    small = pixels[:: max(pixels.shape[0] // 400, 1), :: max(pixels.shape[1] // 400, 1)]
    found = []
    if np.percentile(small.max(axis=2), 99.9) <= _BLACK_LEVEL * _TOP:
        found.append(("dark", "the decode is all black"))
    if np.mean(small.min(axis=2) >= _WHITE_LEVEL * _TOP) >= _WHITE_SHARE:
        found.append(("clipped", "the decode is all white"))
    if found:
        flags, notes = zip(*found, strict=True)
        header = replace(header, flags=(*header.flags, *flags), notes=(*header.notes, *notes))
    encoding = {"kind": "grey"} if grey else {}
    return Frame(pixels, SPACES["linear Rec.2020"], header, blobs, encoding=encoding)


def _facts(raw: Any, path: str | PathLike[str], limits: ReadLimits) -> tuple[metadata.Facts, Metadata]:
    """Return what the file's own tags tell; where it has none that are known, what its preview and LibRaw tell."""
    facts: metadata.Facts = {}
    blobs = Metadata()
    with Path(path).open("rb") as stream:
        head = stream.read(8)
        if head[:2] in (b"II", b"MM"):
            facts, blobs = metadata.from_tiff(stream, limits)
        elif head[4:8] == b"ftyp":
            facts, blobs = metadata.from_boxes(stream, limits)
    if not facts.keys() - {"notes"}:
        facts, blobs = _preview_facts(raw, limits)
    return {**_libraw_facts(raw), **facts}, blobs


def _preview_facts(raw: Any, limits: ReadLimits) -> tuple[metadata.Facts, Metadata]:
    try:
        preview = raw.extract_thumb()
        if preview.format != rawpy.ThumbFormat.JPEG or len(preview.data) > limits.max_metadata_bytes:
            return {}, Metadata()
        with PIL.Image.open(io.BytesIO(preview.data)) as image:
            return metadata.from_jpeg_info(image.info, limits, getattr(image, "applist", ()))
    except (rawpy.LibRawError, NotImplementedError, OSError, ValueError, SyntaxError, RuntimeError):
        return {}, Metadata()


def _libraw_facts(raw: Any) -> metadata.Facts:
    try:
        other = raw.other
    except (ValueError, OverflowError, OSError):  # a time that is none
        return {}
    facts: metadata.Facts = {}
    if 1980 < other.timestamp.year < 2200:
        facts["taken_at"] = other.timestamp.isoformat(timespec="seconds")
    for name, value in (
        ("exposure_time_s", other.shutter_speed),
        ("f_number", other.aperture),
        ("iso", other.iso_speed),
    ):
        if np.isfinite(value) and 0 < value < 1e7:
            facts[name] = float(value)
    return facts
