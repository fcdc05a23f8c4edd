"""Opponent colour spaces: Oklab, CIELAB, CIECAM16-UCS, and casts in their planes.

A cast is (yellow_blue, green_magenta): the (b, a) of a light's colour at Y = 1, neutral (D65) at (0, 0),
+ yellow and + magenta.  Y = 1 fixes the exposure, so the values are not divided by L.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from grader.colour.ciecam16 import ciecam16ucs_from_xyz, xyz_from_ciecam16ucs
from grader.colour.white import D65_XY, xy_from_xyz, xyz_from_xy
from grader.errors import PresetError
from grader.model import XY, Matrix

__all__ = [
    "cast_from_xy",
    "ciecam16ucs_from_xyz",
    "cielab_from_xyz",
    "oklab_from_xyz",
    "xy_from_cast",
    "xyz_from_ciecam16ucs",
    "xyz_from_cielab",
    "xyz_from_oklab",
]

Array = NDArray[np.float64]

_D65_XYZ: Final[Array] = xyz_from_xy(D65_XY)

# Ottosson, "A perceptual color space for image processing", 2020, https://bottosson.github.io/posts/oklab/
LMS_FROM_XYZ_PUBLISHED: Final[Matrix] = np.array(
    [
        [0.8189330101, 0.3618667424, -0.1288597137],
        [0.0329845436, 0.9293118715, 0.0361456387],
        [0.0482003018, 0.2643662691, 0.6338517070],
    ]
)
OKLAB_FROM_LMS: Final[Matrix] = np.array(
    [
        [0.2104542553, 0.7936177850, -0.0040720468],
        [1.9779984951, -2.4285922050, 0.4505937099],
        [0.0259040371, 0.7827717662, -0.8086757660],
    ]
)
LMS_FROM_XYZ: Final[Matrix] = LMS_FROM_XYZ_PUBLISHED / (LMS_FROM_XYZ_PUBLISHED @ _D65_XYZ)[:, None]
"""Rows scaled (by less than 5e-4) so that D65 as (0.3127, 0.3290) is neutral: with the published digits its
b would be -1.2e-4, a cast where there is none."""
_XYZ_FROM_LMS: Final[Matrix] = np.asarray(np.linalg.inv(LMS_FROM_XYZ), np.float64)
_LMS_FROM_OKLAB: Final[Matrix] = np.asarray(np.linalg.inv(OKLAB_FROM_LMS), np.float64)


def oklab_from_xyz(xyz: ArrayLike) -> Array:
    """Return Oklab (L, a, b) of relative XYZ (D65, white at Y = 1).

    Parameters
    ----------
    xyz : (..., 3) array_like

    Returns
    -------
    (..., 3) float64

    References
    ----------
    .. [1] Ottosson, "A perceptual color space for image processing", 2020,
       https://bottosson.github.io/posts/oklab/

    Examples
    --------
    >>> oklab_from_xyz((0.0, 1.0, 0.0)).round(3)
    array([ 0.922, -0.671,  0.263])
    """
    lms = np.asarray(xyz, np.float64) @ LMS_FROM_XYZ.T
    return np.asarray(np.cbrt(lms) @ OKLAB_FROM_LMS.T)


def xyz_from_oklab(oklab: ArrayLike) -> Array:
    """Return relative XYZ (..., 3) of Oklab (..., 3): the inverse of `oklab_from_xyz`."""
    roots = np.asarray(oklab, np.float64) @ _LMS_FROM_OKLAB.T
    return np.asarray(roots**3 @ _XYZ_FROM_LMS.T)


def cielab_from_xyz(xyz: ArrayLike) -> Array:
    """Return CIELAB (L*, a*, b*) of relative XYZ, white D65 at Y = 1 (CIE 15:2004).

    Examples
    --------
    >>> cielab_from_xyz((0.0950, 0.1, 0.1089)).round(1)
    array([37.8, -0. ,  0. ])
    """
    ratio = np.asarray(xyz, np.float64) / _D65_XYZ
    f = np.where(ratio > (6 / 29) ** 3, np.cbrt(ratio), ratio * (841 / 108) + 4 / 29)
    fx, fy, fz = np.moveaxis(f, -1, 0)
    return np.stack([116 * fy - 16, 500 * (fx - fy), 200 * (fy - fz)], axis=-1)


def xyz_from_cielab(cielab: ArrayLike) -> Array:
    """Return relative XYZ (..., 3) of CIELAB (..., 3): the inverse of `cielab_from_xyz`."""
    light, a, b = np.moveaxis(np.asarray(cielab, np.float64), -1, 0)
    fy = (light + 16) / 116
    f = np.stack([fy + a / 500, fy, fy - b / 200], axis=-1)
    return np.asarray(np.where(f > 6 / 29, f**3, (f - 4 / 29) * (108 / 841)) * _D65_XYZ)


_Conversion = Callable[[ArrayLike], Array]
_SPACES: Final[dict[str, tuple[_Conversion, _Conversion, float]]] = {
    "oklab": (oklab_from_xyz, xyz_from_oklab, 1.0),
    "ciecam16": (ciecam16ucs_from_xyz, xyz_from_ciecam16ucs, 100.0),
    "cielab": (cielab_from_xyz, xyz_from_cielab, 100.0),
}
"""From XYZ, to XYZ, and the lightness of white."""


def cast_from_xy(xy: ArrayLike, opponent: str = "oklab") -> tuple[float, float]:
    """Return where a light puts a neutral of Y = 1 in the opponent plane.

    Parameters
    ----------
    xy : (2,) array_like
        The light, CIE 1931 xy; D65 is neutral.
    opponent : {"oklab", "ciecam16", "cielab"}

    Returns
    -------
    yellow_blue, green_magenta : float
        (b, a), (b', a') or (b*, a*); + is yellow and magenta.

    Raises
    ------
    PresetError
        The opponent space is unknown.

    Examples
    --------
    >>> yellow_blue, green_magenta = cast_from_xy((0.4476, 0.4075))
    >>> round(yellow_blue, 2), round(green_magenta, 2)
    (0.15, 0.07)
    """
    from_xyz, _, _ = _space(opponent)
    _, a, b = from_xyz(xyz_from_xy(xy))
    return float(b), float(a)


def xy_from_cast(yellow_blue: float, green_magenta: float, opponent: str = "oklab") -> XY:
    """Return the light that puts a neutral there: the inverse of `cast_from_xy`.

    Newton's method on the lightness that makes Y = 1; the rest is closed form.

    Raises
    ------
    PresetError
        The opponent space is unknown, or no light gives this cast.

    Examples
    --------
    >>> x, y = xy_from_cast(*cast_from_xy((0.4476, 0.4075)))
    >>> round(x, 6), round(y, 6)
    (0.4476, 0.4075)
    """
    _, to_xyz, lightness = _space(opponent)
    step = 1e-6 * lightness
    with np.errstate(all="ignore"):
        for _ in range(50):
            at = np.array([lightness - step, lightness, lightness + step])
            xyz = to_xyz(np.stack([at, np.full(3, green_magenta), np.full(3, yellow_blue)], axis=-1))
            below, here, above = xyz[:, 1]
            if abs(here - 1.0) < 1e-14:
                break
            lightness += float(
                np.clip((1.0 - here) * 2 * step / (above - below), -0.3 * lightness, 0.3 * lightness)
            )
    if not abs(here - 1.0) < 1e-9 or not np.isfinite(xyz).all() or xyz[1].sum() <= 0:
        raise PresetError(
            f"no light gives the cast yellow-blue {yellow_blue:g}, green-magenta {green_magenta:g}"
        )
    x, y = xy_from_xyz(xyz[1])
    return float(x), float(y)


def _space(opponent: str) -> tuple[_Conversion, _Conversion, float]:
    if opponent not in _SPACES:
        raise PresetError(
            f"there is no opponent space called {opponent!r}", hint=f"choose one of {', '.join(_SPACES)}"
        )
    return _SPACES[opponent]
