"""TIFF files put together by the book (Adobe, TIFF 6.0): any tag, right or wrong."""

from __future__ import annotations

import struct
from collections.abc import Callable, Mapping, Sequence
from typing import Any

import imagecodecs
import numpy as np

_TYPES = {"B": 1, "s": 2, "H": 3, "I": 4, "R": 5}
_SIZES = {"B": 1, "s": 1, "H": 2, "I": 4, "R": 8}


def tiff(
    tags: Mapping[int, tuple[str, Sequence[int] | bytes]], pieces: Sequence[bytes], *, order: str = "<"
) -> bytes:
    """Return a file of one directory; the pieces' offsets and lengths are filled in where no tag gives them."""
    body, offsets = b"", []
    for piece in pieces:
        offsets.append(8 + len(body))
        body += piece + b"\0" * (len(piece) % 2)
    whole: dict[int, tuple[str, Any]] = {273: ("I", offsets), 279: ("I", [len(p) for p in pieces])}
    whole |= dict(tags)
    entries = b""
    for code, (kind, values) in sorted((k, v) for k, v in whole.items() if v is not None):
        packed = values if isinstance(values, bytes) else _pack(kind, values, order)
        count = len(packed) // _SIZES[kind]
        if len(packed) > 4:
            place = 8 + len(body)
            body += packed + b"\0" * (len(packed) % 2)
            packed = struct.pack(order + "I", place)
        entries += struct.pack(order + "HHI", code, _TYPES[kind], count) + packed.ljust(4, b"\0")
    head = b"II*\0" if order == "<" else b"MM\0*"
    directory = struct.pack(order + "H", len(entries) // 12) + entries + b"\0\0\0\0"
    return head + struct.pack(order + "I", 8 + len(body)) + body + directory


def _pack(kind: str, values: Sequence[int], order: str) -> bytes:
    letter = "I" if kind == "R" else kind
    return struct.pack(f"{order}{len(values)}{letter}", *values)


def rgb_tags(width: int, height: int, *, bits: int = 8) -> dict[int, Any]:
    return {
        256: ("I", (width,)),
        257: ("I", (height,)),
        258: ("H", (bits,) * 3),
        259: ("H", (1,)),
        262: ("H", (2,)),
        277: ("H", (3,)),
        278: ("I", (height,)),
    }


def ycbcr(rgb: np.ndarray, across: int, down: int, compression: int, rows: int = 16) -> Callable[[], bytes]:
    """Return a maker of a luma and chroma TIFF without JPEG: data units of section 21."""
    red, green, blue = np.moveaxis(rgb.astype(float), -1, 0)
    luma = 0.299 * red + 0.587 * green + 0.114 * blue
    planes = [luma, 128 + (blue - luma) / 1.772, 128 + (red - luma) / 1.402]
    height, width = luma.shape
    pack = {1: bytes, 5: imagecodecs.lzw_encode, 8: imagecodecs.zlib_encode}[compression]

    def strip(top: int) -> bytes:
        part = [np.round(p[top : top + rows]).clip(0, 255).astype(np.uint8) for p in planes]
        fill = ((0, -len(part[0]) % down), (0, -width % across))
        part = [np.pad(p, fill, "edge") for p in part]
        units = part[0].reshape(part[0].shape[0] // down, down, -1, across).transpose(0, 2, 1, 3)
        chroma = np.stack([p[::down, ::across] for p in part[1:]], axis=-1)
        return bytes(pack(np.concatenate([units.reshape(*chroma.shape[:2], -1), chroma], axis=2).tobytes()))

    tags = rgb_tags(width, height) | {
        259: ("H", (compression,)),
        262: ("H", (6,)),
        278: ("I", (rows,)),
        530: ("H", (across, down)),
        532: ("R", (0, 1, 255, 1, 128, 1, 255, 1, 128, 1, 255, 1)),
    }
    return lambda: tiff(tags, [strip(top) for top in range(0, height, rows)])
