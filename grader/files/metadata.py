"""Metadata in and out: Exif, GPS, IPTC and XMP of every kind of source, for every kind of output.

Metadata are carried as bytes.  What is broken is left out with a note; a picture is never refused for its metadata.
"""

from __future__ import annotations

import binascii
import io
import re
import zlib
from collections.abc import Mapping
from os import PathLike
from pathlib import Path
from typing import Any, BinaryIO, Final

from grader.files import xmp
from grader.files.metadata_build import append_tree, tree_bytes
from grader.files.metadata_facts import facts_of
from grader.files.metadata_output import for_output
from grader.files.metadata_tree import BrokenStructure, Field, Tree, read_tree
from grader.model import Metadata, ReadLimits

__all__ = [
    "for_output",
    "from_jpeg_info",
    "from_png_info",
    "from_tiff",
    "jpeg_segments",
    "png_chunks",
    "write_into_tiff",
]

XMP_TAG, IPTC_TAG, RESOURCES_TAG = 0x02BC, 0x83BB, 0x8649
_IPTC_RESOURCE: Final = 0x0404
PICTURE_TAGS: Final = frozenset(
    {
        0xFE,
        0xFF,
        *range(0x100, 0x104),
        0x106,
        0x10A,
        0x111,
        *range(0x115, 0x11A),
        0x11C,
        0x120,
        0x121,
        0x122,
        0x123,
    }
    | {0x12D, 0x13D, 0x13E, 0x13F, *range(0x140, 0x146), 0x14A, 0x152, 0x153, 0x154, 0x155, 0x156, 0x15B}
    | {0x200, 0x201, 0x202, *range(0x211, 0x215), 0x828D, 0x828E, 0x8773}
)
"""Tags that describe how the pixels of a TIFF are laid out (TIFF 6.0; TIFF/EP's mosaic; the ICC profile)."""
RAW_TAGS: Final = frozenset({*range(0xC612, 0xC7B6), *range(0xCD2C, 0xCD50)})
"""Tags of the DNG specification, which describe sensor data (its 1.7.1 release ends at 0xCD4C)."""
_KEPT_DNG: Final = frozenset({0xC614, 0xC62F, 0xC630})
"""UniqueCameraModel, CameraSerialNumber and LensInfo tell the body and the lens."""

Facts = dict[str, Any]


def from_tiff(
    path_or_file: str | PathLike[str] | BinaryIO, limits: ReadLimits | None = None
) -> tuple[Facts, Metadata]:
    """Return what the first directory of a TIFF-structured file (TIFF, DNG and many raw kinds) tells.

    Parameters
    ----------
    path_or_file : path-like or binary stream
    limits : ReadLimits, optional

    Returns
    -------
    facts : dict
        Fields of `Header`; those that the file does not give are absent.  ``notes`` tells what was left out.
    metadata : Metadata
        Exif as a TIFF structure without the tags that describe the pixels.
    """
    bound = (limits or ReadLimits()).max_metadata_bytes
    try:
        if isinstance(path_or_file, (str, PathLike)):
            with Path(path_or_file).open("rb") as stream:
                tree = read_tree(stream, bound, PICTURE_TAGS)
        else:
            tree = read_tree(path_or_file, bound, PICTURE_TAGS)
    except BrokenStructure as problem:
        return {"notes": (f"the metadata cannot be read: {problem}",)}, Metadata()
    packet = tree.ifd0.pop(XMP_TAG, None)
    iptc = _iptc(tree.ifd0.pop(IPTC_TAG, None), tree.ifd0.pop(RESOURCES_TAG, None))
    _without_sensor(tree)
    return _gather(tree, packet.data if packet else None, iptc)


def from_jpeg_info(info: Mapping[Any, Any], limits: ReadLimits | None = None) -> tuple[Facts, Metadata]:
    """Return what Pillow found in a JPEG's segments (`Image.info`: ``exif``, ``xmp``, ``photoshop``)."""
    resources = info.get("photoshop")
    iptc = resources.get(_IPTC_RESOURCE) if isinstance(resources, Mapping) else None
    return _from_blobs(info.get("exif"), info.get("xmp"), iptc, limits or ReadLimits())


