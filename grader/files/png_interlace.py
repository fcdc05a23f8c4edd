"""Interlaced PNG of whole bytes: each of the seven passes is a picture of its own, and is decoded as one.

References
----------
.. [1] W3C, "Portable Network Graphics (PNG) Specification (Third Edition)", 2025, 8.1 (Adam7).
"""

from __future__ import annotations

import struct
import zlib
from typing import Any, Final

import imagecodecs
import numpy as np
from numpy.typing import NDArray

from grader.errors import DamagedFile
from grader.files import png_chunks
from grader.files.border import RECOPY_HINT

_PASSES: Final = (
    (0, 8, 0, 8),
    (0, 8, 4, 8),
    (4, 8, 0, 4),
    (0, 4, 2, 4),
    (2, 4, 0, 2),
    (0, 2, 1, 2),
    (1, 2, 0, 1),
)
"""First row, row step, first column, column step."""


def decode(data: bytes, layout: png_chunks.Layout, channels: int) -> NDArray[Any]:
    """Return the samples (H, W, channels) of an interlaced PNG of 8 or 16 bits.

    Raises
    ------
    DamagedFile
        The picture data end early.
    """
    dtype = np.uint16 if layout.bits == 16 else np.uint8
    result = np.empty((layout.height_px, layout.width_px, channels), dtype)
    rows = _inflated(data, layout, channels)
    start = 0
    for top, down, left, across in _PASSES:
        part = result[top::down, left::across]
        if not part.size:
            continue
        size = part.shape[0] * (1 + layout.bits // 8 * channels * part.shape[1])
        part[:] = _whole(rows[start : start + size], part.shape, layout)
        start += size
    return result


def _inflated(data: bytes, layout: png_chunks.Layout, channels: int) -> bytes:
    """Return the filtered rows of all passes, after a check that they are all there."""
    needed = stored_bytes(layout, channels)
    inflater = zlib.decompressobj()
    rows = inflater.decompress(png_chunks.picture_data(data), needed + 1)
    if len(rows) < needed or not (inflater.eof or inflater.unconsumed_tail):
        raise DamagedFile("the picture data end early", hint=RECOPY_HINT)
    return rows


def stored_bytes(layout: png_chunks.Layout, channels: int) -> int:
    """Return how many bytes the filtered rows take: each begins with its filter's number."""
    passes = _PASSES if layout.interlaced else ((0, 1, 0, 1),)
    total = 0
    for top, down, left, across in passes:
        rows, columns = -(-(layout.height_px - top) // down), -(-(layout.width_px - left) // across)
        if rows > 0 and columns > 0:
            total += rows * (1 + -(-columns * channels * layout.bits // 8))
    return total


def check_whole(data: bytes, layout: png_chunks.Layout, channels: int) -> None:
    """Refuse picture data that end early: not every decoder does, where they are interlaced.

    Raises
    ------
    DamagedFile
    """
    _inflated(data, layout, channels)


def _whole(rows: bytes, shape: tuple[int, ...], layout: png_chunks.Layout) -> NDArray[Any]:
    """Return the samples of one pass: its rows wrapped as a small PNG, which the library decodes."""
    header = struct.pack(">IIBBBBB", shape[1], shape[0], layout.bits, layout.colour_type, 0, 0, 0)
    chunks = ((b"IHDR", header), (b"IDAT", zlib.compress(rows, 0)), (b"IEND", b""))
    png = png_chunks.SIGNATURE + b"".join(png_chunks.chunk(*c) for c in chunks)
    return np.asarray(imagecodecs.png_decode(png)).reshape(shape)
