"""The RGB colour spaces that grader knows by name."""

from __future__ import annotations

from typing import Final

import numpy as np

from grader.colour import _tables
from grader.colour.adaptation import adaptation_matrix
from grader.colour.white import D65_XY, xyz_from_primaries
from grader.errors import PresetError
from grader.model import Curve, Matrix, Space

XYZ_FROM_REC2020: Final[Matrix] = xyz_from_primaries("Rec.2020")
"""XYZ of working light, D65 white at Y = 1 (ITU-R BT.2020-2, table 3)."""
REC2020_FROM_XYZ: Final[Matrix] = np.asarray(np.linalg.inv(XYZ_FROM_REC2020), np.float64)

LINEAR: Final = Curve()
SRGB_CURVE: Final = Curve(g=2.4, a=1 / 1.055, b=0.055 / 1.055, c=1 / 12.92, d=0.04045)
"""IEC 61966-2-1:1999."""

_ALPHA, _BETA = 1.09929682680944, 0.018053968510807
REC2020_CURVE: Final = Curve(g=1 / 0.45, a=1 / _ALPHA, b=(_ALPHA - 1) / _ALPHA, c=1 / 4.5, d=4.5 * _BETA)
"""ITU-R BT.2020-2, table 4: the exact solution of its two equations, of which 1.099 and 0.018 (10-bit) and
1.0993 and 0.0181 (12-bit) are the rounded forms."""

ROMM_CURVE: Final = Curve(g=1.8, c=1 / 16, d=16 / 512)
"""ISO 22028-2:2013."""
OPRGB_CURVE: Final = Curve(g=563 / 256)
"""IEC 61966-2-5:2007."""


def _space(name: str, primaries: str, curve: Curve) -> Space:
    """Return a space; a white other than D65 is adapted by Bradford, as ICC profiles do (ICC.1:2022 annex E)."""
    to_d65 = adaptation_matrix(_tables.WHITE_XY[primaries], D65_XY, "bradford")
    matrix = np.eye(3)
    if primaries != "Rec.2020":
        matrix = REC2020_FROM_XYZ @ to_d65 @ xyz_from_primaries(primaries)
    return Space(name, matrix, (curve, curve, curve))


SPACES: Final[dict[str, Space]] = {
    space.name: space
    for space in (
        _space("sRGB", "sRGB", SRGB_CURVE),
        _space("Display P3", "Display P3", SRGB_CURVE),
        _space("Rec.2020", "Rec.2020", REC2020_CURVE),
        _space("ROMM RGB", "ROMM RGB", ROMM_CURVE),
        _space("opRGB", "opRGB", OPRGB_CURVE),
        _space("linear Rec.2020", "Rec.2020", LINEAR),
        _space("linear Rec.709", "sRGB", LINEAR),
        _space("ACEScg", "ACEScg", LINEAR),
    )
}
_LINEAR_NAMES: Final = {"sRGB": "linear Rec.709", "ACEScg": "ACEScg"}


def space_by_name(name: str) -> Space:
    """Return a known space; case, blanks, dots and hyphens do not matter.

    Any name may be preceded by ``linear``.

    Raises
    ------
    PresetError
        The name is unknown; the hint lists the known ones.

    Examples
    --------
    >>> space_by_name("rec2020").name
    'Rec.2020'
    >>> space_by_name("linear Display P3").name
    'linear Display P3'
    """
    wanted = _plain(name)
    for space in SPACES.values():
        if _plain(space.name) == wanted:
            return space
        if "linear" + _plain(space.name) == wanted:
            return linear_variant(space)
    raise PresetError(f"there is no colour space called {name!r}", hint=f"choose one of {', '.join(SPACES)}")


def linear_variant(space: Space) -> Space:
    """Return the space with the same primaries and no transfer curve.

    Examples
    --------
    >>> linear_variant(SPACES["sRGB"]).name
    'linear Rec.709'
    """
    if space.name.startswith("linear "):
        return space
    name = _LINEAR_NAMES.get(space.name, f"linear {space.name}")
    return SPACES.get(name) or Space(name, space.rec2020_from_linear, (LINEAR, LINEAR, LINEAR))


def _plain(name: str) -> str:
    return "".join(c for c in name.casefold() if c.isalnum())
