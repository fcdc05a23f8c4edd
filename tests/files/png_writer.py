"""PNG files put together by the book (W3C PNG, third edition): every depth, interlaced or not, any chunk."""

from __future__ import annotations

import struct
import zlib
from collections.abc import Callable, Sequence

import numpy as np

_PASSES = ((0, 8, 0, 8), (0, 8, 4, 8), (4, 8, 0, 4), (0, 4, 2, 4), (2, 4, 0, 2), (0, 2, 1, 2), (1, 2, 0, 1))
"""First row, row step, first column, column step of the seven passes (8.2 of the specification)."""


def png(
    data: np.ndarray,
    bits: int,
    *,
    palette: np.ndarray | None = None,
    interlaced: bool = False,
    extra: Sequence[tuple[bytes, bytes]] = (),
) -> Callable[[], bytes]:
    """Return a maker of a PNG of samples (H, W) or (H, W, 1 to 4)."""
    samples = data[..., None] if data.ndim == 2 else data
    colour_type = 3 if palette is not None else {1: 0, 2: 4, 3: 2, 4: 6}[samples.shape[2]]

    def make() -> bytes:
        height, width = samples.shape[:2]
        header = struct.pack(">IIBBBBB", width, height, bits, colour_type, 0, 0, int(interlaced))
        passes = [samples[y::dy, x::dx] for y, dy, x, dx in _PASSES] if interlaced else [samples]
        rows = b"".join(_rows(part, bits) for part in passes if part.size)
        chunks = [(b"IHDR", header)]
        chunks += [c for c in extra if c[0] != b"tRNS"]
        if palette is not None:
            chunks.append((b"PLTE", palette.astype(np.uint8).tobytes()))
        chunks += [c for c in extra if c[0] == b"tRNS"]
        packed = zlib.compress(rows, 6)
        chunks += [(b"IDAT", packed[i : i + 4096]) for i in range(0, len(packed), 4096)]
        chunks.append((b"IEND", b""))
        return b"\x89PNG\r\n\x1a\n" + b"".join(chunk(*c) for c in chunks)

    return make


def chunk(kind: bytes, body: bytes) -> bytes:
    return struct.pack(">I", len(body)) + kind + body + struct.pack(">I", zlib.crc32(kind + body))


def _rows(samples: np.ndarray, bits: int) -> bytes:
    """Return rows packed to bits, each filtered: in turn none, sub, up."""
    flat = samples.reshape(len(samples), -1)
    if bits == 16:
        packed = flat.astype(">u2").view(np.uint8)
    elif bits == 8:
        packed = flat.astype(np.uint8)
    else:
        expanded = (flat[..., None] >> np.arange(bits - 1, -1, -1)) & 1
        packed = np.packbits(expanded.reshape(len(flat), -1).astype(np.uint8), axis=1)
    step = max(samples.shape[2] * bits // 8, 1)
    lines, above = [], np.zeros(packed.shape[1], np.uint8)
    for number, row in enumerate(packed):
        left = np.concatenate([np.zeros(step, np.uint8), row[:-step]])[: len(row)]
        kind = number % 3
        lines.append(bytes([kind]) + (row - (0, left, above)[kind]).astype(np.uint8).tobytes())
        above = row
    return b"".join(lines)


def chromaticities() -> bytes:
    """Return a cHRM chunk of ROMM RGB's primaries (ISO 22028-2) and D50."""
    values = (0.3457, 0.3585, 0.7347, 0.2653, 0.1596, 0.8404, 0.0366, 0.0001)
    return struct.pack(">8I", *(round(v * 100_000) for v in values))
