"""CIECAM16-UCS for one viewing condition: average surround, a dim desk, D65 fully adapted to.

Adapting luminance 64 / pi * 0.2 cd/m2, background Y = 20.  The illuminant is discounted (D = 1): only full
adaptation leaves the reference white itself without a cast.

References
----------
.. [1] Li et al., "Comprehensive color solutions: CAM16, CAT16, and CAM16-UCS", Color Research &
   Application 42(6), 2017, doi:10.1002/col.22131.
"""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from grader.colour.adaptation import TRANSFORMS
from grader.colour.white import D65_XY, xyz_from_xy
from grader.model import Matrix

Array = NDArray[np.float64]

_N: Final = 20.0 / 100.0
_C: Final = 0.69
"""Average surround: c = 0.69, Nc = 1."""
_Z: Final = 1.48 + _N**0.5
_FIVE_L_A: Final = 5 * 64 / np.pi * 0.2
_K: Final = 1 / (_FIVE_L_A + 1)
_F_L: Final = 0.2 * _K**4 * _FIVE_L_A + 0.1 * (1 - _K**4) ** 2 * _FIVE_L_A ** (1 / 3)
_HUE_STRENGTH: Final = 50000 / 13 * 0.725 * (1 / _N) ** 0.2
_CHROMA_SCALE: Final = (1.64 - 0.29**_N) ** 0.73

_WHITE_XYZ: Final[Array] = xyz_from_xy(D65_XY)
_ADAPTED_FROM_XYZ: Final[Matrix] = 100 * TRANSFORMS["cat16"] / (TRANSFORMS["cat16"] @ _WHITE_XYZ)[:, None]
_XYZ_FROM_ADAPTED: Final[Matrix] = np.asarray(np.linalg.inv(_ADAPTED_FROM_XYZ), np.float64)
_WHITE_POWER: Final = _F_L**0.42
_WHITE_ACHROMATIC: Final = 3.05 * 400 * _WHITE_POWER / (_WHITE_POWER + 27.13)


def ciecam16ucs_from_xyz(xyz: ArrayLike) -> Array:
    """Return CIECAM16-UCS (J', a', b') of relative XYZ (D65, white at Y = 1).

    Parameters
    ----------
    xyz : (..., 3) array_like

    Returns
    -------
    (..., 3) float64

    Examples
    --------
    >>> abs(ciecam16ucs_from_xyz(xyz_from_xy(D65_XY))).round(3)
    array([100.,   0.,   0.])
    """
    adapted = np.asarray(xyz, np.float64) @ _ADAPTED_FROM_XYZ.T
    power = (_F_L * np.abs(adapted) / 100) ** 0.42
    r, g, b = np.moveaxis(np.sign(adapted) * 400 * power / (power + 27.13), -1, 0)
    red_green, yellow_blue = r - 12 * g / 11 + b / 11, (r + g - 2 * b) / 9
    hue = np.arctan2(yellow_blue, red_green)
    achromatic = np.maximum((2 * r + g + b / 20) / _WHITE_ACHROMATIC, 0.0)
    lightness = 100 * achromatic ** (_C * _Z)
    strength = _HUE_STRENGTH * _eccentricity(hue) * np.hypot(red_green, yellow_blue)
    t = np.maximum(strength / (r + g + 1.05 * b + 0.305), 0.0)
    colourfulness = t**0.9 * np.sqrt(lightness / 100) * _CHROMA_SCALE * _F_L**0.25
    radius = np.log1p(0.0228 * colourfulness) / 0.0228
    j = 1.7 * lightness / (1 + 0.007 * lightness)
    return np.stack([j, radius * np.cos(hue), radius * np.sin(hue)], axis=-1)


def xyz_from_ciecam16ucs(ucs: ArrayLike) -> Array:
    """Return relative XYZ (..., 3) of CIECAM16-UCS (..., 3), J' above 0: the inverse.

    Examples
    --------
    >>> xyz_from_ciecam16ucs((100.0, 0.0, 0.0)).round(4)
    array([0.9505, 1.    , 1.0891])
    """
    j, a, b = np.moveaxis(np.asarray(ucs, np.float64), -1, 0)
    hue = np.arctan2(b, a)
    lightness = j / (1.7 - 0.007 * j)
    chroma = np.expm1(0.0228 * np.hypot(a, b)) / 0.0228 / _F_L**0.25
    t = (chroma / (np.sqrt(lightness / 100) * _CHROMA_SCALE)) ** (1 / 0.9)
    achromatic = _WHITE_ACHROMATIC * (lightness / 100) ** (1 / (_C * _Z))
    cos, sin = np.cos(hue), np.sin(hue)
    radius = 23 * (achromatic + 0.305) * t
    radius = radius / (23 * _HUE_STRENGTH * _eccentricity(hue) + t * (11 * cos + 108 * sin))
    opponent = np.stack([achromatic, radius * cos, radius * sin], axis=-1)
    compressed = opponent @ np.array([[460, 451, 288], [460, -891, -261], [460, -220, -6300]]).T / 1403
    size = np.abs(compressed)
    power = 27.13 * size / (400 - size)
    adapted = np.sign(compressed) * 100 / _F_L * power ** (1 / 0.42)
    return np.asarray(adapted @ _XYZ_FROM_ADAPTED.T)


def _eccentricity(hue: Array) -> Array:
    return np.asarray((np.cos(hue + 2) + 3.8) / 4)
