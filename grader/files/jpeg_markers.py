"""The marker segments of a JPEG file: what stands where, before any pixel is decoded.

References
----------
.. [1] ITU-T T.81 | ISO/IEC 10918-1, annex B.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass, field
from typing import Final

from grader.errors import DamagedFile, UnsupportedFile
from grader.files.border import CONVERT_HINT

SOI, EOI, SOS, DHT, DQT, DRI, DNL, TEM = 0xD8, 0xD9, 0xDA, 0xC4, 0xDB, 0xDD, 0xDC, 0x01
_RESTARTS: Final = range(0xD0, 0xD8)
_FRAMES: Final = frozenset(range(0xC0, 0xD0)) - {0xC4, 0xC8, 0xCC}
_REFUSED: Final = {
    0xC3: "lossless JPEG",
    0xC5: "hierarchical JPEG",
    0xC6: "hierarchical JPEG",
    0xC7: "hierarchical JPEG",
    0xCB: "lossless JPEG",
    0xCD: "hierarchical JPEG",
    0xCE: "hierarchical JPEG",
    0xCF: "hierarchical JPEG",
}


@dataclass(frozen=True, slots=True)
class Component:
    """One colour component: its identity, sampling factors and quantisation table."""

    identity: int
    horizontal: int
    vertical: int
    table: int


@dataclass(frozen=True, slots=True)
class Scan:
    """One scan: where its header and its coded data stand, and the tables and restarts then in force."""

    header: bytes
    start: int
    end: int
    huffman: dict[int, bytes]
    restart_interval: int


@dataclass(slots=True)
class Layout:
    """A JPEG file's structure."""

    process: int = -1
    bits: int = 8
    width_px: int = 0
    height_px: int = 0
    components: list[Component] = field(default_factory=list)
    scans: list[Scan] = field(default_factory=list)
    quantisation: dict[int, int] = field(default_factory=dict)
    """The DC step of each quantisation table."""
    restart_interval: int = 0
    ended: bool = False
    end: int = 0

    @property
    def progressive(self) -> bool:
        """True for a progressive process."""
        return self.process in (0xC2, 0xCA)

    @property
    def arithmetic(self) -> bool:
        """True where the data are coded arithmetically."""
        return self.process in (0xC9, 0xCA)


def parse(data: bytes, tables: bytes = b"") -> Layout:
    """Return the structure of a JPEG picture.

    Parameters
    ----------
    data : bytes
        From its first marker to its last, or further.
    tables : bytes
        A JPEG stream of tables only, which goes before (the JPEGTables of a TIFF).

    Raises
    ------
    DamagedFile
        A segment is cut short or missing.
    """
    layout = Layout()
    huffman: dict[int, bytes] = {}
    if tables:
        _walk(tables, layout, huffman)
    _walk(data, layout, huffman)
    if layout.process < 0 or not layout.scans:
        raise DamagedFile("the file ends before the picture begins")
    if any(not (1 <= c.horizontal <= 4 and 1 <= c.vertical <= 4) for c in layout.components):
        raise DamagedFile("its frame header has impossible sampling factors")
    return layout


def check_supported(layout: Layout) -> None:
    """Refuse what cannot be decoded.

    Raises
    ------
    UnsupportedFile
        It is coded in a way that is not supported.
    """
    count = len(layout.components)
    if layout.process in _REFUSED:
        raise UnsupportedFile(f"{_REFUSED[layout.process]} is not supported", hint=CONVERT_HINT)
    if layout.bits != 8:
        raise UnsupportedFile(f"{layout.bits}-bit JPEG is not supported", hint=CONVERT_HINT)
    if count not in (1, 3, 4):
        raise UnsupportedFile(f"a JPEG with {count} components is not supported", hint=CONVERT_HINT)
    if layout.height_px == 0:
        raise UnsupportedFile("a JPEG that tells its height at the end is not supported", hint=CONVERT_HINT)


def _walk(data: bytes, layout: Layout, huffman: dict[int, bytes]) -> None:
    """Walk over all markers up to the end of the picture."""
    position = 2
    while True:
        position, marker = _next_marker(data, position)
        if marker in (EOI, -1):
            layout.ended = marker == EOI
            break
        if marker in (SOI, TEM) or marker in _RESTARTS:
            continue
        body, position = _segment(data, position)
        if marker in _FRAMES:
            _read_frame(layout, marker, body)
        elif marker == DHT:
            huffman |= _tables(body)
        elif marker == DQT:
            layout.quantisation |= _dc_steps(body)
        elif marker == DRI and len(body) >= 2:
            layout.restart_interval = struct.unpack_from(">H", body)[0]
        elif marker == SOS:
            end = _end_of_scan(data, position)
            layout.scans.append(Scan(body, position, end, dict(huffman), layout.restart_interval))
            position = end
    layout.end = position


def _next_marker(data: bytes, position: int) -> tuple[int, int]:
    """Return the next marker and the position behind it; -1 at the end of the data."""
    while True:
        position = data.find(b"\xff", position)
        if position < 0 or position + 1 >= len(data):
            return len(data), -1
        if data[position + 1] in (0x00, 0xFF):  # stuffing, fill bytes
            position += 1
            continue
        return position + 2, data[position + 1]


def _segment(data: bytes, position: int) -> tuple[bytes, int]:
    if position + 2 > len(data):
        raise DamagedFile("the file ends within its header")
    (length,) = struct.unpack_from(">H", data, position)
    if length < 2 or position + length > len(data):
        raise DamagedFile("the file ends within its header")
    return data[position + 2 : position + length], position + length


def _read_frame(layout: Layout, marker: int, body: bytes) -> None:
    if layout.process >= 0:
        raise DamagedFile("it has two frame headers")
    if len(body) < 6 or len(body) < 6 + 3 * body[5]:
        raise DamagedFile("its frame header is cut short")
    layout.process = marker
    layout.bits, layout.height_px, layout.width_px, count = struct.unpack_from(">BHHB", body)
    for index in range(count):
        identity, sampling, table = body[6 + 3 * index : 9 + 3 * index]
        layout.components.append(Component(identity, sampling >> 4, sampling & 15, table))


def _tables(body: bytes) -> dict[int, bytes]:
    """Return Huffman tables by class and place, each as 16 counts and the values."""
    found, position = {}, 0
    while position + 17 <= len(body):
        size = sum(body[position + 1 : position + 17])
        if size > 256 or position + 17 + size > len(body):
            raise DamagedFile("one of its Huffman tables is cut short")
        found[body[position]] = body[position + 1 : position + 17 + size]
        position += 17 + size
    return found


def _dc_steps(body: bytes) -> dict[int, int]:
    """Return the first value of each quantisation table, by place."""
    found, position = {}, 0
    while position < len(body):
        wide = body[position] >> 4
        size = 65 + 64 * bool(wide)
        if position + size > len(body):
            raise DamagedFile("one of its quantisation tables is cut short")
        found[body[position] & 15] = int.from_bytes(body[position + 1 : position + 2 + bool(wide)], "big")
        position += size
    return found


def _end_of_scan(data: bytes, position: int) -> int:
    """Return where the coded data end: at the next marker that is neither a restart nor stuffing."""
    while True:
        position = data.find(b"\xff", position)
        if position < 0 or position + 1 >= len(data):
            return len(data)
        follower = data[position + 1]
        if follower == 0xFF:
            position += 1
        elif follower == 0 or follower in _RESTARTS:
            position += 2
        else:
            return position
