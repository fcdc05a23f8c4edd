"""Metadata in and out: Exif, GPS, IPTC and XMP of every kind of source, for every kind of output.

Metadata are carried as bytes.  What is broken is left out with a note; a picture is never refused for its metadata.
"""

from __future__ import annotations

import io
from collections.abc import Iterable, Mapping
from os import PathLike
from pathlib import Path
from typing import Any, BinaryIO, Final

from grader.files import xmp
from grader.files.metadata_boxes import tree_of_boxes
from grader.files.metadata_build import append_tree, tree_bytes
from grader.files.metadata_facts import facts_of
from grader.files.metadata_output import for_output
from grader.files.metadata_segments import (
    hex_profile_of,
    jpeg_segments,
    png_chunks,
    resources_of,
    split_resources,
    xmp_extension_of,
)
from grader.files.metadata_tree import BrokenStructure, Field, Tree, read_tree
from grader.model import Metadata, ReadLimits

__all__ = [
    "byte_order",
    "for_output",
    "from_boxes",
    "from_jpeg_info",
    "from_png_info",
    "from_tiff",
    "jpeg_segments",
    "png_chunks",
    "write_into_tiff",
]

XMP_TAG, IPTC_TAG, RESOURCES_TAG = 0x02BC, 0x83BB, 0x8649
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
_BIG_ONLY: Final = (16, 17, 18)
"""Types that only BigTIFF knows."""

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
    direct, chain = _iptc(tree.ifd0.pop(IPTC_TAG, None)), tree.ifd0.pop(RESOURCES_TAG, None)
    iptc, resources = split_resources(chain.data) if chain else (None, None)
    _without_sensor(tree)
    return _gather(tree, packet.data if packet else None, direct or iptc, resources)


def from_boxes(stream: BinaryIO, limits: ReadLimits | None = None) -> tuple[Facts, Metadata]:
    """Return what a raw file built of boxes tells, as `from_tiff` does; nothing where it has no such boxes."""
    tree = tree_of_boxes(stream, (limits or ReadLimits()).max_metadata_bytes)
    for tag in PICTURE_TAGS & tree.ifd0.keys():
        del tree.ifd0[tag]
    return _gather(tree, None, None, None)


def from_jpeg_info(
    info: Mapping[Any, Any], limits: ReadLimits | None = None, segments: Iterable[tuple[str, bytes]] = ()
) -> tuple[Facts, Metadata]:
    """Return what Pillow found in a JPEG's segments.

    Parameters
    ----------
    info : mapping
        ``Image.info``: ``exif`` and ``xmp`` count.
    limits : ReadLimits, optional
    segments : iterable of (str, bytes)
        The image's ``applist``, for IPTC, clipping paths, and XMP that is longer than a segment.

    Returns
    -------
    facts, metadata
        As for `from_tiff`.
    """
    bounds = limits or ReadLimits()
    segments = list(segments)
    chain = resources_of(segments)
    more = xmp_extension_of(segments, bounds.max_metadata_bytes)
    return _from_blobs(info.get("exif"), info.get("xmp"), chain, bounds, more)


def from_png_info(info: Mapping[Any, Any], limits: ReadLimits | None = None) -> tuple[Facts, Metadata]:
    """Return what Pillow found in a PNG's chunks (`Image.info`: eXIf, the XMP text, older "raw profile" texts)."""
    exif = info.get("exif") or hex_profile_of(info, "exif") or hex_profile_of(info, "APP1")
    packet = info.get("xmp") or info.get("XML:com.adobe.xmp")
    if isinstance(packet, str):
        packet = packet.encode("utf-8", "surrogateescape")
    return _from_blobs(exif, packet, hex_profile_of(info, "iptc"), limits or ReadLimits())


def byte_order(metadata: Metadata) -> str:
    """Return the byte order of the Exif data, ``<`` or ``>``: maker notes keep to it."""
    return ">" if metadata.exif is not None and metadata.exif.startswith(b"MM") else "<"


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
    if metadata.resources:
        tree.ifd0[RESOURCES_TAG] = Field(7, len(metadata.resources), metadata.resources)
    if tree.ifd0 or tree.exif or tree.gps:
        with Path(path).open("r+b") as stream:
            append_tree(stream, tree)


def _from_blobs(
    exif: Any, packet: Any, chain: Any, limits: ReadLimits, more: bytes | None = None
) -> tuple[Facts, Metadata]:
    """Return facts and metadata from an Exif block, an XMP packet, its extension, and IPTC or image resources."""
    notes: list[str] = []
    blobs: dict[str, bytes] = {}
    for name, blob in (("Exif", exif), ("XMP", packet), ("IPTC", chain)):
        if isinstance(blob, bytes) and blob:
            if len(blob) <= limits.max_metadata_bytes:
                blobs[name] = blob
            else:
                notes.append(f"the {name} metadata are too large and were left out")
    tree = Tree()
    if "Exif" in blobs:
        data = blobs["Exif"].removeprefix(b"Exif\0\0")
        try:
            tree = read_tree(io.BytesIO(data), limits.max_metadata_bytes, PICTURE_TAGS)
        except BrokenStructure as problem:
            notes.append(f"the Exif metadata cannot be read and were left out: {problem}")
    tree.notes = notes + tree.notes
    block = blobs.get("IPTC", b"")
    iptc, resources = split_resources(block) if block.startswith(b"8BIM") else (block or None, None)
    return _gather(tree, blobs.get("XMP"), iptc, resources, more)


def _gather(
    tree: Tree,
    packet_bytes: bytes | None,
    iptc: bytes | None,
    resources: bytes | None,
    more: bytes | None = None,
) -> tuple[Facts, Metadata]:
    packet = None
    if packet_bytes:
        try:
            packet = xmp.Packet(packet_bytes)
            if more is not None:
                packet.join(more)
                packet_bytes = packet.to_bytes()
        except xmp.BrokenPacket as problem:
            tree.notes.append(f"the XMP metadata cannot be read and were left out: {problem}")
            packet_bytes = packet = None
    facts = facts_of(tree, packet)
    if tree.notes:
        facts["notes"] = tuple(tree.notes)
    exif = tree_bytes(tree) if tree.ifd0 or tree.exif or tree.gps else None
    return facts, Metadata(exif=exif, xmp=packet_bytes or None, iptc=iptc, resources=resources)


def _without_sensor(tree: Tree) -> None:
    """Drop what describes sensor data (tags below 0xFE are makers' own); move camera tags that TIFF/EP files keep in IFD0 to where Exif has them."""
    for tag in list(tree.ifd0):
        if tag < 0xFE or (tag in RAW_TAGS and tag not in _KEPT_DNG) or tree.ifd0[tag].type in _BIG_ONLY:
            del tree.ifd0[tag]
        elif 0x829A <= tag <= 0x829D or 0x8822 <= tag <= 0x8833 or 0x9000 <= tag <= 0xA40C:
            tree.exif.setdefault(tag, tree.ifd0.pop(tag))


def _iptc(direct: Field | None) -> bytes | None:
    """Return the IPTC records of their own TIFF tag; some writers call the bytes LONG and swap them."""
    if direct is None:
        return None
    data = direct.data
    if data[:1] != b"\x1c" and direct.type == 4:
        data = b"".join(data[i : i + 4][::-1] for i in range(0, len(data), 4))
    return data.rstrip(b"\0") if data[:1] == b"\x1c" else None
