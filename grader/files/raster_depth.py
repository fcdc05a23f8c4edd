"""Sample depths: odd ones spread over whole bytes and back, and the rounding between 8 and 16 bits."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

Pixels = NDArray[Any]


def scaled(samples: Pixels, bits: int) -> Pixels:
    """Return samples at the depth of a frame: uint8, uint16 or float32.

    Integers of an odd depth are spread over the next larger one so that white stays white; `unscaled`
    gives the same integers back.  Integers of more than 16 bits become floats.

    Examples
    --------
    >>> scaled(np.array([0, 1, 15], np.uint8), 4)
    array([  0,  17, 255], dtype=uint8)
    >>> scaled(np.array([0, 2048, 4095], np.uint16), 12)
    array([    0, 32776, 65535], dtype=uint16)
    """
    if samples.dtype.kind == "f":
        with np.errstate(over="ignore"):
            return samples.astype(np.float32, copy=False)
    if bits > 16:
        return np.asarray(samples / (2.0**bits - 1), np.float32)
    whole = 8 if bits <= 8 else 16
    dtype = np.uint8 if whole == 8 else np.uint16
    if bits == whole:
        return samples.astype(dtype, copy=False)
    return _spread(2**bits - 1, 2**whole - 1, dtype)[samples]


def unscaled(pixels: Pixels, bits: int) -> Pixels:
    """Return integer samples of ``bits`` bits from a frame's pixels: the inverse of `scaled`."""
    if pixels.dtype == np.float32:
        dtype = np.uint32 if bits <= 32 else np.uint64
        top = 2.0**bits - 1
        whole = np.round(np.clip(np.nan_to_num(pixels, nan=0.0), 0.0, 1.0).astype(np.float64) * top)
        return np.where(whole >= top, np.array(2**bits - 1, dtype), whole.astype(dtype))
    whole_bits = 8 * pixels.dtype.itemsize
    if bits == whole_bits:
        return pixels
    dtype_out = np.uint8 if bits <= 8 else np.uint16
    return _spread(2**whole_bits - 1, 2**bits - 1, dtype_out)[pixels]


def _spread(top_from: int, top_to: int, dtype: Any) -> Pixels:
    """Return the table that carries 0 .. top_from onto 0 .. top_to, rounded to the nearest."""
    return ((np.arange(top_from + 1, dtype=np.int64) * top_to * 2 + top_from) // (2 * top_from)).astype(dtype)


def to_eight_bits(pixels: Pixels) -> Pixels:
    """Return 8-bit pixels, rounded to the nearest.

    Examples
    --------
    >>> to_eight_bits(np.array([0, 128, 129, 65535], np.uint16))
    array([  0,   0,   1, 255], dtype=uint8)
    """
    if pixels.dtype == np.uint8:
        return pixels
    if pixels.dtype == np.uint16:
        return np.asarray((pixels.astype(np.uint32) + 128) // 257).astype(np.uint8)
    whole = np.round(np.clip(np.nan_to_num(pixels, nan=0.0), 0.0, 1.0) * 255)
    return np.asarray(whole, np.uint8)


def to_sixteen_bits(pixels: Pixels) -> Pixels:
    """Return 16-bit pixels, rounded to the nearest."""
    if pixels.dtype == np.uint16:
        return pixels
    if pixels.dtype == np.uint8:
        return pixels.astype(np.uint16) * np.uint16(257)
    whole = np.round(np.clip(np.nan_to_num(pixels, nan=0.0), 0.0, 1.0).astype(np.float64) * 65535)
    return np.asarray(whole, np.uint16)


def like(alpha: Pixels, pixels: Pixels) -> Pixels:
    """Return alpha at the pixels' type."""
    if alpha.dtype == pixels.dtype:
        return alpha
    if pixels.dtype == np.uint16:
        return to_sixteen_bits(alpha)
    if pixels.dtype == np.uint8:
        return to_eight_bits(alpha)
    return np.asarray(alpha, np.float32)
