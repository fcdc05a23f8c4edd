"""The resolution of a picture, as TIFF states it: two fractions and a unit; other formats are carried over to it."""

from __future__ import annotations

import struct
from typing import Final

Fraction = tuple[int, int]
Resolution = tuple[Fraction, Fraction, int]
"""Across, down, and 1 (a ratio only), 2 (per inch) or 3 (per centimetre)."""
_INCH_CM: Final = 2.54


def from_jfif(unit: int, density: tuple[int, int]) -> Resolution | None:
    """Return the resolution in a JPEG's JFIF header (unit 0, 1 inch, 2 cm; ITU-T T.871, 10.1); None for a plain 1:1."""
    if min(density) < 1 or unit > 2 or (unit == 0 and density[0] == density[1]):
        return None
    return (density[0], 1), (density[1], 1), unit + 1


def from_phys(body: bytes | None) -> Resolution | None:
    """Return the resolution in a PNG's pHYs chunk: pixels per metre, or a ratio."""
    if body is None or len(body) != 9:
        return None
    x, y, unit = struct.unpack(">IIB", body)
    if min(x, y) < 1 or unit > 1 or (unit == 0 and x == y):
        return None
    return ((x, 100), (y, 100), 3) if unit == 1 else ((x, 1), (y, 1), 1)


def to_jfif(resolution: Resolution | None) -> bytes | None:
    """Return unit and densities as a JFIF header holds them; None where it cannot."""
    if resolution is None:
        return None
    (x, y, unit) = resolution
    values = round(x[0] / x[1]), round(y[0] / y[1])
    if unit not in (1, 2, 3) or not all(1 <= v <= 0xFFFF for v in values):
        return None
    if unit == 3 and any(v[0] % v[1] for v in (x, y)):  # per inch is the finer step
        values = round(x[0] / x[1] * _INCH_CM), round(y[0] / y[1] * _INCH_CM)
        unit = 2
    return struct.pack(">BHH", unit - 1, *values)


def to_phys(resolution: Resolution | None) -> bytes | None:
    """Return the body of a pHYs chunk."""
    if resolution is None:
        return None
    x, y, unit = resolution
    per_metre = {1: 1.0, 2: 100 / _INCH_CM, 3: 100.0}.get(unit)
    if per_metre is None:
        return None
    values = [round(v[0] / v[1] * per_metre) for v in (x, y)]
    if not all(1 <= v < 2**31 for v in values):
        return None
    return struct.pack(">IIB", *values, int(unit != 1))
