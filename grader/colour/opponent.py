"""Opponent colour spaces: Oklab, CIELAB, CIECAM16-UCS, and casts in their planes.

A cast is (yellow_blue, green_magenta): the (b, a) of a light's colour at Y = 1, neutral (D65) at (0, 0),
+ yellow and + magenta.  Y = 1 fixes the exposure, so the values are not divided by L.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from grader.colour.adaptation import TRANSFORMS
from grader.colour.white import D65_XY, xy_from_xyz, xyz_from_xy
from grader.errors import PresetError
from grader.model import XY, Matrix

Array = NDArray[np.float64]

_D65_XYZ: Final[Array] = xyz_from_xy(D65_XY)

# Ottosson, "A perceptual color space for image processing", 2020, https://bottosson.github.io/posts/oklab/
_LMS_FROM_XYZ_PUBLISHED: Final[Matrix] = np.array(
    [
        [0.8189330101, 0.3618667424, -0.1288597137],
        [0.0329845436, 0.9293118715, 0.0361456387],
        [0.0482003018, 0.2643662691, 0.6338517070],
    ]
)
_OKLAB_FROM_LMS: Final[Matrix] = np.array(
    [
        [0.2104542553, 0.7936177850, -0.0040720468],
        [1.9779984951, -2.4285922050, 0.4505937099],
        [0.0259040371, 0.7827717662, -0.8086757660],
    ]
)
_LMS_FROM_XYZ: Final[Matrix] = _LMS_FROM_XYZ_PUBLISHED / (_LMS_FROM_XYZ_PUBLISHED @ _D65_XYZ)[:, None]
"""Rows scaled (by less than 5e-4) so that D65 as (0.3127, 0.3290) is neutral: with the published digits its
b would be -1.2e-4, a cast where there is none."""
_XYZ_FROM_LMS: Final[Matrix] = np.asarray(np.linalg.inv(_LMS_FROM_XYZ), np.float64)
_LMS_FROM_OKLAB: Final[Matrix] = np.asarray(np.linalg.inv(_OKLAB_FROM_LMS), np.float64)

_CIECAM16_ADAPTING_CD_M2: Final = 64 / np.pi * 0.2
_CIECAM16_BACKGROUND_Y: Final = 20.0
_CIECAM16_SURROUND_C: Final = 0.69
"""Average surround: c = 0.69, Nc = 1, F = 1."""


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
    lms = np.asarray(xyz, np.float64) @ _LMS_FROM_XYZ.T
    return np.asarray(np.cbrt(lms) @ _OKLAB_FROM_LMS.T)


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


def ciecam16ucs_from_xyz(xyz: ArrayLike) -> Array:
    """Return CIECAM16-UCS (J', a', b') of relative XYZ (D65, white at Y = 1).

    Average surround, adapting luminance 64 / pi * 0.2 cd/m2, background Y = 20, illuminant discounted
    (D = 1): only full adaptation leaves the reference white itself without a cast.

    Parameters
    ----------
    xyz : (..., 3) array_like

    Returns
    -------
    (..., 3) float64

    References
    ----------
    .. [1] Li et al., "Comprehensive color solutions: CAM16, CAT16, and CAM16-UCS", Color Research &
       Application 42(6), 2017, doi:10.1002/col.22131.

    Examples
    --------
    >>> abs(ciecam16ucs_from_xyz(xyz_from_xy(D65_XY))).round(3)
    array([100.,   0.,   0.])
    """
    compressed = _ciecam16_compressed(np.asarray(xyz, np.float64))
    white = _ciecam16_compressed(_D65_XYZ)
    r, g, b = np.moveaxis(compressed, -1, 0)
    n = _CIECAM16_BACKGROUND_Y / 100
    n_bb = 0.725 * (1 / n) ** 0.2
    red_green, yellow_blue = r - 12 * g / 11 + b / 11, (r + g - 2 * b) / 9
    hue = np.arctan2(yellow_blue, red_green)
    achromatic = (compressed @ (2.0, 1.0, 0.05) - 0.305) / (white @ (2.0, 1.0, 0.05) - 0.305)
    lightness = 100 * np.maximum(achromatic, 0.0) ** (_CIECAM16_SURROUND_C * (1.48 + np.sqrt(n)))
    eccentricity = (np.cos(hue + 2) + 3.8) / 4
    strength = 50000 / 13 * n_bb * eccentricity * np.hypot(red_green, yellow_blue)
    t = strength / (compressed @ (1.0, 1.0, 1.05) + 0.305)
    chroma = np.maximum(t, 0.0) ** 0.9 * np.sqrt(lightness / 100) * (1.64 - 0.29**n) ** 0.73
    colourfulness = np.log1p(0.0228 * chroma * _ciecam16_level() ** 0.25) / 0.0228
    return np.stack(
        [
            1.7 * lightness / (1 + 0.007 * lightness),
            colourfulness * np.cos(hue),
            colourfulness * np.sin(hue),
        ],
        axis=-1,
    )


def _ciecam16_level() -> float:
    """Return the luminance level adaptation factor F_L."""
    five = 5 * _CIECAM16_ADAPTING_CD_M2
    k4 = (1 / (five + 1)) ** 4
    return float(0.2 * k4 * five + 0.1 * (1 - k4) ** 2 * np.cbrt(five))


def _ciecam16_compressed(xyz: Array) -> Array:
    """Return the adapted responses after compression."""
    cone = TRANSFORMS["cat16"]
    adapted = 100 * (xyz @ cone.T) / (cone @ _D65_XYZ)
    power = (_ciecam16_level() * np.abs(adapted) / 100) ** 0.42
    return np.asarray(np.sign(adapted) * 400 * power / (power + 27.13) + 0.1)


_FROM_XYZ: Final[dict[str, Callable[[ArrayLike], Array]]] = {
    "oklab": oklab_from_xyz,
    "ciecam16": ciecam16ucs_from_xyz,
    "cielab": cielab_from_xyz,
}


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
    _, a, b = _from_xyz(opponent)(xyz_from_xy(xy))
    return float(b), float(a)


def xy_from_cast(yellow_blue: float, green_magenta: float, opponent: str = "oklab") -> XY:
    """Return the light that puts a neutral there: the inverse of `cast_from_xy`.

    Newton's method on X and Z at Y = 1; good to 1e-10 for any light that can exist.

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
    from_xyz = _from_xyz(opponent)
    target = np.array([green_magenta, yellow_blue])
    xyz = _D65_XYZ.copy()
    for _ in range(60):
        around = from_xyz(xyz + _NEWTON_STEPS)[:, 1:]
        miss = target - around[0]
        if np.abs(miss).max() <= 1e-13 * max(1.0, float(np.abs(target).max())):
            break
        jacobian = (around[1::2] - around[2::2]).T / (2 * _NEWTON_STEP)
        step = np.linalg.solve(jacobian, miss)
        xyz[[0, 2]] += step * min(1.0, 0.5 / float(np.abs(step).max()))
    if not np.allclose(around[0], target, rtol=0, atol=1e-6 * max(1.0, float(np.abs(target).max()))):
        raise PresetError(
            f"no light gives the cast yellow-blue {yellow_blue:g}, green-magenta {green_magenta:g}"
        )
    x, y = xy_from_xyz(xyz)
    return float(x), float(y)


_NEWTON_STEP: Final = 1e-5
_NEWTON_STEPS: Final[Array] = _NEWTON_STEP * np.array(
    [[0, 0, 0], [1, 0, 0], [-1, 0, 0], [0, 0, 1], [0, 0, -1]], dtype=np.float64
)


def _from_xyz(opponent: str) -> Callable[[ArrayLike], Array]:
    if opponent not in _FROM_XYZ:
        raise PresetError(
            f"there is no opponent space called {opponent!r}", hint=f"choose one of {', '.join(_FROM_XYZ)}"
        )
    return _FROM_XYZ[opponent]
