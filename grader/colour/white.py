"""Whites: chromaticities, the Planckian locus, correlated colour temperature and Duv.

Chromaticities are CIE 1931 xy, relative XYZ has Y = 1, temperatures are in kelvin.  Duv is the signed
distance from the Planckian locus in CIE 1960 uv, + on the green side.
"""

from __future__ import annotations

from functools import cache, lru_cache
from typing import Any, Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from grader.colour import _tables
from grader.model import XY, Matrix

Array = NDArray[np.float64]

D65_XY: Final[XY] = _tables.WHITE_XY["Rec.2020"]
CCT_LIMITS_K: Final = (1000.0, 100_000.0)
"""Colour temperatures outside mean nothing: no lamp is cooler, and one mired covers the rest."""
DUV_LIMIT: Final = 0.05
"""Farther from the locus a colour temperature has no meaning (CIE 015:2018, section 9.5; Ohno 2014)."""

_WAVELENGTHS_M: Final[Array] = _tables.CMF_FIRST_M + _tables.CMF_STEP_M * np.arange(
    len(_tables.CMF), dtype=np.float64
)
_CMF: Final[Array] = np.array(_tables.CMF)
_SETTLED_MIRED: Final = 1e-9
_STEP_MIRED: Final = 0.02


def xyz_from_xy(xy: ArrayLike) -> Array:
    """Return the relative XYZ of Y = 1.

    Parameters
    ----------
    xy : (..., 2) array_like
        CIE 1931 chromaticity, y > 0.

    Returns
    -------
    (..., 3) float64

    Examples
    --------
    >>> xyz_from_xy((0.3127, 0.3290)).round(4)
    array([0.9505, 1.    , 1.0891])
    """
    x, y = np.moveaxis(np.asarray(xy, np.float64), -1, 0)
    return np.stack([x / y, np.ones_like(y), (1 - x - y) / y], axis=-1)


def xy_from_xyz(xyz: ArrayLike) -> Array:
    """Return the CIE 1931 chromaticity (..., 2) of (..., 3) XYZ."""
    values = np.asarray(xyz, np.float64)
    return np.asarray(values[..., :2] / values.sum(axis=-1, keepdims=True))


def uv1960_from_xy(xy: ArrayLike) -> Array:
    """Return CIE 1960 uv (..., 2) of CIE 1931 xy (..., 2).

    Examples
    --------
    >>> uv1960_from_xy((0.3127, 0.3290)).round(4)
    array([0.1978, 0.3122])
    """
    x, y = np.moveaxis(np.asarray(xy, np.float64), -1, 0)
    return np.asarray(np.stack([4 * x, 6 * y], axis=-1) / (12 * y - 2 * x + 3)[..., None])


def xy_from_uv1960(uv: ArrayLike) -> Array:
    """Return CIE 1931 xy (..., 2) of CIE 1960 uv (..., 2)."""
    u, v = np.moveaxis(np.asarray(uv, np.float64), -1, 0)
    return np.asarray(np.stack([3 * u, 2 * v], axis=-1) / (2 * u - 8 * v + 4)[..., None])


def linear_from_xy(xy: ArrayLike) -> Array:
    """Return the working-light RGB (..., 3) of a light at Y = 1; saturated lights have negative channels.

    Examples
    --------
    >>> linear_from_xy(D65_XY).round(6)
    array([1., 1., 1.])
    """
    return np.asarray(xyz_from_xy(xy) @ _rec2020_from_xyz().T)


def xy_from_linear(linear: ArrayLike) -> Array:
    """Return the CIE 1931 chromaticity (..., 2) of working-light RGB (..., 3)."""
    return xy_from_xyz(np.asarray(linear, np.float64) @ xyz_from_primaries("Rec.2020").T)


@cache
def xyz_from_primaries(name: str) -> Matrix:
    """Return the normalised primary matrix (3, 3) of a space in the tables (SMPTE RP 177-1993)."""
    primaries = xyz_from_xy(_tables.PRIMARIES_XY[name]).T
    return np.asarray(primaries * np.linalg.solve(primaries, xyz_from_xy(_tables.WHITE_XY[name])))


@cache
def _rec2020_from_xyz() -> Matrix:
    return np.asarray(np.linalg.inv(xyz_from_primaries("Rec.2020")), np.float64)


def mired_from_k(cct_k: Any) -> Any:
    """Return reciprocal megakelvin of kelvin (and kelvin of mired).

    Examples
    --------
    >>> round(mired_from_k(2856.0))
    350
    """
    return 1e6 / cct_k


