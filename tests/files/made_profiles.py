"""Profiles for the tests, put together byte by byte: look-up tables for RGB and inks, curves of every kind."""

from __future__ import annotations

import struct
from collections.abc import Callable

import numpy as np

D50 = (0.9642, 1.0, 0.8249)  # ICC.1:2022, 7.2.16


def assemble(
    tags: dict[bytes, bytes], colours: bytes, *, connection: bytes, kind: bytes, version: int = 2
) -> bytes:
    table, body, offset = b"", b"", 132 + 12 * len(tags)
    for signature, data in tags.items():
        table += struct.pack(">4sII", signature, offset + len(body), len(data))
        body += data + b"\0" * (-len(data) % 4)
    content = struct.pack(">I", len(tags)) + table + body
    header = struct.pack(
        ">I4sBBH4s4s4s6H4s4sI4s4s8sI12s48s",
        *(128 + len(content), b"\0\0\0\0", version, 0, 0, kind, colours, connection, 2026, 1, 1, 0, 0, 0),
        *(b"acsp", b"\0\0\0\0", 0, b"\0\0\0\0", b"\0\0\0\0", bytes(8), 1, fixed(D50), bytes(48)),
    )
    return header + content


def fixed(values: tuple[float, ...]) -> bytes:
    return b"".join(struct.pack(">i", round(v * 65536)) for v in values)


def xyz(values: tuple[float, ...]) -> bytes:
    return b"XYZ \0\0\0\0" + fixed(values)


def desc(text: str) -> bytes:
    data = text.encode() + b"\0"
    return b"desc\0\0\0\0" + struct.pack(">I", len(data)) + data + bytes(78)


def table_curve(values: np.ndarray) -> bytes:
    whole = np.round(np.asarray(values) * 65535).astype(">u2")
    return struct.pack(">4sII", b"curv", 0, len(whole)) + whole.tobytes()


def gamma_curve(gamma: float) -> bytes:
    return struct.pack(">4sIIH", b"curv", 0, 1, round(gamma * 256))


def parametric_curve(function: int, *numbers: float) -> bytes:
    return struct.pack(">4sIHH", b"para", 0, function, 0) + fixed(numbers)


def matrix_profile(colorants: np.ndarray, curves: tuple[bytes, bytes, bytes], *, version: int = 2) -> bytes:
    """Return a matrix profile: colorants are columns of XYZ at D50."""
    tags = {b"desc": desc("made for a test"), b"cprt": b"text\0\0\0\0none\0", b"wtpt": xyz(D50)}
    for i, letter in enumerate((b"r", b"g", b"b")):
        tags[letter + b"XYZ"] = xyz(tuple(colorants[:, i]))
        tags[letter + b"TRC"] = curves[i]
    return assemble(tags, b"RGB ", connection=b"XYZ ", kind=b"mntr", version=version)


def grey_profile(curve: bytes, *, connection: bytes = b"XYZ ") -> bytes:
    tags = {b"desc": desc("grey test"), b"cprt": b"text\0\0\0\0none\0", b"wtpt": xyz(D50), b"kTRC": curve}
    return assemble(tags, b"GRAY", connection=connection, kind=b"mntr")


def table_profile(
    colours: bytes, lab_of: Callable[[np.ndarray], np.ndarray], *, steps: int = 9, **more: bytes
) -> bytes:
    """Return a profile whose 16-bit look-up table (lut16Type) leads to ICC version 2 Lab.

    ``lab_of`` turns device values (N, channels), 0 to 1, into L* a* b*.
    """
    channels = {b"RGB ": 3, b"CMYK": 4}[colours]
    axes = np.meshgrid(*[np.linspace(0, 1, steps)] * channels, indexing="ij")
    lab = lab_of(np.stack(axes, axis=-1).reshape(-1, channels))
    stored = np.stack([lab[:, 0] * 652.8, (lab[:, 1] + 128) * 256, (lab[:, 2] + 128) * 256], axis=1)
    grid = np.clip(np.round(stored), 0, 65535).astype(">u2").tobytes()
    ramp = np.array([0, 65535], ">u2").tobytes()
    identity = fixed((1, 0, 0, 0, 1, 0, 0, 0, 1))
    lut = b"mft2\0\0\0\0" + bytes([channels, 3, steps, 0]) + identity + struct.pack(">HH", 2, 2)
    lut += ramp * channels + grid + ramp * 3
    tags = {b"desc": desc("table test"), b"cprt": b"text\0\0\0\0none\0", b"wtpt": xyz(D50), b"A2B0": lut}
    tags |= {name.encode(): data for name, data in more.items()}
    return assemble(tags, colours, connection=b"Lab ", kind=b"prtr" if channels == 4 else b"mntr")


def lab_of_inks(inks: np.ndarray) -> np.ndarray:
    """Return a plausible Lab of inks, smooth and invented."""
    c, m, y, k = np.moveaxis(inks, -1, 0)
    light = 95 - 40 * c - 45 * m - 8 * y
    lightness = np.clip(light * (1 - k) + 8 * k, 0, 100)
    a = (-35 * c + 70 * m - 4 * y) * (1 - k)
    b = (-45 * c - 5 * m + 85 * y) * (1 - k)
    return np.stack([lightness, a, b], axis=-1)


def lab_of_rgb(device: np.ndarray) -> np.ndarray:
    """Return a plausible Lab of a device's RGB, which no matrix explains."""
    r, g, b = np.moveaxis(device, -1, 0)
    lightness = 100 * (0.3 * r + 0.59 * g + 0.11 * b) ** 0.95
    return np.stack([lightness, 70 * (r - g) + 8 * r * g * b * (1 - r), 60 * (0.5 * (r + g) - b)], axis=-1)