def from_png_info(info: Mapping[Any, Any], limits: ReadLimits | None = None) -> tuple[Facts, Metadata]:
    """Return what Pillow found in a PNG's chunks (`Image.info`: eXIf, the XMP text, older "raw profile" texts)."""
    exif = info.get("exif") or _raw_profile(info, "exif") or _raw_profile(info, "APP1")
    packet = info.get("xmp") or info.get("XML:com.adobe.xmp")
    if isinstance(packet, str):
        packet = packet.encode("utf-8", "surrogateescape")
    iptc = _raw_profile(info, "iptc")
    if iptc and iptc.startswith(b"8BIM"):
        iptc = _resource(iptc)
    return _from_blobs(exif, packet, iptc, limits or ReadLimits())


def write_into_tiff(path: str | PathLike[str], metadata: Metadata) -> None:
    """Add metadata to a finished TIFF, in place: nothing that stands in the file moves.

    Raises
    ------
    OSError, ValueError
        The file cannot be written, or would outgrow its kind of TIFF.
    """
    tree = Tree()
    if metadata.exif:
        tree = read_tree(io.BytesIO(metadata.exif), len(metadata.exif), PICTURE_TAGS)
    if metadata.xmp:
        tree.ifd0[XMP_TAG] = Field(1, len(metadata.xmp), metadata.xmp)
    if metadata.iptc:
        tree.ifd0[IPTC_TAG] = Field(7, len(metadata.iptc), metadata.iptc)
    if tree.ifd0 or tree.exif or tree.gps:
        with Path(path).open("r+b") as stream:
            append_tree(stream, tree)


def _from_blobs(exif: Any, packet: Any, iptc: Any, limits: ReadLimits) -> tuple[Facts, Metadata]:
    notes: list[str] = []
    blobs: dict[str, bytes | None] = {"Exif": exif, "XMP": packet, "IPTC": iptc}
    for name, blob in blobs.items():
        if not isinstance(blob, bytes) or not blob:
            blobs[name] = None
        elif len(blob) > limits.max_metadata_bytes:
            blobs[name] = None
            notes.append(f"the {name} metadata are too large and were left out")
    tree = Tree()
    data = blobs["Exif"]
    if data is not None:
        try:
            tree = read_tree(
                io.BytesIO(data.removeprefix(b"Exif\0\0")), limits.max_metadata_bytes, PICTURE_TAGS
            )
        except BrokenStructure as problem:
            notes.append(f"the Exif metadata cannot be read and were left out: {problem}")
    tree.notes = notes + tree.notes
    return _gather(tree, blobs["XMP"], blobs["IPTC"])


def _gather(tree: Tree, packet_bytes: bytes | None, iptc: bytes | None) -> tuple[Facts, Metadata]:
    packet = None
    if packet_bytes:
        try:
            packet = xmp.Packet(packet_bytes)
        except xmp.BrokenPacket as problem:
            tree.notes.append(f"the XMP metadata cannot be read and were left out: {problem}")
            packet_bytes = None
    facts = facts_of(tree, packet)
    if tree.notes:
        facts["notes"] = tuple(tree.notes)
    exif = tree_bytes(tree) if tree.ifd0 or tree.exif or tree.gps else None
    return facts, Metadata(exif=exif, xmp=packet_bytes or None, iptc=iptc or None)


def _without_sensor(tree: Tree) -> None:
    """Drop what describes sensor data (tags below 0xFE are makers' own); move camera tags that TIFF/EP files keep in IFD0 to where Exif has them."""
    for tag in list(tree.ifd0):
        if tag < 0xFE or (tag in RAW_TAGS and tag not in _KEPT_DNG):
            del tree.ifd0[tag]
        elif 0x829A <= tag <= 0x829D or 0x8822 <= tag <= 0x8833 or 0x9000 <= tag <= 0xA40C:
            tree.exif.setdefault(tag, tree.ifd0.pop(tag))


