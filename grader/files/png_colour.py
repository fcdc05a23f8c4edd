"""What a PNG file says about its colours: cICP, else iCCP, else sRGB, else gAMA and cHRM (that order is the standard's)."""

from __future__ import annotations

import struct
from typing import Final

import numpy as np

from grader.colour.spaces import LINEAR, REC2020_CURVE, REC2020_FROM_XYZ, SPACES, SRGB_CURVE
from grader.colour.white import D65_XY, xyz_from_xy
from grader.errors import DamagedFile, UnsupportedFile
from grader.files.border import CONVERT_HINT
from grader.files.png_chunks import Layout, inflated
from grader.files.profile import MAX_PROFILE_BYTES, bradford
from grader.model import Curve, Matrix, Space

COLOUR_CHUNKS: Final = (b"cICP", b"sRGB", b"gAMA", b"cHRM")
_PRIMARIES: Final = {1: "sRGB", 9: "Rec.2020", 12: "Display P3"}
_CURVES: Final = {
    1: REC2020_CURVE,
    4: Curve(g=2.2),
    5: Curve(g=2.8),
    6: REC2020_CURVE,
    8: LINEAR,
    13: SRGB_CURVE,
    14: REC2020_CURVE,
    15: REC2020_CURVE,
}
"""ITU-T H.273 (07/2024) tables 2 and 3."""
_HDR: Final = {16: "PQ", 18: "HLG"}


def icc(layout: Layout) -> bytes | None:
    """Return the embedded profile where it decides, or None.

    Raises
    ------
    DamagedFile
        The chunk cannot be inflated; the caller reports a broken profile.
    """
    body = layout.chunks.get(b"iCCP")
    if body is None or b"cICP" in layout.chunks:
        return None
    name_end = body.find(b"\0", 0, 80)
    if name_end < 0 or len(body) < name_end + 2:
        raise DamagedFile("its profile chunk is damaged")
    return inflated(body[name_end + 2 :], MAX_PROFILE_BYTES)


def space(layout: Layout) -> tuple[Space | None, list[str]]:
    """Return the space that the chunks name besides an ICC profile, and notes on chunks that mean nothing.

    Raises
    ------
    UnsupportedFile
        The picture is coded for HDR screens.
    """
    chunks, notes = layout.chunks, list[str]()
    if len(chunks.get(b"cICP", b"")) == 4:
        found = _coded(chunks[b"cICP"], notes)
        if found is not None:
            return found, notes
    if b"sRGB" in chunks:
        return SPACES["sRGB"], notes
    if b"gAMA" not in chunks and b"cHRM" not in chunks:
        return None, notes
    return _measured(chunks, notes), notes


def _coded(body: bytes, notes: list[str]) -> Space | None:
    primaries, transfer, matrix, full = body
    if transfer in _HDR:
        raise UnsupportedFile(f"it is coded for HDR screens ({_HDR[transfer]})", hint=CONVERT_HINT)
    if primaries not in _PRIMARIES or transfer not in _CURVES or matrix != 0 or full != 1:
        notes.append(
            f"the coding chunk (cICP {primaries}/{transfer}/{matrix}/{full}) is not one that is known"
        )
        return None
    base, curve = SPACES[_PRIMARIES[primaries]], _CURVES[transfer]
    if base.curves[0] is curve:
        return base
    return Space(f"cICP {primaries}/{transfer}", base.rec2020_from_linear, (curve, curve, curve))


def _measured(chunks: dict[bytes, bytes], notes: list[str]) -> Space | None:
    """Return the space of gAMA (the inverse of the curve's exponent, times 100,000) and cHRM."""
    curve, matrix, name = SRGB_CURVE, SPACES["sRGB"].rec2020_from_linear, []
    gamma = chunks.get(b"gAMA", b"")
    if len(gamma) == 4:
        value = struct.unpack(">I", gamma)[0]
        if 5_000 <= value <= 1_000_000:
            curve = LINEAR if value == 100_000 else Curve(g=100_000 / value)
            name.append(f"gAMA {value}")
        else:
            notes.append(f"the gAMA chunk ({value}) means nothing; sRGB was taken")
    if len(chunks.get(b"cHRM", b"")) == 32:
        found = _matrix(chunks[b"cHRM"])
        if found is None:
            notes.append("the cHRM chunk means nothing; sRGB primaries were taken")
        else:
            matrix, name = found, [*name, "cHRM"]
    return Space("PNG " + " ".join(name), matrix, (curve, curve, curve)) if name else None


def _matrix(body: bytes) -> Matrix | None:
    """Return the matrix to working light of white and primaries in steps of 1/100,000."""
    xy = np.array(struct.unpack(">8I", body), np.float64).reshape(4, 2) / 100_000
    if xy[:, 1].min() <= 0 or xy.max() > 2:
        return None
    xyz = np.stack([xy[:, 0], xy[:, 1], 1 - xy.sum(axis=1)]) / xy[:, 1]
    if abs(np.linalg.det(xyz[:, 1:])) < 1e-3:
        return None
    xyz_from_linear = xyz[:, 1:] * np.linalg.solve(xyz[:, 1:], xyz[:, 0])
    if xyz_from_linear.sum(axis=1).min() < 0.05:
        return None
    return np.asarray(REC2020_FROM_XYZ @ bradford(xyz[:, 0], xyz_from_xy(D65_XY)) @ xyz_from_linear)
