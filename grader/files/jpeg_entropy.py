"""Whether the coded data of a JPEG make exactly the picture that its header announces.

Decoders fill what they cannot read with grey and only whisper about it; this walk over the Huffman codes
finds every code, run and restart that does not fit.  It decodes no pixels.

References
----------
.. [1] ITU-T T.81 | ISO/IEC 10918-1, annexes F (sequential) and G (progressive).
"""

from __future__ import annotations

from functools import lru_cache
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader.colour import compiled
from grader.errors import DamagedFile
from grader.files.border import RECOPY_HINT
from grader.files.jpeg_huffman import STANDARD_TABLES
from grader.files.jpeg_markers import Component, Layout, Scan
from grader.files.jpeg_walk import walk

_TRAILING_BYTES: Final = 16
"""Padding that some writers leave behind the last code.  More is data that no block claimed."""
_MOST_DC: Final = 3 * 1024 // 2
"""A block's mean lies within 1024 of mid grey, in eighths of a code value (T.81, A.3.3); half as much again is
left for an encoder's freedom."""
_MOST_SCANS: Final = 256
"""Ten is common, some dozens are possible; thousands are there to keep a decoder busy. (judgement)"""
_HUFFMAN: Final = (0xC0, 0xC1, 0xC2)
_PROBLEMS: Final = {
    1: "the picture data end early",
    2: "the picture data hold a code that means nothing",
    3: "the picture data run over the end of a block",
    4: "a restart marker is missing or out of order",
    5: "the picture data lead to impossible brightness",
}


def check(data: bytes, layout: Layout) -> bool:
    """Refuse a JPEG whose coded data do not make the whole picture.

    Arithmetically coded pictures cannot be checked this way (nearly any bytes are a picture); for them, and for
    the later scans of progressive ones, the end marker counts.

    Returns
    -------
    bool
        True where every code was seen; False where that cannot be done.

    Raises
    ------
    DamagedFile
        With what is wrong.
    """
    unchecked = layout.process not in _HUFFMAN or not compiled.AVAILABLE
    if not layout.ended and (unchecked or layout.progressive):
        raise DamagedFile("the file ends before the picture does", hint=RECOPY_HINT)
    if unchecked:
        return False
    if len(layout.scans) > _MOST_SCANS:
        raise DamagedFile(f"it is coded in {len(layout.scans)} scans, which no camera or editor does")
    if layout.bits not in (8, 12):
        raise DamagedFile("its frame header claims an impossible depth", hint=RECOPY_HINT)
    buffer = np.frombuffer(data, np.uint8)
    seen: set[int] = set()
    masks = [
        np.zeros(_blocks(c, layout) if layout.progressive else (0, 0), np.int64) for c in layout.components
    ]
    for scan in layout.scans:
        members, first, last, high, low = _scan_header(scan, layout)
        if layout.progressive and first > 0 and not set(members) <= seen:
            raise DamagedFile("its scans are out of order", hint=RECOPY_HINT)
        seen |= set(members)
        _check_scan(buffer, scan, layout, members, masks, (first, last, high, low))
    if len(seen) < len(layout.components):
        raise DamagedFile("part of its colours is missing", hint=RECOPY_HINT)
    return True


def _scan_header(scan: Scan, layout: Layout) -> tuple[list[int], int, int, int, int]:
    """Return the components of a scan (their places in the frame) and its band and bit positions."""
    header = scan.header
    count = header[0] if header else 0
    if not 1 <= count <= 4 or len(header) < 4 + 2 * count:
        raise DamagedFile("a scan header is damaged", hint=RECOPY_HINT)
    places = {c.identity: i for i, c in enumerate(layout.components)}
    names = [header[1 + 2 * i] for i in range(count)]
    if any(name not in places for name in names):
        raise DamagedFile("a scan names a component that is not there", hint=RECOPY_HINT)
    first, last, bits = header[1 + 2 * count : 4 + 2 * count]
    if not layout.progressive:
        return [places[n] for n in names], 0, 63, 0, 0
    if first > last or last > 63 or (first > 0 and count > 1) or (first == 0 and last > 0):
        raise DamagedFile("a scan header is damaged", hint=RECOPY_HINT)
    return [places[n] for n in names], first, last, bits >> 4, bits & 15


def _blocks(component: Component, layout: Layout) -> tuple[int, int]:
    """Return the rows and columns of blocks of one component's own scan (T.81, A.2.2)."""
    widest = max(c.horizontal for c in layout.components)
    tallest = max(c.vertical for c in layout.components)
    columns = -(-layout.width_px * component.horizontal // widest)
    rows = -(-layout.height_px * component.vertical // tallest)
    return -(-rows // 8), -(-columns // 8)


def _units(members: list[int], layout: Layout) -> int:
    """Return the number of minimum coded units of a scan."""
    if len(members) == 1:
        rows, columns = _blocks(layout.components[members[0]], layout)
        return rows * columns
    widest = max(c.horizontal for c in layout.components)
    tallest = max(c.vertical for c in layout.components)
    return -(-layout.width_px // (8 * widest)) * -(-layout.height_px // (8 * tallest))


def _check_scan(
    buffer: NDArray[np.uint8],
    scan: Scan,
    layout: Layout,
    members: list[int],
    masks: list[NDArray[np.int64]],
    band: tuple[int, int, int, int],
) -> None:
    components = [layout.components[i] for i in members]
    counts = [1] if len(members) == 1 else [c.horizontal * c.vertical for c in components]
    places = np.repeat(np.arange(len(members)), counts)
    tables = [scan.header[2 + 2 * i] for i in range(len(members))]
    needs_dc = band[0] == 0 and band[2] == 0
    needs_ac = band[1] > 0
    dc = np.stack([_table(scan, t >> 4) if needs_dc else _NO_TABLE for t in tables])
    ac = np.stack([_table(scan, 0x10 | (t & 15)) if needs_ac else _NO_TABLE for t in tables])
    scale = _MOST_DC << (layout.bits - 8)
    steps = [max(layout.quantisation.get(c.table, 1), 1) << band[3] for c in components]
    most = np.array([scale // step + 1 for step in steps])
    problem, position = walk(
        buffer,
        (scan.start, scan.end),
        (_units(members, layout), scan.restart_interval),
        (places, most),
        (dc, ac),
        masks[members[0]].reshape(-1),
        (*band, int(layout.progressive)),
    )
    if problem:
        raise DamagedFile(_PROBLEMS[problem], hint=RECOPY_HINT)
    if scan.end - position > _TRAILING_BYTES:
        raise DamagedFile("the picture data do not end where the picture does", hint=RECOPY_HINT)


_NO_TABLE: Final = np.zeros(1 << 16, np.uint16)


def _table(scan: Scan, place: int) -> Any:
    coded = scan.huffman.get(place) or STANDARD_TABLES.get(place)
    if coded is None:
        raise DamagedFile("one of its Huffman tables is missing", hint=RECOPY_HINT)
    return _lookup(coded)


@lru_cache(maxsize=64)
def _lookup(coded: bytes) -> Any:
    """Return, for every 16 bits to come, the length of the code they begin with times 256, plus its value."""
    lookup = np.zeros(1 << 16, np.uint16)
    code, index = 0, 16
    for length in range(1, 17):
        for _ in range(coded[length - 1]):
            start, end = code << (16 - length), (code + 1) << (16 - length)
            if end > 1 << 16:
                raise DamagedFile("one of its Huffman tables is damaged", hint=RECOPY_HINT)
            lookup[start:end] = length << 8 | coded[index]
            code, index = code + 1, index + 1
        code <<= 1
    return lookup
