"""ICC profiles read: from the bytes in a file to a `model.Space` that the kernel can apply exactly.

A profile that consists of a matrix and three curves, or of one grey curve, is parsed as ICC.1:2022 writes it.
Everything else (look-up tables, CMYK, Lab) is a conversion that LittleCMS does, see ``profile_convert``.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass, replace
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from grader.colour.spaces import REC2020_FROM_XYZ, SPACES
from grader.colour.white import D65_XY, xyz_from_xy
from grader.model import Curve, Matrix, Space

D50_XYZ: Final = np.array([0.9642, 1.0, 0.8249])
"""The white of the profile connection space, ICC.1:2022 7.2.16."""

BRADFORD: Final = np.array([[0.8951, 0.2664, -0.1614], [-0.7502, 1.7135, 0.0367], [0.0389, -0.0685, 1.0296]])
"""The cone matrix of the linear Bradford adaptation, ICC.1:2022 annex E.3."""

MAX_PROFILE_BYTES: Final = 32 << 20
"""Profiles of printing processes reach some megabytes; more than this is not a profile."""

Colours = Literal["RGB", "GRAY", "CMYK", "Lab"]
_SIGNATURES: Final[dict[bytes, Colours]] = {b"RGB ": "RGB", b"GRAY": "GRAY", b"CMYK": "CMYK", b"Lab ": "Lab"}
_PARAMETERS: Final = (1, 3, 4, 5, 7)
_SAME: Final = 1e-3
"""Curves and matrices closer than this are the same but for a profile's rounding (a quarter of a code value in
8 bits; the named spaces differ by more than ten times this)."""


class ProfileProblem(ValueError):
    """The bytes are not a profile that can be used."""


@dataclass(frozen=True, slots=True, eq=False)
class Parsed:
    """What the header and the tag table of a profile say."""

    colours: Colours
    lab_connection: bool
    description: str
    tags: dict[bytes, bytes]

    @property
    def has_table(self) -> bool:
        """True where a look-up table takes precedence over matrix and curves (ICC.1:2022 8.10.2)."""
        return b"A2B0" in self.tags or b"A2B1" in self.tags or b"D2B0" in self.tags


def parse(icc: bytes) -> Parsed:
    """Return the header and tags of a profile.

    Raises
    ------
    ProfileProblem
        It is cut short, not a profile, or for colours that no picture here has.
    """
    if len(icc) < 132 or icc[36:40] != b"acsp":
        raise ProfileProblem("it is not an ICC profile")
    if struct.unpack_from(">I", icc)[0] > len(icc):
        raise ProfileProblem("it is cut short")
    colours = _SIGNATURES.get(icc[16:20])
    if colours is None:
        raise ProfileProblem(f"it is for {icc[16:20].decode('latin-1').strip()!r} colours")
    if icc[20:24] not in (b"XYZ ", b"Lab "):
        raise ProfileProblem("it leads to no known connection space")
    tags = _tags(icc)
    return Parsed(colours, icc[20:24] == b"Lab ", _description(tags.get(b"desc", b"")), tags)


def _tags(icc: bytes) -> dict[bytes, bytes]:
    (count,) = struct.unpack_from(">I", icc, 128)
    if not 0 < count <= 256 or 132 + 12 * count > len(icc):
        raise ProfileProblem("its table of contents is damaged")
    tags = {}
    for index in range(count):
        signature, offset, size = struct.unpack_from(">4sII", icc, 132 + 12 * index)
        if offset + size > len(icc):
            raise ProfileProblem("its table of contents points outside")
        tags[signature] = icc[offset : offset + size]
    return tags


def _description(tag: bytes) -> str:
    """Return the text of a 'desc' (v2) or 'mluc' (v4) tag; empty where it cannot be read."""
    if tag[:4] == b"desc" and len(tag) > 12:
        (length,) = struct.unpack_from(">I", tag, 8)
        text = tag[12 : 12 + length].split(b"\0")[0].decode("latin-1")
    elif tag[:4] == b"mluc" and len(tag) >= 28:
        length, offset = struct.unpack_from(">II", tag, 20)
        text = tag[offset : offset + length].decode("utf-16-be", "replace")
    else:
        return ""
    return " ".join("".join(c if c.isprintable() else " " for c in text).split())[:80]


def space_from_parsed(parsed: Parsed, icc: bytes) -> Space:
    """Return the space of a matrix/curve or a grey profile.

    The profile's own white (1, 1, 1) becomes the white of working light; for a sound profile that is the
    connection space's D50 within rounding.

    Raises
    ------
    ProfileProblem
        A tag is missing or damaged, or its curves cannot be turned round.
    """
    if parsed.colours == "GRAY":
        curve = _curve(_need(parsed, b"kTRC"))
        if parsed.lab_connection:
            curve = _light_from_lightness(curve)
        grey = SPACES["linear Rec.709"].rec2020_from_linear
        return Space(parsed.description or "grey profile", grey, (curve, curve, curve), icc)
    curves = tuple(_curve(_need(parsed, tag)) for tag in (b"rTRC", b"gTRC", b"bTRC"))
    colorants = np.stack([_xyz(_need(parsed, tag)) for tag in (b"rXYZ", b"gXYZ", b"bXYZ")], axis=1)
    matrix = rec2020_from_colorants(colorants)
    space = Space(parsed.description or "RGB profile", matrix, (curves[0], curves[1], curves[2]), icc)
    return replace(space, name=_known_name(space) or space.name)


def _known_name(space: Space) -> str | None:
    """Return the name of the space that this one is, within the rounding of profiles, or None."""
    steps = np.linspace(0.0, 1.0, 65)
    for known in SPACES.values():
        if np.abs(known.rec2020_from_linear - space.rec2020_from_linear).max() > _SAME:
            continue
        pairs = zip(known.curves, space.curves, strict=True)
        if all(np.abs(curve_values(a, steps) - curve_values(b, steps)).max() < _SAME for a, b in pairs):
            return known.name
    return None


def rec2020_from_colorants(colorants: Matrix) -> Matrix:
    """Return the matrix to working light of colorants in the connection space (columns, XYZ at D50).

    Raises
    ------
    ProfileProblem
        The colorants span no colour space.
    """
    white = colorants.sum(axis=1)
    if not np.all(np.isfinite(colorants)) or white.min() < 0.05 or abs(np.linalg.det(colorants)) < 1e-4:
        raise ProfileProblem("its primaries span no colour space")
    return np.asarray(REC2020_FROM_XYZ @ bradford(white, xyz_from_xy(D65_XY)) @ colorants)


def bradford(from_xyz: NDArray[np.float64], toward_xyz: NDArray[np.float64]) -> Matrix:
    """Return the XYZ matrix of the linear Bradford adaptation, the one that ICC profiles use.

    Examples
    --------
    >>> bradford(D50_XYZ, D50_XYZ).round(6).tolist() == np.eye(3).tolist()
    True
    """
    cones = np.diag((BRADFORD @ toward_xyz) / (BRADFORD @ from_xyz))
    return np.asarray(np.linalg.inv(BRADFORD) @ cones @ BRADFORD)


def _need(parsed: Parsed, tag: bytes) -> bytes:
    if tag not in parsed.tags:
        raise ProfileProblem(f"its {tag.decode()} tag is missing")
    return parsed.tags[tag]


def _xyz(tag: bytes) -> NDArray[np.float64]:
    if tag[:4] != b"XYZ " or len(tag) < 20:
        raise ProfileProblem("one of its primaries is damaged")
    return np.array(struct.unpack_from(">3i", tag, 8), np.float64) / 65536


def _curve(tag: bytes) -> Curve:
    """Return a curveType (ICC.1:2022 10.6) or parametricCurveType (10.18) as it stands."""
    kind = tag[:4]
    if kind == b"curv" and len(tag) >= 12:
        curve = _sampled(tag)
    elif kind == b"para" and len(tag) >= 12:
        curve = _parametric(tag)
    else:
        raise ProfileProblem("one of its curves is damaged")
    return _checked(curve)


def _sampled(tag: bytes) -> Curve:
    (count,) = struct.unpack_from(">I", tag, 8)
    if 12 + 2 * count > len(tag):
        raise ProfileProblem("one of its curves is cut short")
    values = np.frombuffer(tag, ">u2", count, 12)
    if count == 0:
        return Curve()
    if count == 1:
        return Curve(g=float(values[0]) / 256)
    return Curve(samples=values / 65535.0)


def _parametric(tag: bytes) -> Curve:
    (function,) = struct.unpack_from(">H", tag, 8)
    if function >= len(_PARAMETERS) or 12 + 4 * _PARAMETERS[function] > len(tag):
        raise ProfileProblem("one of its curves is of an unknown kind or cut short")
    p = [float(v) / 65536 for v in struct.unpack_from(f">{_PARAMETERS[function]}i", tag, 12)]
    if function == 0:
        return Curve(g=p[0])
    if p[1] == 0.0:
        raise ProfileProblem("one of its curves is flat")
    if function == 1:
        return Curve(g=p[0], a=p[1], b=p[2], c=0.0, d=-p[2] / p[1])
    if function == 2:
        return Curve(g=p[0], a=p[1], b=p[2], c=0.0, d=-p[2] / p[1], e=p[3], f=p[3])
    if function == 3:
        return Curve(g=p[0], a=p[1], b=p[2], c=p[3], d=p[4])
    return Curve(g=p[0], a=p[1], b=p[2], c=p[3], d=p[4], e=p[5], f=p[6])


def curve_values(curve: Curve, encoded: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the linear light of encoded values from 0 to 1, as the profile states it (nothing mirrored)."""
    if curve.samples is not None:
        return np.interp(encoded, np.linspace(0.0, 1.0, len(curve.samples)), curve.samples)
    power = np.maximum(curve.a * encoded + curve.b, 0.0) ** curve.g + curve.e
    return np.asarray(np.where(encoded >= curve.d, power, curve.c * encoded + curve.f))


def _checked(curve: Curve) -> Curve:
    """Return the curve if it rises from about black to about white, so that it can be turned round."""
    if curve.samples is None and not 0.05 < curve.g < 20:
        raise ProfileProblem("one of its curves is absurd")
    values = curve_values(curve, np.linspace(0.0, 1.0, 1025))
    if not np.all(np.isfinite(values)) or values.min() < -0.1 or not 0.5 < values[-1] < 1.5:
        raise ProfileProblem("one of its curves is absurd")
    if np.diff(values).min() < -_SAME:
        raise ProfileProblem("one of its curves falls")
    return curve


def _light_from_lightness(curve: Curve) -> Curve:
    """Return the curve to light of one that leads to L* (a grey profile with a Lab connection space)."""
    steps = np.linspace(0.0, 1.0, 4096)
    lightness = 100.0 * curve_values(curve, steps)
    light = np.where(lightness > 8.0, ((lightness + 16.0) / 116.0) ** 3, lightness * 27.0 / 24389.0)
    return Curve(samples=np.maximum.accumulate(np.clip(light, 0.0, 1.0)))
