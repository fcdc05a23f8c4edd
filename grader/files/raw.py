"""Raw files through LibRaw: linear Rec.2020 at the camera's own balance, the light of the scene."""

from __future__ import annotations

import io
from collections.abc import Iterator
from contextlib import contextmanager
from os import PathLike, fspath
from pathlib import Path
from typing import Any, Final

import numpy as np
import PIL
import PIL.Image
import rawpy
from numpy.typing import NDArray

from grader.colour.spaces import SPACES
from grader.errors import DamagedFile, MissingFile, UnsupportedFile
from grader.files import metadata
from grader.files.raw_colour import (
    RawColour,
    colour_of,
    daylight_from_decoded,
    sensor_multipliers,
    sensor_of,
)
from grader.files.raw_identify import is_dng, is_raw
from grader.files.raw_reduce import reduce_mosaic
from grader.model import Frame, Header, Metadata, ReadLimits

__all__ = ["is_raw", "read", "read_reduced", "sensor_multipliers"]

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
_TINY_PX: Final = 16
_BLACK_LEVEL: Final = 0.002
"""A frame whose 99.9th percentile stays below this share of white is called all black. (judgement)"""
_WHITE_SHARE: Final = 0.99
"""A frame of which this share is at white is called all white. (judgement)"""
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
        matrix, could not be used.

    Raises
    ------
    MissingFile, UnsupportedFile, DamagedFile
    """
    bounds = limits or ReadLimits()
    with _opened(path, bounds) as raw:
        colour = _colour(raw, path)
        return _frame(raw, path, colour, _decoded(raw, colour), bounds)


def read_reduced(path: str | PathLike[str], limits: ReadLimits | None = None, target_px: int = 600) -> Frame:
    """Return a raw file as a small frame for measuring, averaged from the mosaic itself.

    Its colours are those of `read`'s pixels averaged; a cell that is mostly clipped is white.

    Parameters
    ----------
    path : path-like
    limits : ReadLimits, optional
    target_px : int
        The longer side comes out between this and twice this, or larger where the file leaves no other way.

    Raises
    ------
    MissingFile, UnsupportedFile, DamagedFile
    """
    bounds = limits or ReadLimits()
    with _opened(path, bounds) as raw:
        colour = _colour(raw, path)
        pixels = reduce_mosaic(raw, colour, target_px)
        if pixels is None:
            pixels = _decoded(raw, colour, half_size=True)
        return _frame(raw, path, colour, pixels, bounds)


@contextmanager
def _opened(path: str | PathLike[str], limits: ReadLimits) -> Iterator[Any]:
    """Open a raw file, refuse it by its header, unpack it; translate what LibRaw raises."""
    raw = rawpy.RawPy()
    try:
        _open(raw, path)
        sizes = raw.sizes
        pixels = max(sizes.raw_width * sizes.raw_height, sizes.width * sizes.height)
        if pixels > limits.max_pixels:
            raise UnsupportedFile(
                f"the picture has {pixels / 1e6:.0f} million pixels, the limit is {limits.max_pixels / 1e6:.0f}",
                path=path,
                hint="raise --max-pixels if the file is sound",
            )
        raw.unpack()
        yield raw
    except (
        rawpy.LibRawFileUnsupportedError,
        rawpy.LibRawNotImplementedError,
        NotImplementedError,
    ) as problem:
        raise UnsupportedFile(
            "this kind of raw file is not known", path=path, hint="convert it to DNG or TIFF"
        ) from problem
    except (rawpy.LibRawTooBigError, rawpy.LibRawUnsufficientMemoryError, MemoryError) as problem:
        raise UnsupportedFile("the raw file needs more memory than there is", path=path) from problem
    except FileNotFoundError as problem:
        raise MissingFile("there is no such file", path=path, hint="check the path") from problem
    except (
        rawpy.LibRawError,
        ArithmeticError,
        LookupError,
        OSError,
        RuntimeError,
        TypeError,
        ValueError,
    ) as problem:
        raise DamagedFile(f"the raw file cannot be decoded ({problem})", path=path, hint=_RECOPY) from problem
    finally:
        raw.close()


def _open(raw: Any, path: str | PathLike[str]) -> None:
    try:
        raw.open_file(fspath(path))
    except UnicodeEncodeError:  # a name that is no UTF-8: LibRaw gets the bytes instead
        with Path(path).open("rb") as stream:
            raw.open_buffer(stream)


def _colour(raw: Any, path: str | PathLike[str]) -> RawColour:
    return colour_of(raw, dng=is_dng(path))


def _decoded(raw: Any, colour: RawColour, *, half_size: bool = False) -> NDArray[np.uint16]:
    """Return LibRaw's decode (H, W, 3); a copy, because LibRaw's memory goes when the file is closed."""
    balance = {"user_wb": [float(m) for m in colour.balance]}
    if raw.raw_type == rawpy.RawType.Stack and colour.as_shot_usable:
        balance = {"use_camera_wb": True}  # some of these have their balance applied already; LibRaw knows
    pixels = raw.postprocess(half_size=half_size, **balance, **_DECODE)
    if pixels.ndim == 2:
        pixels = pixels[..., None]
    return np.array(np.broadcast_to(pixels[..., :3], (*pixels.shape[:2], 3)))


def _frame(
    raw: Any, path: str | PathLike[str], colour: RawColour, pixels: NDArray[np.uint16], limits: ReadLimits
) -> Frame:
    facts, blobs = _facts(raw, path, limits)
    flags, notes = _judged(raw, colour, pixels)
    sizes = raw.sizes
    header = Header(
        file=fspath(path),
        format="raw",
        width_px=sizes.width,
        height_px=sizes.height,
        referred="scene",
        daylight_from_decoded=daylight_from_decoded(colour),
        sensor=sensor_of(colour),
        flags=flags,
        notes=(*facts.pop("notes", ()), *notes),
        **{**facts, "orientation": _ORIENTATION.get(sizes.flip, 1)},
    )
    return Frame(pixels, SPACES["linear Rec.2020"], header, blobs)


def _facts(raw: Any, path: str | PathLike[str], limits: ReadLimits) -> tuple[metadata.Facts, Metadata]:
    """Return what the file's own tags tell; where it has no TIFF structure, what its preview and LibRaw tell."""
    with Path(path).open("rb") as stream:
        if stream.read(2) in (b"II", b"MM"):
            facts, blobs = metadata.from_tiff(stream, limits)
            if facts.keys() - {"notes"}:
                return facts, blobs
    facts, blobs = _preview_facts(raw, limits)
    return {**_libraw_facts(raw), **facts}, blobs


