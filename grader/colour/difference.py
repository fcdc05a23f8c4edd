"""Colour differences, the formula always named."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from grader.colour.opponent import cielab_from_xyz
from grader.colour.white import D65_XY, xyz_from_xy

_MID_GREY_Y = (66.0 / 116.0) ** 3
"""Luminance factor of L* = 50, 18.4 % (CIE 15:2004)."""


def delta_e_2000(lab1: ArrayLike, lab2: ArrayLike) -> NDArray[np.float64]:
    """Return the CIEDE2000 colour difference, kL = kC = kH = 1.

    Parameters
    ----------
    lab1, lab2 : (..., 3) array_like
        CIELAB L*, a*, b*.

    Returns
    -------
    (...) float64

    References
    ----------
    .. [1] ISO/CIE 11664-6:2014.
    .. [2] Sharma, Wu & Dalal, "The CIEDE2000 Color-Difference Formula: Implementation Notes", Color
       Research & Application 30(1), 2005, doi:10.1002/col.20070.

    Examples
    --------
    >>> float(delta_e_2000((50.0, 2.6772, -79.7751), (50.0, 0.0, -82.7485)).round(4))
    2.0425
    """
    l1, a1, b1 = np.moveaxis(np.asarray(lab1, np.float64), -1, 0)
    l2, a2, b2 = np.moveaxis(np.asarray(lab2, np.float64), -1, 0)
    chroma_mean = (np.hypot(a1, b1) + np.hypot(a2, b2)) / 2
    stretch = 1.5 - 0.5 * _seventh(chroma_mean)
    a1, a2 = a1 * stretch, a2 * stretch
    c1, c2 = np.hypot(a1, b1), np.hypot(a2, b2)
    h1, h2 = (np.degrees(np.arctan2(b, a)) % 360.0 for a, b in ((a1, b1), (a2, b2)))
    turn = np.where(c1 * c2 == 0.0, 0.0, (h2 - h1 + 180.0) % 360.0 - 180.0)
    hue_step = 2 * np.sqrt(c1 * c2) * np.sin(np.radians(turn / 2))
    light, chroma, hue = (l1 + l2) / 2, (c1 + c2) / 2, _mean_hue(h1, h2, c1 * c2 == 0.0)
    s_l = 1 + 0.015 * (light - 50) ** 2 / np.sqrt(20 + (light - 50) ** 2)
    s_c, s_h = 1 + 0.045 * chroma, 1 + 0.015 * chroma * _hue_weight(hue)
    rotation = -np.sin(np.radians(60 * np.exp(-(((hue - 275) / 25) ** 2)))) * 2 * _seventh(chroma)
    dl, dc, dh = (l2 - l1) / s_l, (c2 - c1) / s_c, hue_step / s_h
    return np.asarray(np.sqrt(np.maximum(dl**2 + dc**2 + dh**2 + rotation * dc * dh, 0.0)))


def _seventh(chroma: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray(np.sqrt(chroma**7 / (chroma**7 + 25.0**7)))


def _mean_hue(
    h1: NDArray[np.float64], h2: NDArray[np.float64], grey: NDArray[np.bool_]
) -> NDArray[np.float64]:
    """Return the mean hue angle as note 3 of Sharma et al. has it."""
    total = h1 + h2
    folded = np.where(np.abs(h1 - h2) <= 180, total, np.where(total < 360, total + 360, total - 360))
    return np.asarray(np.where(grey, total, folded / 2))


def _hue_weight(hue: NDArray[np.float64]) -> NDArray[np.float64]:
    cosines = ((-0.17, 1, -30.0), (0.24, 2, 0.0), (0.32, 3, 6.0), (-0.20, 4, -63.0))
    return np.asarray(1 + sum(k * np.cos(np.radians(n * hue + phase)) for k, n, phase in cosines))


def grey_delta_e_2000(xy: ArrayLike, without_xy: ArrayLike = D65_XY) -> float:
    """Return Delta E 2000 between a mid grey (L* = 50) under a cast and the same grey without.

    Parameters
    ----------
    xy : (2,) array_like
        Where the light puts a neutral, CIE 1931 xy; neutral is D65.
    without_xy : (2,) array_like
        Where it lies without the cast.

    Examples
    --------
    >>> grey_delta_e_2000(D65_XY)
    0.0
    """
    under, without = (cielab_from_xyz(_MID_GREY_Y * xyz_from_xy(light)) for light in (xy, without_xy))
    return float(delta_e_2000(under, without))
