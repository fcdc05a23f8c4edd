"""Interlaced 16-bit PNG: each of the seven passes is a picture of its own, and is decoded as one.

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
    """Return the samples (H, W, channels) of an interlaced 16-bit PNG.

    Raises
    ------
    DamagedFile
        The picture data end early.
    """
    result = np.empty((layout.height_px, layout.width_px, channels), np.uint16)
    rows = _inflated(data, layout, channels)
    start = 0
    for top, down, left, across in _PASSES:
        part = result[top::down, left::across]
        if not part.size:
            continue
        size = part.shape[0] * (1 + 2 * channels * part.shape[1])
        part[:] = _whole(rows[start : start + size], part.shape, layout)
        start += size
    return result


def _inflated(data: bytes, layout: png_chunks.Layout, channels: int) -> bytes:
    needed = 2 * channels * layout.width_px * layout.height_px + 8 * layout.height_px
    inflater = zlib.decompressobj()
    rows = inflater.decompress(png_chunks.picture_data(data), needed)
    if not inflater.eof:
        raise DamagedFile("the picture data end early", hint=RECOPY_HINT)
    return rows


def _whole(rows: bytes, shape: tuple[int, ...], layout: png_chunks.Layout) -> NDArray[Any]:
    """Return the samples of one pass: its rows wrapped as a small PNG, which the library decodes."""
    header = struct.pack(">IIBBBBB", shape[1], shape[0], layout.bits, layout.colour_type, 0, 0, 0)
    chunks = ((b"IHDR", header), (b"IDAT", zlib.compress(rows, 0)), (b"IEND", b""))
    png = png_chunks.SIGNATURE + b"".join(png_chunks.chunk(*c) for c in chunks)
    return np.asarray(imagecodecs.png_decode(png)).reshape(shape)
