"""The chunks of a PNG file: checked on the way in, assembled on the way out.

References
----------
.. [1] W3C, "Portable Network Graphics (PNG) Specification (Third Edition)", 2025.
"""

from __future__ import annotations

import struct
import zlib
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Final

from grader.errors import DamagedFile, UnsupportedFile
from grader.files.border import RECOPY_HINT

SIGNATURE: Final = b"\x89PNG\r\n\x1a\n"
_KNOWN_CRITICAL: Final = {b"IHDR", b"PLTE", b"IDAT", b"IEND"}
_DEPTHS: Final = {0: (1, 2, 4, 8, 16), 2: (8, 16), 3: (1, 2, 4, 8), 4: (8, 16), 6: (8, 16)}
GREY, RGB, PALETTE, GREY_ALPHA, RGBA = 0, 2, 3, 4, 6


@dataclass(slots=True)
class Layout:
    """What the chunks say."""

    width_px: int
    height_px: int
    bits: int
    colour_type: int
    interlaced: bool
    chunks: dict[bytes, bytes] = field(default_factory=dict)
    """The first chunk of each ancillary type (and PLTE)."""
    texts: list[tuple[bytes, bytes]] = field(default_factory=list)
    """All text chunks, in their order."""
    bad: list[str] = field(default_factory=list)
    """Ancillary chunks whose checksum is wrong; they are left out."""


def parse(data: bytes) -> Layout:
    """Return what the chunks of a PNG file say, every checksum verified.

    Raises
    ------
    DamagedFile
        A critical chunk is damaged or missing.
    UnsupportedFile
        There is a critical chunk of an unknown type.
    """
    kind, body, sound, position = _chunk(data, len(SIGNATURE))
    if kind != b"IHDR" or not sound:
        raise DamagedFile("its header is damaged")
    layout, has_data = _header(body), False
    while kind != b"IEND":
        kind, body, sound, position = _chunk(data, position)
        _take(layout, kind, body, sound=sound)
        has_data = has_data or kind == b"IDAT"
    if not has_data:
        raise DamagedFile("it holds no picture data")
    if layout.colour_type == PALETTE and not layout.chunks.get(b"PLTE"):
        raise DamagedFile("its palette is missing")
    return layout


def _take(layout: Layout, kind: bytes, body: bytes, *, sound: bool) -> None:
    """Keep a chunk, or refuse the file for it; an ancillary one that is damaged is left out."""
    critical = not kind[0] & 0x20
    if critical and not sound:
        raise DamagedFile("its data are damaged (a checksum is wrong)")
    if critical and kind not in _KNOWN_CRITICAL:
        raise UnsupportedFile(f"it needs an unknown kind of chunk ({kind.decode('latin-1')})")
    if not sound:
        layout.bad.append(kind.decode("latin-1"))
    elif kind in (b"tEXt", b"zTXt", b"iTXt"):
        layout.texts.append((kind, body))
    elif kind != b"IDAT":
        layout.chunks.setdefault(kind, body)


def _chunk(data: bytes, position: int) -> tuple[bytes, bytes, bool, int]:
    if position + 12 > len(data):
        raise DamagedFile("the file ends before the picture does", hint=RECOPY_HINT)
    length, kind = struct.unpack_from(">I4s", data, position)
    end = position + 12 + length
    if end > len(data):
        raise DamagedFile("the file ends before the picture does", hint=RECOPY_HINT)
    body = memoryview(data)[position + 8 : end - 4]
    (checksum,) = struct.unpack_from(">I", data, end - 4)
    sound = zlib.crc32(body, zlib.crc32(kind)) == checksum
    return kind, b"" if kind == b"IDAT" else bytes(body), sound, end


def _header(body: bytes) -> Layout:
    if len(body) != 13:
        raise DamagedFile("its header is damaged")
    width, height, bits, colour_type, method, filters, interlace = struct.unpack(">IIBBBBB", body)
    if bits not in _DEPTHS.get(colour_type, ()) or method or filters or interlace > 1:
        raise DamagedFile("its header is damaged")
    return Layout(width, height, bits, colour_type, bool(interlace))


def picture_data(data: bytes) -> bytes:
    """Return the bodies of all IDAT chunks of a file that `parse` let through, in one piece."""
    return b"".join(body for kind, body, _ in _spans(data) if kind == b"IDAT")


def essential(data: bytes) -> bytes:
    """Return a file that `parse` let through without its ancillary chunks: decoders trip over damaged ones."""
    wanted = (b"IHDR", b"PLTE", b"IDAT", b"IEND")
    return SIGNATURE + b"".join(whole for kind, _, whole in _spans(data) if kind in wanted)


def _spans(data: bytes) -> Iterator[tuple[bytes, memoryview, memoryview]]:
    """Return type, body and whole of each chunk up to the end of the picture."""
    view, position, kind = memoryview(data), len(SIGNATURE), b""
    while kind != b"IEND":
        length, kind = struct.unpack_from(">I4s", data, position)
        end = position + 12 + length
        yield kind, view[position + 8 : end - 4], view[position:end]
        position = end


def chunk(kind: bytes, body: bytes) -> bytes:
    """Return one chunk with its length and checksum."""
    return struct.pack(">I4s", len(body), kind) + body + struct.pack(">I", zlib.crc32(body, zlib.crc32(kind)))


def insert(png: bytes, chunks: list[tuple[bytes, bytes]]) -> bytes:
    """Return an encoded PNG with chunks put behind its header."""
    place = len(SIGNATURE) + 25
    return png[:place] + b"".join(chunk(kind, body) for kind, body in chunks) + png[place:]


def inflated(body: bytes, limit: int) -> bytes:
    """Return deflated data, or fail where they would exceed a limit.

    Raises
    ------
    DamagedFile
        They are cut short or too large.
    """
    inflater = zlib.decompressobj()
    plain = inflater.decompress(body, limit)
    if not inflater.eof:
        raise DamagedFile("a compressed chunk is cut short or too large")
    return plain
