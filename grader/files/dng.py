"""Copies of DNG files that open with another balance: only the as-shot neutral changes.

The DNG specification (1.7.1, chapter 4) keeps the balance of the shot in one tag of the first directory,
``AsShotNeutral``: the coordinates of a neutral in the sensor's linear values.  Any reader of the format starts
from it.  ``AsShotWhiteXY`` says the same as a chromaticity; "the inclusion of this tag precludes the use of" the
other, so that the copy never holds both.  Sensor data and every other tag stay as they are, byte for byte.
"""

from __future__ import annotations

import hashlib
import io
import struct
from os import PathLike, fspath
from pathlib import Path
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from grader.atomic import write_atomic
from grader.errors import UnsupportedFile, WriteFailed
from grader.files import border, raw
from grader.files.metadata_tree import BrokenStructure, Place, Places, Structure, numbers
from grader.model import Correction, Header, ReadLimits, Written

_DNG_VERSION, _NEUTRAL, _WHITE_XY = 0xC612, 0xC628, 0xC629
_RATIONAL, _SCALE = 5, 1_000_000
_LEAST: Final = 1e-3
"""The smallest share of the largest that a neutral may have in a channel."""


def rewrite_raw(
    source: str | PathLike[str],
    target: str | PathLike[str],
    correction: Correction,
    limits: ReadLimits | None = None,
    *,
    overwrite: bool = False,
) -> Written:
    """Write a copy of a DNG whose as-shot neutral is the light that the correction takes out.

    Parameters
    ----------
    source, target : path-like
    correction : Correction
        As planned for this frame.
    limits : ReadLimits, optional
    overwrite : bool
        Replace a file that exists.  The source is never replaced.

    Returns
    -------
    Written

    Raises
    ------
    UnsupportedFile
        The source is no DNG, or its camera's colour is not known.
    DamagedFile, MissingFile, WriteFailed
    """
    if not is_dng(source):
        raise _no_dng(source)
    header = raw.read_header(source, limits)
    neutral = corrected_neutral(header, correction)
    if neutral is None:
        message = "the file does not tell its camera's colour matrix"
        raise UnsupportedFile(message, path=source, hint="write TIFF instead")
    assert header.sensor is not None  # noqa: S101 - else there were no neutral
    return rewrite_neutral(source, target, neutral, given=header.sensor.as_shot_neutral, overwrite=overwrite)


def corrected_neutral(header: Header, correction: Correction) -> NDArray[np.float64] | None:
    """Return the sensor's values (3,), green = 1, that a correction makes neutral; None without a matrix."""
    if header.sensor is None:
        return None
    daylight = np.linalg.solve(np.asarray(correction.matrix, np.float64), np.ones(3))
    if header.daylight_from_decoded is not None:
        daylight = header.daylight_from_decoded @ daylight
    response = header.sensor.daylight_neutral * (header.sensor.sensor_from_rec2020 @ daylight)
    response = np.maximum(response, _LEAST * response.max())
    return np.asarray(response / response[1])


def is_dng(path: str | PathLike[str]) -> bool:
    """Return whether a file is a DNG (see `grader.files.raw`)."""
    with border.reading(path):
        return raw.is_dng(path)


def rewrite_neutral(
    source: str | PathLike[str],
    target: str | PathLike[str],
    neutral: ArrayLike,
    *,
    given: ArrayLike | None = None,
    overwrite: bool = False,
) -> Written:
    """Write a copy of a DNG with another as-shot neutral.

    Parameters
    ----------
    source, target : path-like
    neutral : (n,) array_like
        The sensor's linear values of a neutral, one for each of its colours; only ratios matter.
    given : (n,) array_like, optional
        What the same scale gives for the source's own as-shot neutral.  The tag is then changed by the ratio of the
        two, so that an analogue balance that the file applies stays in it.
    overwrite : bool
        Replace a file that exists.  The source is never replaced.

    Raises
    ------
    UnsupportedFile
        The source is no DNG.
    ValueError
        ``neutral`` holds other than positive finite numbers.
    DamagedFile, MissingFile, WriteFailed
    """
    values = np.asarray(neutral, np.float64)
    if values.ndim != 1 or not np.all(np.isfinite(values) & (values > 0)):
        raise ValueError("a neutral is made of positive numbers")
    place = Path(target)
    if place.exists() and place.samefile(source):
        raise WriteFailed(
            "this is the original, which is never replaced", path=place, hint="choose another output folder"
        )
    with border.reading(source):
        data = Path(source).read_bytes()
        try:
            patched = _patched(data, values, None if given is None else np.asarray(given, np.float64))
        except BrokenStructure:
            raise _no_dng(source) from None
    write_atomic(place, patched, overwrite=overwrite)
    notes = ("the previews inside the copy still show the balance of the shot",)
    return Written(fspath(place), hashlib.sha256(patched).hexdigest(), "dng", "sensor", len(patched), notes)


