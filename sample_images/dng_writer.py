"""Write small TIFF structures: Bayer DNGs, 16-bit TIFFs and Exif blocks.

DNG 1.4 (Digital Negative specification, 2012), TIFF 6.0, Exif 2.32.  Little-endian, one strip, and the same
bytes for the same input.
"""

from __future__ import annotations

import struct
import zlib
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

BYTE, ASCII, SHORT, LONG, RATIONAL, UNDEFINED, SRATIONAL = 1, 2, 3, 4, 5, 7, 10
RGGB, BGGR, GRBG, GBRG = (0, 1, 1, 2), (2, 1, 1, 0), (1, 0, 2, 1), (1, 2, 0, 1)

Tag = tuple[int, int, object]
"""(number, type, value or values)."""

_FORMATS = {BYTE: "B", SHORT: "H", LONG: "I"}


@dataclass(frozen=True)
class Shot:
    """What the metadata say about one exposure."""

    make: str = "Tarnwick"
    model: str = "T1"
    serial: str = "TW00417"
    taken_at: str = "2024-11-16T16:04:12.35+01:00"
    exposure_time_s: Fraction = Fraction(1, 60)
    f_number: float = 4.0
    iso: int = 400
    orientation: int = 1
    automatic_balance: bool = True
    focal_length_mm: float = 50.0


def exif_tags(shot: Shot) -> list[Tag]:
    """Return the Exif directory of a shot."""
    moment, subsec, offset = split_time(shot.taken_at)
    return [
        (33434, RATIONAL, shot.exposure_time_s),
        (33437, RATIONAL, Fraction(round(shot.f_number * 10), 10)),
        (34855, SHORT, shot.iso),
        (36864, UNDEFINED, b"0232"),
        (36867, ASCII, moment),
        (36868, ASCII, moment),
        (36880, ASCII, offset),
        (36881, ASCII, offset),
        (37385, SHORT, 16),
        (37386, RATIONAL, Fraction(round(shot.focal_length_mm))),
        (37520, ASCII, subsec),
        (37521, ASCII, subsec),
        (41987, SHORT, 0 if shot.automatic_balance else 1),
        (42033, ASCII, shot.serial),
    ]


def split_time(taken_at: str) -> tuple[str, str, str]:
    """Return Exif date and time, sub-seconds and offset of an ISO 8601 time."""
    date, rest = taken_at.split("T")
    offset = rest[-6:]
    clock, _, subsec = rest[:-6].partition(".")
    return f"{date.replace('-', ':')} {clock}", subsec, offset


def mosaic_of(sensor: NDArray[np.float64], cfa: tuple[int, int, int, int] = RGGB) -> NDArray[np.float64]:
    """Return the (H, W) mosaic of an (H, W, 3) picture; the pattern reads row by row."""
    out = np.empty(sensor.shape[:2])
    for place, channel in enumerate(cfa):
        row, column = divmod(place, 2)
        out[row::2, column::2] = sensor[row::2, column::2, channel]
    return out


def write_dng(
    path: Path,
    mosaic: NDArray[np.uint16],
    *,
    colour_matrix: NDArray[np.float64],
    as_shot_neutral: Sequence[float],
    levels: tuple[int, int] = (512, 15600),
    cfa: tuple[int, int, int, int] = RGGB,
    shot: Shot | None = None,
) -> None:
    """Write an uncompressed 16-bit Bayer DNG.

    Parameters
    ----------
    path : Path
        Where to.
    mosaic : (H, W) uint16
        Sensor values, black level included.
    colour_matrix : (3, 3)
        ColorMatrix1: sensor from XYZ, calibrated under D65.
    as_shot_neutral : (3,)
        Sensor response to the white that the body took as neutral.
    levels : (int, int)
        Black and white level.
    cfa : 4 int
        Colours of the top left four pixels, row by row; 0 red, 1 green, 2 blue.
    shot : Shot, optional
        The metadata.
    """
    shot = shot or Shot()
    height, width = mosaic.shape
    neutral = [Fraction(round(float(n) * 1_000_000), 1_000_000) for n in as_shot_neutral]
    matrix = [Fraction(round(float(m) * 10_000), 10_000) for m in np.ravel(colour_matrix)]
    tags: list[Tag] = [
        *_picture_tags(width, height, bits=(16,), photometric=32803, shot=shot),
        (33421, SHORT, (2, 2)),
        (33422, BYTE, cfa),
        (50706, BYTE, (1, 4, 0, 0)),
        (50707, BYTE, (1, 1, 0, 0)),
        (50708, ASCII, f"{shot.make} {shot.model}"),
        (50710, BYTE, (0, 1, 2)),
        (50711, SHORT, 1),
        (50713, SHORT, (1, 1)),
        (50714, SHORT, levels[0]),
        (50717, SHORT, levels[1]),
        (50721, SRATIONAL, matrix),
        (50728, RATIONAL, neutral),
        (50735, ASCII, shot.serial),
        (50778, SHORT, 21),
        (50829, LONG, (0, 0, height, width)),
    ]
    path.write_bytes(tiff_bytes(tags, exif_tags(shot), mosaic.astype("<u2").tobytes()))