def planckian_xy(cct_k: ArrayLike) -> Array:
    """Return the chromaticity of a black body.

    Planck's law with c2 = 1.4388e-2 m K (ITS-90), CIE 1931 2 degree observer, 360-830 nm in 5 nm steps.

    Parameters
    ----------
    cct_k : (...) array_like
        Temperature, above 0. [K]

    Returns
    -------
    (..., 2) float64
        CIE 1931 xy.

    Examples
    --------
    >>> planckian_xy(2856).round(3)
    array([0.448, 0.407])
    """
    kelvin = np.asarray(cct_k, np.float64)[..., None]
    radiance = _WAVELENGTHS_M**-5 / np.expm1(_tables.C2_M_K / (_WAVELENGTHS_M * kelvin))
    return xy_from_xyz(radiance @ _CMF)


def cct_duv_from_xy(xy: ArrayLike) -> tuple[float | None, float]:
    """Return correlated colour temperature and Duv.

    The nearest point of the Planckian locus in CIE 1960 uv: a table to start from, then Newton's method on
    the exact locus.

    Parameters
    ----------
    xy : (2,) array_like
        CIE 1931 chromaticity.

    Returns
    -------
    cct_k : float or None
        None where it would mean nothing: farther than 0.05 from the locus, or outside 1000-100000 K.
    duv : float
        Signed distance from the locus between those temperatures, + on the green side.

    References
    ----------
    .. [1] Ohno, "Practical Use and Calculation of CCT and Duv", LEUKOS 10(1), 2014,
       doi:10.1080/15502724.2014.839020.

    Examples
    --------
    >>> cct_k, duv = cct_duv_from_xy((0.3127, 0.3290))
    >>> round(cct_k), round(duv, 4)
    (6504, 0.0032)
    """
    x, y = np.asarray(xy, np.float64)
    return _nearest_on_locus(float(x), float(y))


@lru_cache(maxsize=1024)
def _nearest_on_locus(x: float, y: float) -> tuple[float | None, float]:
    target = uv1960_from_xy((x, y))
    table_mired, table_uv = _locus_table()
    first, last = float(table_mired[0]), float(table_mired[-1])
    mired = float(table_mired[np.argmin(((table_uv - target) ** 2).sum(axis=-1))])
    for _ in range(8):
        point, slope, bend = _locus(mired)
        away = target - point
        curvature = max(slope @ slope - away @ bend, 0.1 * (slope @ slope))
        before = mired
        mired = float(np.clip(mired + (away @ slope) / curvature, first, last))
        if abs(mired - before) < _SETTLED_MIRED:
            break
    point, slope, _ = _locus(mired)
    duv = float(np.copysign(np.hypot(*(target - point)), (target - point) @ _green_side(slope)))
    meaningful = abs(duv) <= DUV_LIMIT and first < mired < last
    return (float(mired_from_k(mired)) if meaningful else None), duv


def xy_from_cct_duv(cct_k: ArrayLike, duv: ArrayLike = 0.0) -> Array:
    """Return the chromaticity at a signed distance from a point of the Planckian locus.

    Parameters
    ----------
    cct_k : (...) array_like
        Correlated colour temperature. [K]
    duv : (...) array_like
        Distance in CIE 1960 uv, + on the green side.

    Returns
    -------
    (..., 2) float64
        CIE 1931 xy.

    Examples
    --------
    >>> xy_from_cct_duv(6503.6, 0.0032).round(3)
    array([0.313, 0.329])
    """
    point, slope, _ = _locus(mired_from_k(np.asarray(cct_k, np.float64)))
    return xy_from_uv1960(point + np.asarray(duv, np.float64)[..., None] * _green_side(slope))


def _green_side(slope: Array) -> Array:
    """Return the unit normal of the locus on its green side (+v; the slope points to warmer lights)."""
    normal = np.stack([-slope[..., 1], slope[..., 0]], axis=-1)
    return np.asarray(normal / np.linalg.norm(normal, axis=-1, keepdims=True))


def _locus(mired: ArrayLike) -> tuple[Array, Array, Array]:
    """Return the locus in uv and its first and second derivatives by mired."""
    at = np.asarray(mired, np.float64)[..., None] + _STEP_MIRED * np.array([-1.0, 0.0, 1.0])
    uv = uv1960_from_xy(planckian_xy(mired_from_k(at)))
    before, here, after = uv[..., 0, :], uv[..., 1, :], uv[..., 2, :]
    return here, (after - before) / (2 * _STEP_MIRED), (after - 2 * here + before) / _STEP_MIRED**2


@cache
def _locus_table() -> tuple[Array, Array]:
    low, high = (mired_from_k(limit) for limit in CCT_LIMITS_K[::-1])
    mired = np.arange(low, high + 0.5)
    return mired, uv1960_from_xy(planckian_xy(mired_from_k(mired)))