def _no_dng(source: str | PathLike[str]) -> UnsupportedFile:
    hint = "convert it to DNG first, or hand the log's sensor_multipliers to its decoder"
    return UnsupportedFile("only a DNG can be copied with another balance", path=source, hint=hint)


def _patched(data: bytes, values: NDArray[np.float64], given: NDArray[np.float64] | None) -> bytes:
    """Return the file with the tag changed: in place where its value has the room, else appended."""
    structure = Structure(io.BytesIO(data))
    places, following = structure.directory(structure.first)
    if _DNG_VERSION not in places:
        raise BrokenStructure("no DNG")
    old = places.get(_NEUTRAL)
    packed = _packed(structure, old, values, given)
    result = bytearray(data)
    if old is not None and _WHITE_XY not in places:
        if old.type == _RATIONAL and old.size == len(packed) and not _shared(structure, old):
            result[old.offset : old.offset + len(packed)] = packed
        else:
            _point(result, structure, old, _NEUTRAL, packed)
    elif old is None and _WHITE_XY in places:  # the neighbouring entry takes the other's place
        _point(result, structure, places[_WHITE_XY], _NEUTRAL, packed)
    else:
        _new_directory(result, structure, places, following, packed)
    if len(result) > 0xFFFF_FFFF and not structure.big:
        raise WriteFailed("the file is too long for its kind of TIFF")
    return bytes(result)


def _packed(
    structure: Structure, old: Place | None, values: NDArray[np.float64], given: NDArray[np.float64] | None
) -> bytes:
    if old is not None and given is not None:
        field = structure.field(old, 1 << 10)
        had = np.asarray(numbers(field, structure.order) if field is not None else [], np.float64)
        if had.shape == values.shape and np.all(np.isfinite(had) & (had > 0)):
            values = had * values / given
    scaled = np.clip(np.rint(values / values.max() * _SCALE), 1, _SCALE).astype(int)
    return b"".join(struct.pack(structure.order + "II", int(v), _SCALE) for v in scaled)


def _shared(structure: Structure, place: Place) -> bool:
    """Return whether another tag's value lies over this one's (writers may store equal values once)."""
    start, end = place.offset, place.offset + place.size
    return any(
        other.offset < end and start < other.offset + other.size
        for places in structure.walk()
        for other in places.values()
        if other.entry != place.entry
    )


def _appended(result: bytearray, packed: bytes) -> int:
    if len(result) % 2:
        result.append(0)
    result += packed
    return len(result) - len(packed)


def _point(result: bytearray, structure: Structure, place: Place, tag: int, packed: bytes) -> None:
    """Let an entry of the first directory stand for the tag, its value at the end of the file."""
    at = _appended(result, packed)
    codes = structure.order + ("HHQQ" if structure.big else "HHII")
    entry = struct.pack(codes, tag, _RATIONAL, len(packed) // 8, at)
    result[place.entry : place.entry + len(entry)] = entry


def _new_directory(
    result: bytearray, structure: Structure, places: Places, following: int, packed: bytes
) -> None:
    """Append a first directory that holds the tag; all other entries are copied as they are."""
    at = _appended(result, packed)
    count, link, size = ("Q", "Q", 20) if structure.big else ("H", "I", 12)
    entries = {tag: bytes(result[p.entry : p.entry + size]) for tag, p in places.items() if tag != _WHITE_XY}
    entries[_NEUTRAL] = struct.pack(
        structure.order + "HH" + 2 * link, _NEUTRAL, _RATIONAL, len(packed) // 8, at
    )
    body = struct.pack(structure.order + count, len(entries))
    body += b"".join(entry for _, entry in sorted(entries.items()))
    first = _appended(result, body + struct.pack(structure.order + link, following))
    header = 8 if structure.big else 4
    result[header : header + struct.calcsize("=" + link)] = struct.pack(structure.order + link, first)
