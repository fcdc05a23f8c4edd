"""What a frame's metadata say about how it was taken, as fields of `grader.model.Header`."""

from __future__ import annotations

import math
import re
from typing import Any, Final

from grader.files import xmp
from grader.files.metadata_tree import Directory, Tree, numbers, text

MAKE, MODEL, ORIENTATION, SOFTWARE = 0x010F, 0x0110, 0x0112, 0x0131
SERIAL, DNG_SERIAL, UNIQUE_MODEL = 0xA431, 0xC62F, 0xC614
_TIMES: Final = ((0x9003, 0x9291, 0x9011), (0x9004, 0x9292, 0x9012), (0x0132, 0x9290, 0x9010))
"""Taken, digitised, changed: the tags of the time, its sub-seconds and its offset (CIPA DC-008, Exif 2.32)."""
_EXPOSURE, _SHUTTER, _F_NUMBER, _APERTURE, _FLASH = 0x829A, 0x9201, 0x829D, 0x9202, 0x9209
_ISO: Final = (0x8827, 0x8833, 0x8831, 0x8832)
_STAMP: Final = re.compile(r"(\d{4})[:-](\d\d)[:-](\d\d)[ T](\d\d):(\d\d):(\d\d)")
_OFFSET: Final = re.compile(r"[+-](?:0\d|1[0-4]):[0-5]\d|Z")


def facts_of(tree: Tree, packet: xmp.Packet | None = None) -> dict[str, Any]:
    """Return the `Header` fields that the metadata give; fields they do not give are absent.

    Parameters
    ----------
    tree : Tree
    packet : xmp.Packet, optional
        Asked where the Exif data say nothing.

    Returns
    -------
    dict
        Some of body, taken_at, exposure_time_s, f_number, iso, flash, orientation.
    """
    tags = {**tree.ifd0, **tree.exif}
    found: dict[str, Any] = {
        "body": body_name(text(tags.get(MAKE)), _model(tags), _serial(tags)),
        "taken_at": _taken_at(tags) or _taken_at_xmp(packet),
        "exposure_time_s": _exposure(tags, tree.order),
        "f_number": _f_number(tags, tree.order),
        "iso": _iso(tags, tree.order),
        "flash": _flash(tags, tree.order),
        "orientation": _orientation(tags, tree.order) or _orientation_xmp(packet),
    }
    return {name: value for name, value in found.items() if value not in (None, "")}


def body_name(make: str, model: str, serial: str) -> str:
    """Return ``Make Model Serial``, the make left out where the model begins with its first word.

    Examples
    --------
    >>> body_name("Lumo Works", "Lumo K2", "0042"), body_name("Lumo", "K2", "")
    ('Lumo K2 0042', 'Lumo K2')
    """
    first = make.partition(" ")[0].casefold()
    if first and model.partition(" ")[0].casefold() == first:
        make = ""
    return " ".join(part for part in (make, model, serial) if part)


def _model(tags: Directory) -> str:
    return text(tags.get(MODEL)) or text(tags.get(UNIQUE_MODEL))


def _serial(tags: Directory) -> str:
    serial = text(tags.get(SERIAL)) or text(tags.get(DNG_SERIAL))
    return "" if set(serial) <= set("0 .-") else serial


def _taken_at(tags: Directory) -> str | None:
    for stamp_tag, fraction_tag, offset_tag in _TIMES:
        stamp = iso_time(text(tags.get(stamp_tag)), text(tags.get(fraction_tag)), text(tags.get(offset_tag)))
        if stamp:
            return stamp
    return None


def iso_time(stamp: str, fraction: str = "", offset: str = "") -> str | None:
    """Return an Exif time as ISO 8601; None where it is blank or no time.

    Examples
    --------
    >>> iso_time("2031:05:04 18:30:09", "250 ", "+02:00")
    '2031-05-04T18:30:09.250+02:00'
    >>> iso_time("0000:00:00 00:00:00") is None
    True
    """
    match = _STAMP.match(stamp)
    if match is None:
        return None
    year, month, day, hour, minute, second = (int(part) for part in match.groups())
    if not (year > 1 and 1 <= month <= 12 and 1 <= day <= 31 and hour < 24 and minute < 60 and second < 61):
        return None
    digits = re.match(r"\d{1,9}", fraction.strip())
    zone = _OFFSET.fullmatch(offset.strip())
    return (
        f"{year:04}-{month:02}-{day:02}T{hour:02}:{minute:02}:{second:02}"
        f"{'.' + digits.group() if digits else ''}{zone.group() if zone else ''}"
    )


def _taken_at_xmp(packet: xmp.Packet | None) -> str | None:
    if packet is None:
        return None
    for namespace, name in (
        (xmp.EXIF, "DateTimeOriginal"),
        (xmp.PHOTOSHOP, "DateCreated"),
        (xmp.BASIC, "CreateDate"),
    ):
        value = packet.get(namespace, name) or ""
        rest = value[19:]
        fraction = re.match(r"\.(\d+)", rest)
        stamp = iso_time(
            value[:19], fraction.group(1) if fraction else "", rest[fraction.end() if fraction else 0 :]
        )
        if stamp:
            return stamp
    return None


def _first(tags: Directory, tag: int, order: str) -> float | None:
    """Return a tag's first number where it is finite."""
    values = numbers(tags[tag], order) if tag in tags else []
    return values[0] if values and math.isfinite(values[0]) else None


def _positive(value: float | None) -> float | None:
    return value if value is not None and 0 < value < 1e9 else None


def _exposure(tags: Directory, order: str) -> float | None:
    direct = _positive(_first(tags, _EXPOSURE, order))
    apex = _first(tags, _SHUTTER, order)
    return direct or (_positive(2.0**-apex) if apex is not None and abs(apex) < 30 else None)


def _f_number(tags: Directory, order: str) -> float | None:
    direct = _positive(_first(tags, _F_NUMBER, order))
    apex = _first(tags, _APERTURE, order)
    return direct or (_positive(2.0 ** (apex / 2)) if apex is not None and 0 < apex < 30 else None)


def _iso(tags: Directory, order: str) -> float | None:
    for tag in _ISO:
        value = _positive(_first(tags, tag, order))
        if value is not None and value != 65_535:  # "see another tag" (Exif 2.3, PhotographicSensitivity)
            return float(value)
    return None


def _flash(tags: Directory, order: str) -> bool | None:
    value = _first(tags, _FLASH, order)
    return None if value is None else bool(int(value) & 1)


def _orientation(tags: Directory, order: str) -> int | None:
    value = _first(tags, ORIENTATION, order)
    return int(value) if value is not None and 1 <= value <= 8 else None


def _orientation_xmp(packet: xmp.Packet | None) -> int | None:
    value = (packet.get(xmp.TIFF, "Orientation") or "") if packet is not None else ""
    return int(value) if re.fullmatch("[1-8]", value) else None
