"""Metadata in the marker segments of a JPEG, the chunks of a PNG, and blocks of image resources."""

from __future__ import annotations

import binascii
import re
import zlib
from collections.abc import Iterable, Iterator, Mapping
from typing import Any, Final

from grader.files.xmp import extension_digest
from grader.model import Metadata

XMP_MARK: Final = b"http://ns.adobe.com/xap/1.0/\0"
_XMP_MORE: Final = b"http://ns.adobe.com/xmp/extension/\0"
_EXIF_MARK: Final = b"Exif\0\0"
_RESOURCES_MARK: Final = b"Photoshop 3.0\0"
SEGMENT_BYTES: Final = 65_533
"""What a marker segment can hold after its length. [bytes]"""
XMP_ROOM: Final = SEGMENT_BYTES - len(XMP_MARK)
EXIF_ROOM: Final = SEGMENT_BYTES - len(_EXIF_MARK)
_MORE_ROOM: Final = SEGMENT_BYTES - len(_XMP_MORE) - 40

IPTC_RESOURCE: Final = 0x0404
_STALE: Final = frozenset({IPTC_RESOURCE, 0x0409, 0x040C, 0x040F, 0x0422, 0x0423, 0x0424, 0x0425, 0x03ED})
"""Resources that are carried otherwise (IPTC, profile, Exif, XMP, resolution) or show the picture as it was."""


def jpeg_segments(metadata: Metadata) -> bytes:
    """Return the marker segments of a JPEG: APP1 (Exif), APP1 (XMP, in parts where it is long), APP13 (the rest).

    For Pillow's ``save(..., extra=...)``.  Long XMP is cut as its specification says (XMP part 3, storage in files): a main packet that names the digest of an extension, and the extension in pieces.
    """
    parts = []
    if metadata.exif:
        parts.append(_segment(0xE1, _EXIF_MARK + metadata.exif))
    if metadata.xmp:
        parts.append(_segment(0xE1, XMP_MARK + metadata.xmp))
    if metadata.xmp_extension:
        whole = metadata.xmp_extension
        head = _XMP_MORE + extension_digest(whole) + len(whole).to_bytes(4, "big")
        parts += [
            _segment(0xE1, head + at.to_bytes(4, "big") + whole[at : at + _MORE_ROOM])
            for at in range(0, len(whole), _MORE_ROOM)
        ]
    blocks = resource_bytes(metadata)
    room = SEGMENT_BYTES - len(_RESOURCES_MARK)
    parts += [_segment(0xED, _RESOURCES_MARK + blocks[at : at + room]) for at in range(0, len(blocks), room)]
    return b"".join(parts)


def _segment(marker: int, body: bytes) -> bytes:
    return bytes([0xFF, marker]) + (len(body) + 2).to_bytes(2, "big") + body


def xmp_extension_of(segments: Iterable[tuple[str, bytes]], limit: int) -> bytes | None:
    """Return the XMP extension out of a JPEG's segments (Pillow's ``applist``); None where it is absent or torn."""
    pieces: dict[bytes, dict[int, bytes]] = {}
    lengths: dict[bytes, int] = {}
    for marker, body in segments:
        if marker != "APP1" or not body.startswith(_XMP_MORE):
            continue
        at = len(_XMP_MORE)
        name = body[at : at + 32]
        lengths[name] = int.from_bytes(body[at + 32 : at + 36], "big")
        pieces.setdefault(name, {})[int.from_bytes(body[at + 36 : at + 40], "big")] = body[at + 40 :]
    for name, parts in pieces.items():
        whole = b"".join(part for _, part in sorted(parts.items()))
        if len(whole) == lengths[name] <= limit and extension_digest(whole) == name:
            return whole
    return None


def resources_of(segments: Iterable[tuple[str, bytes]]) -> bytes | None:
    """Return the chain of image resources out of a JPEG's segments (Pillow's ``applist``)."""
    marked = [
        body[len(_RESOURCES_MARK) :]
        for marker, body in segments
        if marker == "APP13" and body.startswith(_RESOURCES_MARK)
    ]
    return b"".join(marked) or None


def split_resources(chain: bytes) -> tuple[bytes | None, bytes | None]:
    """Return the IPTC records of a chain of image resources, and those other resources that stay true.

    These are above all clipping paths.
    """
    iptc, kept = None, []
    for number, data, whole in _resources(chain):
        if number == IPTC_RESOURCE:
            iptc = iptc or data or None
        elif number not in _STALE:
            kept.append(whole)
    return iptc, b"".join(kept) or None


def _resources(chain: bytes) -> Iterator[tuple[int, bytes, bytes]]:
    """Yield number, data and whole of each resource: ``8BIM``, number, padded name, length, padded data."""
    at = 0
    while chain[at : at + 4] == b"8BIM" and at + 12 <= len(chain):
        number = int.from_bytes(chain[at + 4 : at + 6], "big")
        name = 1 + chain[at + 6]
        start = at + 6 + name + name % 2
        length = int.from_bytes(chain[start : start + 4], "big")
        end = start + 4 + length
        if end > len(chain):
            return
        yield number, chain[start + 4 : end], chain[at:end] + b"\0" * (length % 2)
        at = end + length % 2


def resource_bytes(metadata: Metadata) -> bytes:
    """Return IPTC records and other resources as one chain of image resources."""
    chain = b""
    if metadata.iptc:
        head = b"8BIM" + IPTC_RESOURCE.to_bytes(2, "big") + b"\0\0" + len(metadata.iptc).to_bytes(4, "big")
        chain = head + metadata.iptc + b"\0" * (len(metadata.iptc) % 2)
    return chain + (metadata.resources or b"")


def png_chunks(metadata: Metadata) -> list[tuple[bytes, bytes]]:
    """Return the chunks of a PNG that hold the metadata, as (type, data): eXIf, iTXt (XMP), zTXt (IPTC).

    PNG has no chunk for IPTC; the text form "Raw profile type iptc" is what common libraries read.
    """
    chunks = []
    if metadata.exif:
        chunks.append((b"eXIf", metadata.exif))
    if metadata.xmp:
        chunks.append((b"iTXt", b"XML:com.adobe.xmp\0\0\0\0\0" + metadata.xmp))
    if metadata.iptc or metadata.resources:
        chunks.append((b"zTXt", _hex_profile("iptc", resource_bytes(metadata))))
    return chunks


def _hex_profile(name: str, data: bytes) -> bytes:
    digits = data.hex()
    lines = "\n".join(digits[i : i + 72] for i in range(0, len(digits), 72))
    text = f"\n{name}\n{len(data):8}\n{lines}\n"
    return f"Raw profile type {name}".encode() + b"\0\0" + zlib.compress(text.encode())


def hex_profile_of(info: Mapping[Any, Any], name: str) -> bytes | None:
    """Return a profile that PNG writers keep as hexadecimal text: a name, a length, the digits."""
    value = info.get(f"Raw profile type {name}")
    if isinstance(value, bytes):
        value = value.decode("latin-1")
    if not isinstance(value, str):
        return None
    match = re.match(r"\s*\S+\s+\d+\s+([0-9a-fA-F\s]*)$", value)
    if match is None:
        return None
    try:
        return binascii.unhexlify("".join(match.group(1).split())) or None
    except binascii.Error:
        return None
