"""ICC profiles written: version 4.4 matrix/curve profiles of a `model.Space`, the same bytes every time.

No clock, no machine and no library version goes into them, so that the same run gives the same files.
"""

from __future__ import annotations

import hashlib
import struct
from functools import lru_cache
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.colour.spaces import SPACES, XYZ_FROM_REC2020, space_by_name
from grader.colour.white import D65_XY, xyz_from_xy
from grader.files.profile import D50_XYZ, bradford
from grader.model import Curve, Space

_COPYRIGHT: Final = "Made by grader. May be used, copied and changed by anyone, for anything."
_CREATED: Final = (2026, 1, 1, 0, 0, 0)
_D65_XYZ: Final = xyz_from_xy(D65_XY)


@lru_cache(maxsize=16)
def profile_bytes(space_name: str) -> bytes:
    """Return the ICC profile of a named output space.

    Parameters
    ----------
    space_name : str
        One of ``grader.colour.spaces.SPACES``, in any spelling that `space_by_name` knows.

    Returns
    -------
    bytes
        An ICC.1:2022 (4.4) display profile with matrix and parametric curves.

    Raises
    ------
    PresetError
        The name is unknown.

    Examples
    --------
    >>> profile = profile_bytes("Display P3")
    >>> profile[12:24]
    b'mntrRGB XYZ '
    """
    return build(space_by_name(space_name))


def build(space: Space, *, grey: bool = False) -> bytes:
    """Return an ICC profile of any space, or of its first curve for a one-channel picture."""
    tags = {
        b"desc": _text(space.name if not grey else f"{space.name} (grey)"),
        b"cprt": _text(_COPYRIGHT),
        b"wtpt": _xyz(_fixed(D50_XYZ)),
        b"chad": b"sf32\0\0\0\0" + _fixed(bradford(_D65_XYZ, D50_XYZ).ravel()),
    }
    if grey:
        tags[b"kTRC"] = _curve(space.curves[0])
    else:
        for letter, colorant in zip(b"rgb", _colorants(space), strict=True):
            tags[bytes([letter]) + b"XYZ"] = _xyz(colorant)
        for letter, curve in zip(b"rgb", space.curves, strict=True):
            tags[bytes([letter]) + b"TRC"] = _curve(curve)
    return _assemble(tags, b"GRAY" if grey else b"RGB ")


def _colorants(space: Space) -> list[bytes]:
    """Return the columns of the matrix to XYZ at D50, rounded so that they sum to exactly D50."""
    exact = bradford(_D65_XYZ, D50_XYZ) @ XYZ_FROM_REC2020 @ space.rec2020_from_linear * 65536
    rounded = np.round(exact)
    rounded[:, 1] += np.round(D50_XYZ * 65536) - rounded.sum(axis=1)
    return [struct.pack(">3i", *(int(v) for v in rounded[:, i])) for i in range(3)]


def _assemble(tags: dict[bytes, bytes], colours: bytes) -> bytes:
    offset = 132 + 12 * len(tags)
    table, body = b"", b""
    placed: dict[bytes, int] = {}
    for signature, data in tags.items():
        if data not in placed:  # equal curves are stored once
            placed[data] = offset + len(body)
            body += data + b"\0" * (-len(data) % 4)
        table += struct.pack(">4sII", signature, placed[data], len(data))
    content = struct.pack(">I", len(tags)) + table + body
    size = 128 + len(content)
    profile = _header(size, colours, bytes(16)) + content
    return _header(size, colours, _identity(profile)) + content


def _header(size: int, colours: bytes, identity: bytes) -> bytes:
    return struct.pack(
        ">I4s4s4s4s4s6H4s4sI4s4s8sI12s4s16s28s",
        *(size, b"\0\0\0\0", b"\x04\x40\0\0", b"mntr", colours, b"XYZ ", *_CREATED, b"acsp", b"\0\0\0\0"),
        *(0, b"\0\0\0\0", b"\0\0\0\0", bytes(8), 1, _fixed(D50_XYZ), b"\0\0\0\0", identity, bytes(28)),
    )


def _identity(profile: bytes) -> bytes:
    """Return the profile's MD5 with flags, intent and identity zero (ICC.1:2022 7.2.18); not for security."""
    zeroed = profile[:44] + bytes(4) + profile[48:64] + bytes(4) + profile[68:84] + bytes(16) + profile[100:]
    return hashlib.md5(zeroed, usedforsecurity=False).digest()


def _fixed(values: NDArray[np.float64]) -> bytes:
    return b"".join(struct.pack(">i", round(float(v) * 65536)) for v in values)


def _xyz(packed: bytes) -> bytes:
    return b"XYZ \0\0\0\0" + packed


def _text(text: str) -> bytes:
    encoded = text.encode("utf-16-be")
    return struct.pack(">4sIII2s2sII", b"mluc", 0, 1, 12, b"en", b"US", len(encoded), 28) + encoded


def _curve(curve: Curve) -> bytes:
    if curve.samples is not None:
        values = np.round(np.clip(curve.samples, 0.0, 1.0) * 65535).astype(">u2")
        return struct.pack(">4sII", b"curv", 0, len(values)) + values.tobytes()
    if _is_identity(curve):
        return struct.pack(">4sII", b"curv", 0, 0)
    numbers = (curve.g, curve.a, curve.b, curve.c, curve.d, curve.e, curve.f)
    if curve.d <= 0 and numbers[1:3] == (1.0, 0.0) and curve.e == 0:
        return struct.pack(">4sIHH", b"para", 0, 0, 0) + _fixed(np.array([curve.g]))
    if curve.e == 0 and curve.f == 0:
        return struct.pack(">4sIHH", b"para", 0, 3, 0) + _fixed(np.array(numbers[:5]))
    return struct.pack(">4sIHH", b"para", 0, 4, 0) + _fixed(np.array(numbers))


def _is_identity(curve: Curve) -> bool:
    return (curve.g, curve.a, curve.b, curve.e) == (1.0, 1.0, 0.0, 0.0) and curve.d <= 0


OUTPUT_SPACES: Final = tuple(SPACES)
"""Names that `profile_bytes` knows."""