def write_tiff(path: Path, encoded: NDArray[np.uint16], *, icc: bytes, shot: Shot) -> None:
    """Write a deflated 16-bit RGB TIFF with a profile."""
    height, width = encoded.shape[:2]
    step = np.diff(encoded.astype(np.uint16), axis=1, prepend=np.uint16(0))
    tags = [
        *_picture_tags(width, height, bits=(16, 16, 16), photometric=2, shot=shot, compression=8),
        (317, SHORT, 2),
        (34675, UNDEFINED, icc),
    ]
    path.write_bytes(tiff_bytes(tags, exif_tags(shot), zlib.compress(step.astype("<u2").tobytes(), 9)))


def exif_block(shot: Shot) -> bytes:
    """Return the Exif block of a JPEG, identifier included."""
    moment, _, _ = split_time(shot.taken_at)
    tags = [
        (271, ASCII, shot.make),
        (272, ASCII, shot.model),
        (274, SHORT, shot.orientation),
        (306, ASCII, moment),
    ]
    return b"Exif\0\0" + tiff_bytes(tags, exif_tags(shot))


def _picture_tags(
    width: int, height: int, *, bits: tuple[int, ...], photometric: int, shot: Shot, compression: int = 1
) -> list[Tag]:
    return [
        (254, LONG, 0),
        (256, LONG, width),
        (257, LONG, height),
        (258, SHORT, bits),
        (259, SHORT, compression),
        (262, SHORT, photometric),
        (271, ASCII, shot.make),
        (272, ASCII, shot.model),
        (274, SHORT, shot.orientation),
        (277, SHORT, len(bits)),
        (278, LONG, height),
        (284, SHORT, 1),
        (306, ASCII, split_time(shot.taken_at)[0]),
    ]


def tiff_bytes(tags: list[Tag], exif: list[Tag], strip: bytes | None = None) -> bytes:
    """Return a TIFF structure: one directory, its Exif directory and one strip of pixels."""
    tags = [*tags, (34665, LONG, 0)]
    if strip is not None:
        tags += [(273, LONG, 0), (279, LONG, len(strip))]
    first = 8
    second = first + _size(tags)
    pixels = second + _size(exif)
    places = {34665: second, 273: pixels}
    tags = [(number, kind, places.get(number, value)) for number, kind, value in tags]
    return (
        b"II*\0"
        + struct.pack("<I", first)
        + _directory(tags, first)
        + _directory(exif, second)
        + (strip or b"")
    )


def _encode(kind: int, value: object) -> tuple[int, bytes]:
    """Return count and bytes of a tag's value."""
    if kind == ASCII:
        text = str(value).encode("ascii") + b"\0"
        return len(text), text
    if kind == UNDEFINED:
        assert isinstance(value, bytes)
        return len(value), value
    values = list(value) if isinstance(value, Sequence) else [value]
    if kind in (RATIONAL, SRATIONAL):
        pairs = [part for v in values for part in Fraction(v).as_integer_ratio()]
        return len(values), struct.pack(f"<{len(pairs)}{'I' if kind == RATIONAL else 'i'}", *pairs)
    return len(values), struct.pack(f"<{len(values)}{_FORMATS[kind]}", *values)


def _size(tags: list[Tag]) -> int:
    payload = sum(
        len(data) + len(data) % 2 for _, data in (_encode(k, v) for _, k, v in tags) if len(data) > 4
    )
    return 2 + 12 * len(tags) + 4 + payload


def _directory(tags: list[Tag], at: int) -> bytes:
    entries, payload = b"", b""
    after = at + 2 + 12 * len(tags) + 4
    for number, kind, value in sorted(tags, key=lambda tag: tag[0]):
        count, data = _encode(kind, value)
        if len(data) > 4:
            where = struct.pack("<I", after + len(payload))
            payload += data + b"\0" * (len(data) % 2)
        else:
            where = data.ljust(4, b"\0")
        entries += struct.pack("<HHI", number, kind, count) + where
    return struct.pack("<H", len(tags)) + entries + b"\0\0\0\0" + payload