def _iptc(direct: Field | None, resources: Field | None) -> bytes | None:
    """Return the IPTC records: from their own tag (some writers call bytes LONG and swap them), or a resource."""
    if direct is not None:
        data = direct.data.rstrip(b"\0") if direct.data[:1] == b"\x1c" else direct.data
        if data[:1] != b"\x1c" and direct.type == 4 and data[3:4] == b"\x1c":
            data = b"".join(data[i : i + 4][::-1] for i in range(0, len(data), 4)).rstrip(b"\0")
        return data if data[:1] == b"\x1c" else None
    return _resource(resources.data) if resources is not None else None


def _resource(data: bytes) -> bytes | None:
    """Return the IPTC block out of a chain of image resources (``8BIM``, number, name, length, data)."""
    at = 0
    while data[at : at + 4] == b"8BIM" and at + 12 <= len(data):
        number = int.from_bytes(data[at + 4 : at + 6], "big")
        name = 1 + data[at + 6]
        start = at + 6 + name + name % 2
        length = int.from_bytes(data[start : start + 4], "big")
        block = data[start + 4 : start + 4 + length]
        if number == _IPTC_RESOURCE:
            return block or None
        at = start + 4 + length + length % 2
    return None


def _raw_profile(info: Mapping[Any, Any], name: str) -> bytes | None:
    """Return a profile that older PNG writers keep as hexadecimal text: a name, a length, the digits."""
    value = info.get(f"Raw profile type {name}")
    if isinstance(value, bytes):
        value = value.decode("latin-1")
    if not isinstance(value, str):
        return None
    match = re.match(r"\s*\S+\s+(\d+)\s+([0-9a-fA-F\s]*)$", value)
    if match is None:
        return None
    try:
        return binascii.unhexlify(re.sub(r"\s+", "", match.group(2))) or None
    except (binascii.Error, ValueError):
        return None


def jpeg_segments(metadata: Metadata) -> bytes:
    """Return the marker segments APP1 (Exif), APP1 (XMP, in parts where it is long) and APP13 (IPTC) of a JPEG.

    For Pillow's ``save(..., extra=...)``.
    """
    parts = []
    if metadata.exif:
        parts.append(_segment(0xE1, b"Exif\0\0" + metadata.exif))
    if metadata.xmp:
        parts.append(_segment(0xE1, b"http://ns.adobe.com/xap/1.0/\0" + metadata.xmp))
    if metadata.iptc:
        block = metadata.iptc + b"\0" * (len(metadata.iptc) % 2)
        head = b"8BIM" + _IPTC_RESOURCE.to_bytes(2, "big") + b"\0\0" + len(metadata.iptc).to_bytes(4, "big")
        parts.append(_segment(0xED, b"Photoshop 3.0\0" + head + block))
    return b"".join(parts)


def _segment(marker: int, body: bytes) -> bytes:
    return bytes([0xFF, marker]) + (len(body) + 2).to_bytes(2, "big") + body


def png_chunks(metadata: Metadata) -> list[tuple[bytes, bytes]]:
    """Return the chunks of a PNG that hold the metadata, as (type, data): eXIf, iTXt (XMP), zTXt (IPTC).

    PNG has no chunk for IPTC; the text form "Raw profile type iptc" is what common libraries read.
    """
    chunks = []
    if metadata.exif:
        chunks.append((b"eXIf", metadata.exif))
    if metadata.xmp:
        chunks.append((b"iTXt", b"XML:com.adobe.xmp\0\0\0\0\0" + metadata.xmp))
    if metadata.iptc:
        chunks.append((b"zTXt", _hex_profile("iptc", metadata.iptc)))
    return chunks


def _hex_profile(name: str, data: bytes) -> bytes:
    digits = data.hex()
    lines = "\n".join(digits[i : i + 72] for i in range(0, len(digits), 72))
    text = f"\n{name}\n{len(data):8}\n{lines}\n"
    return f"Raw profile type {name}".encode() + b"\0\0" + zlib.compress(text.encode())
