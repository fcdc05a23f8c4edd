"""Transfer curves: encoded values to linear light and back."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from grader.model import Curve

Array = NDArray[np.float64]


def decode(curve: Curve, encoded: ArrayLike) -> Array:
    """Return linear light of encoded values.

    Parameters
    ----------
    curve : Curve
        The transfer curve.
    encoded : array_like
        Values, 1 = white.  Values above 1 are kept (a sampled curve goes on with its last slope), negative
        ones are mirrored.

    Returns
    -------
    float64 array of the same shape

    References
    ----------
    .. [1] ICC.1:2022, 10.18 (parametric curves), 10.6 (sampled curves).

    Examples
    --------
    >>> from grader.colour.spaces import SRGB_CURVE
    >>> decode(SRGB_CURVE, [-0.5, 0.5, 1.0]).round(4)
    array([-0.214,  0.214,  1.   ])
    """
    values = np.asarray(encoded, np.float64)
    size = np.abs(values)
    if curve.samples is not None:
        return np.copysign(_interpolate(size, _steps(curve.samples), curve.samples), values)
    power = np.maximum(curve.a * size + curve.b, 0.0) ** curve.g + curve.e
    return np.copysign(np.where(size >= curve.d, power, curve.c * size + curve.f), values)


def encode(curve: Curve, linear: ArrayLike) -> Array:
    """Return encoded values of linear light: the inverse of `decode`.

    Where a sampled curve is flat or falls, the lowest encoded value is taken.

    Examples
    --------
    >>> from grader.colour.spaces import SRGB_CURVE
    >>> encode(SRGB_CURVE, [0.0, 0.18, 1.0]).round(4)
    array([0.    , 0.4614, 1.    ])
    """
    values = np.asarray(linear, np.float64)
    size = np.abs(values)
    if curve.samples is not None:
        rising, first = np.unique(np.maximum.accumulate(curve.samples), return_index=True)
        return np.copysign(_interpolate(size, rising, _steps(curve.samples)[first]), values)
    power = (np.maximum(size - curve.e, 0.0) ** (1.0 / curve.g) - curve.b) / curve.a
    if curve.d <= 0.0:
        return np.copysign(power, values)
    threshold = max(curve.a * curve.d + curve.b, 0.0) ** curve.g + curve.e
    straight = (size - curve.f) / curve.c if curve.c else np.zeros_like(size)
    return np.copysign(np.where(size >= threshold, power, straight), values)


def decode_table(curve: Curve, levels: int) -> NDArray[np.float32]:
    """Return the linear light of every code value 0 .. levels - 1, the last being white.

    Examples
    --------
    >>> decode_table(Curve(g=2.0), 3)
    array([0.  , 0.25, 1.  ], dtype=float32)
    """
    return decode(curve, _steps(np.empty(levels))).astype(np.float32)


def _steps(samples: Array) -> Array:
    return np.linspace(0.0, 1.0, len(samples))


def _interpolate(at: Array, xs: Array, ys: Array) -> Array:
    """Interpolate linearly; beyond the last sample go on with the last slope."""
    inside = np.interp(at, xs, ys)
    if len(xs) < 2:
        return inside
    slope = (ys[-1] - ys[-2]) / (xs[-1] - xs[-2])
    return np.asarray(inside + slope * np.maximum(at - xs[-1], 0.0))
