"""The log-opponent plane, where a change of light is a shift, and the lights that are thought possible.

A colour with cone-like responses L, M, S (Oklab's first matrix) stands at ``(a, b) = AB @ ln(LMS)``, a third
of Oklab's two opponent rows on the logarithm instead of the cube root [1]_.  Both rows sum to nearly nothing, so
exposure drops out, and a change of light that multiplies L, M and S moves every colour by the same step.

References
----------
.. [1] B. Ottosson, "A perceptual color space for image processing", 2020, bottosson.github.io/posts/oklab.
"""

from __future__ import annotations

from functools import cache
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.colour import white
from grader.colour.opponent import LMS_FROM_XYZ, OKLAB_FROM_LMS
from grader.colour.spaces import XYZ_FROM_REC2020

Array = NDArray[np.float64]

GRID: Final = "log-opponent-1"
"""Name of the grid and of its candidates, as it stands in the log."""
STEP: Final = 0.01
"""Width of a bin along either axis; about 1.5 degrees of recovery angle."""
A_START: Final = -0.20
A_BINS: Final = 50
B_START: Final = -0.24
B_BINS: Final = 64

LMS_FROM_REC2020: Final[Array] = LMS_FROM_XYZ @ XYZ_FROM_REC2020
AB_FROM_LOG_LMS: Final[Array] = OKLAB_FROM_LMS[1:] / 3.0
_LOG_LMS_FROM_AB: Final = np.linalg.pinv(AB_FROM_LOG_LMS)
_REC2020_FROM_LMS: Final = np.linalg.inv(LMS_FROM_REC2020)

_MIRED_RANGE: Final = (70.0, 640.0)
"""Hottest blue sky shade to candle light and below. [mired] (common practice)"""
_DUV_LIMIT: Final = 0.045
"""About the widest spread of lamps that are still called white, with room to spare. (judgement)"""


def ab_from_linear(linear: Array) -> Array:
    """Return the place of working-light colours in the plane.

    Parameters
    ----------
    linear : (..., 3) float64
        Linear Rec.2020, any scale.

    Returns
    -------
    (..., 2) float64
        (a, b): a is + toward magenta, b is + toward yellow. NaN where a cone response is not positive.

    Examples
    --------
    >>> ab_from_linear(np.ones(3)).round(3) + 0.0
    array([0., 0.])
    """
    lms = np.asarray(linear, np.float64) @ LMS_FROM_REC2020.T
    return np.asarray(np.log(np.where(lms > 0, lms, np.nan)) @ AB_FROM_LOG_LMS.T)


def luminance(linear: Array) -> Array:
    """Return the luminance Y (...) of working-light colours (..., 3)."""
    return np.asarray(linear @ XYZ_FROM_REC2020[1])


def linear_from_ab(ab: Array) -> Array:
    """Return the colour of luminance 1 at a place in the plane.

    Parameters
    ----------
    ab : (..., 2) float64

    Returns
    -------
    (..., 3) float64
        Linear Rec.2020, Y = 1; may be negative where the place lies outside the Rec.2020 primaries.
    """
    lms = np.exp(np.asarray(ab, np.float64) @ _LOG_LMS_FROM_AB.T)
    linear = lms @ _REC2020_FROM_LMS.T
    return np.asarray(linear / luminance(linear)[..., None])


def ab_from_xy(xy: Array) -> Array:
    """Return the place of a chromaticity in the plane.

    Parameters
    ----------
    xy : (..., 2) float64
        CIE 1931 chromaticity.

    Returns
    -------
    (..., 2) float64
    """
    return ab_from_linear(white.linear_from_xy(xy))


def mired_duv_from_xy(xy: Array) -> tuple[Array, Array]:
    """Return reciprocal temperature and distance from the Planckian locus for many chromaticities at once.

    Nearest point of a finely sampled locus in CIE 1960 uv, refined along the tangent (good to 0.1 mired).

    Parameters
    ----------
    xy : (..., 2) float64

    Returns
    -------
    mired, duv : (...) float64
        ``duv`` is + on the green side. [mired], [CIE 1960 uv]
    """
    mired, locus = _locus()
    uv = np.asarray(white.uv1960_from_xy(np.asarray(xy, np.float64)))
    flat = uv.reshape(-1, 2)
    nearest = np.array([np.argmin(((locus - point) ** 2).sum(axis=1)) for point in flat])
    nearest = np.clip(nearest, 1, len(mired) - 2)
    along = locus[nearest + 1] - locus[nearest - 1]
    length = np.hypot(along[:, 0], along[:, 1])
    along /= length[:, None]
    off = flat - locus[nearest]
    step = (off * along).sum(axis=1)
    found = mired[nearest] + step * (mired[nearest + 1] - mired[nearest - 1]) / length
    duv = along[:, 0] * off[:, 1] - along[:, 1] * off[:, 0]
    return found.reshape(uv.shape[:-1]), duv.reshape(uv.shape[:-1])


@cache
def _locus() -> tuple[Array, Array]:
    mired = np.arange(20.0, 1000.0, 1.0)
    return mired, np.asarray(white.uv1960_from_xy(white.planckian_xy(1e6 / mired)))


def grid_places() -> Array:
    """Return the centres of all bins of the grid.

    Returns
    -------
    (A_BINS * B_BINS, 2) float64
        b varies fastest.
    """
    a = A_START + STEP * (np.arange(A_BINS) + 0.5)
    b = B_START + STEP * (np.arange(B_BINS) + 0.5)
    return np.stack(np.meshgrid(a, b, indexing="ij"), axis=-1).reshape(-1, 2)


@cache
def candidate_bins() -> NDArray[np.intp]:
    """Return which bins of the grid are lights that are thought possible.

    Between the hottest sky and candle light, not far from the locus, and inside the Rec.2020 primaries.

    Returns
    -------
    (C,) intp
        Indices into `grid_places`.
    """
    linear = linear_from_ab(grid_places())
    mired, duv = mired_duv_from_xy(white.xy_from_linear(linear))
    return np.flatnonzero(is_plausible(mired, duv) & (linear.min(axis=1) > 0))


def is_plausible(mired: Array, duv: Array) -> NDArray[np.bool_]:
    """Return where lamps and daylight are found at all, [mired] and [CIE 1960 uv]."""
    return (mired > _MIRED_RANGE[0]) & (mired < _MIRED_RANGE[1]) & (np.abs(duv) < _DUV_LIMIT)
