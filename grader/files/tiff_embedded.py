"""Pieces of a TIFF that are pictures of their own: their size, before their decoder believes it."""

from __future__ import annotations

import struct
from collections.abc import Callable
from typing import Any, Final

from grader.errors import DamagedFile
from grader.files import jpeg_entropy, jpeg_markers
from grader.files.border import RECOPY_HINT

Size = tuple[int, int]
_MOST_COMPONENTS: Final = 4


def check(page: Any, pieces: Any) -> None:
    """Refuse a page of which a piece claims to be larger than its strip or tile, or is a damaged JPEG.

    Raises
    ------
    DamagedFile
    """
    size_of = _SIZES.get(int(page.compression))
    if size_of is None:
        return
    tables = page.jpegtables or b""
    most = (page.tilewidth, page.tilelength) if page.is_tiled else (page.imagewidth, page.rowsperstrip)
    for data in pieces:
        width_px, height_px = size_of(data, tables)
        if not (0 < width_px <= most[0] and 0 < height_px <= most[1]):
            message = f"a piece of the picture claims {width_px} x {height_px} pixels, more than its place"
            raise DamagedFile(message, hint=RECOPY_HINT)


def _jpeg(data: bytes, tables: bytes) -> Size:
    """Return the size of a JPEG after a walk over its codes: the decoder would fill what is missing with grey."""
    layout = jpeg_markers.parse(data, tables)
    jpeg_entropy.check(data, layout)
    return layout.width_px, layout.height_px


def _jpeg2000(data: bytes, _: bytes) -> Size:
    """Return the size that the SIZ marker of a codestream states (ISO/IEC 15444-1, A.5.1)."""
    start = data.find(b"\xff\x4f\xff\x51")
    if start < 0 or start + 44 > len(data):
        raise DamagedFile("a piece of the picture has no header", hint=RECOPY_HINT)
    width, height, left, top = struct.unpack_from(">4I", data, start + 8)
    (components,) = struct.unpack_from(">H", data, start + 40)
    if components > _MOST_COMPONENTS:
        raise DamagedFile("a piece of the picture has too many channels", hint=RECOPY_HINT)
    return width - left, height - top


def _png(data: bytes, _: bytes) -> Size:
    if len(data) < 24 or data[12:16] != b"IHDR":
        raise DamagedFile("a piece of the picture has no header", hint=RECOPY_HINT)
    width, height = struct.unpack_from(">2I", data, 16)
    return width, height


def _webp(data: bytes, _: bytes) -> Size:
    """Return the size in a VP8L or VP8 chunk (RFC 9649, sections 2.5, 2.6); VP8X has its own."""
    if len(data) < 30:
        raise DamagedFile("a piece of the picture has no header", hint=RECOPY_HINT)
    kind, body = data[12:16], data[20:30]
    if kind == b"VP8L":
        packed = int.from_bytes(body[1:5], "little")
        return (packed & 0x3FFF) + 1, (packed >> 14 & 0x3FFF) + 1
    if kind == b"VP8X":
        return int.from_bytes(body[4:7], "little") + 1, int.from_bytes(body[7:10], "little") + 1
    return int.from_bytes(body[6:8], "little") & 0x3FFF, int.from_bytes(body[8:10], "little") & 0x3FFF


def _jpegxl(data: bytes, _: bytes) -> Size:
    """Return the size in the header of a codestream (ISO/IEC 18181-1, SizeHeader)."""
    start = data.find(b"\xff\x0a") if data[:2] == b"\xff\x0a" else data.find(b"jxlc") + 4
    bits = _Bits(data[start + 2 : start + 18])
    small = bits.take(1)
    height = _jpegxl_side(bits, small=small)
    ratio = _RATIOS[bits.take(3)]
    width = _jpegxl_side(bits, small=small) if ratio is None else height * ratio[0] // ratio[1]
    return width, height


_RATIOS: Final = (None, (1, 1), (12, 10), (4, 3), (3, 2), (16, 9), (5, 4), (2, 1))


def _jpegxl_side(bits: _Bits, *, small: int) -> int:
    if small:
        return (bits.take(5) + 1) * 8
    return bits.take((9, 13, 18, 30)[bits.take(2)]) + 1


class _Bits:
    """Bits taken from the low end of each byte."""

    def __init__(self, data: bytes) -> None:
        self._left = int.from_bytes(data, "little")

    def take(self, count: int) -> int:
        """Return the next bits."""
        value = self._left & ((1 << count) - 1)
        self._left >>= count
        return value


_SIZES: Final[dict[int, Callable[[bytes, bytes], Size]]] = {
    7: _jpeg,
    33003: _jpeg2000,
    33004: _jpeg2000,
    33005: _jpeg2000,
    33007: _jpeg,
    34712: _jpeg2000,
    34892: _jpeg,
    34933: _png,
    50001: _webp,
    50002: _jpegxl,
    52546: _jpegxl,
}
"""By the number of the compression."""