def _preview_facts(raw: Any, limits: ReadLimits) -> tuple[metadata.Facts, Metadata]:
    try:
        preview = raw.extract_thumb()
        if preview.format != rawpy.ThumbFormat.JPEG or len(preview.data) > limits.max_metadata_bytes:
            return {}, Metadata()
        with PIL.Image.open(io.BytesIO(preview.data)) as image:
            return metadata.from_jpeg_info(image.info, limits)
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


def _judged(
    raw: Any, colour: RawColour, pixels: NDArray[np.uint16]
) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Return the flags and notes that decoding gives rise to."""
    flags, notes = [], []
    if colour.colours == 1:
        notes.append("the sensor sees no colour; the picture is grey")
    elif colour.working_from_balanced is None:
        flags.append("matrix-missing")
        notes.append(
            "neither the file nor LibRaw gives this camera's colour matrix; sensor colours were taken as they are"
        )
    if not colour.as_shot_usable:
        flags.append("balance-unusable")
        given = ", ".join(f"{m:.4g}" for m in raw.camera_whitebalance[:3])
        notes.append(f"the as-shot balance ({given}) is missing or nonsense; the daylight setting was taken")
    small = pixels[:: max(pixels.shape[0] // 500, 1), :: max(pixels.shape[1] // 500, 1)]
    if np.percentile(small.max(axis=2), 99.9) <= _BLACK_LEVEL * 65_535:
        flags.append("dark")
        notes.append("the decode is all black")
    if np.mean(small.min(axis=2) >= 65_535) >= _WHITE_SHARE:
        flags.append("clipped")
        notes.append("the decode is all white")
    if min(raw.sizes.width, raw.sizes.height) < _TINY_PX:
        flags.append("few-usable-pixels")
        notes.append(f"the decode is tiny ({raw.sizes.width} x {raw.sizes.height} pixels)")
    return tuple(flags), tuple(notes)
