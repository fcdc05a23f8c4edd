"""Drift: how fast the light moves along a stretch, robustly, with an interval."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast import plane, shoot_course, vote
from grader.colour.white import xy_from_linear
from grader.model import Cast

Array = NDArray[np.float64]

_FEWEST: Final = 8
_MOST: Final = 600
"""Points beyond which neighbours are put together: Theil-Sen looks at all pairs."""
_CONFIDENCE: Final = 0.95


@dataclass(frozen=True, slots=True)
class Slope:
    """Change per hour, and the 95 % interval of it."""

    per_hour: float
    low: float
    high: float


def slope_of(times_s: Array, values: Array) -> Slope | None:
    """Return the Theil-Sen slope of a series and its interval.

    The median of the slopes of all pairs; up to 29 % of the values may be anything.  The interval is
    widened where neighbours err together (the same scene for a while), by the first autocorrelation of the residuals.

    Parameters
    ----------
    times_s : (n,) float64
        Ascending. [s]
    values : (n,) float64
        In any unit.

    Returns
    -------
    Slope or None
        In that unit per hour; None for fewer than eight frames, or where the times are unknown or all the same.

    References
    ----------
    .. [1] P. K. Sen, "Estimates of the regression coefficient based on Kendall's tau", JASA 63(324), 1968,
       doi:10.1080/01621459.1968.10480934.
    .. [2] G. V. Bayley, J. M. Hammersley, "The effective number of independent observations in an
       autocorrelated time series", JRSS Supplement 8(2), 1946, doi:10.2307/2983560.

    Examples
    --------
    >>> slope_of(np.arange(0.0, 4800.0, 600.0), np.arange(200.0, 208.0)).per_hour
    6.0
    """
    if len(values) < _FEWEST or not np.isfinite(times_s).all() or np.ptp(times_s) <= 0.0:
        return None
    from scipy.stats import theilslopes  # noqa: PLC0415 - heavy, and only shoots with a stretch need it

    hours, sample = _thinned((times_s - times_s[0]) / 3600.0, values)
    if np.ptp(hours) <= 0.0:
        return None
    found = theilslopes(sample, hours, alpha=_CONFIDENCE)
    slope, low, high = (float(x) for x in (found.slope, found.low_slope, found.high_slope))
    if not all(map(math.isfinite, (slope, low, high))):
        return None
    wider = _widening(sample - slope * hours)
    return Slope(slope, slope - (slope - low) * wider, slope + (high - slope) * wider)


def light_series(casts: Sequence[Cast]) -> tuple[Array, Array, Array]:
    """Return each frame's light as its own evidence has it, without the prior.

    The prior draws lights toward the usual ones and would flatten any drift.  Squared likelihoods weigh the
    best candidates most, so that the mean follows the light in full. (tuned on simulated shoots)

    Parameters
    ----------
    casts : sequence of Cast
        Measured ones.

    Returns
    -------
    places : (n, 2) float64
        In the log-opponent plane.
    mired, duv : (n,) float64
    """
    weights = shoot_course.frame_maps(casts).astype(np.float64) ** 2
    places = weights @ vote.candidates() / weights.sum(axis=1, keepdims=True)
    mired, duv = plane.mired_duv_from_xy(xy_from_linear(plane.linear_from_ab(places)))
    return places, mired, duv


def largest_jump_deg(places: Array) -> float | None:
    """Return the largest step of the light, medians of five frames before against five after.

    Stretches of fewer than ten frames make do with fewer.

    Parameters
    ----------
    places : (n, 2) float64
        In the log-opponent plane, in capture order.

    Returns
    -------
    float or None
        What the medians leave of the frames' own scatter is in it. None for fewer than two frames. [degrees]
    """
    reach = min(5, len(places) // 2)
    if not reach:
        return None
    steps = [
        shoot_course.degrees_apart(
            np.median(places[at - reach : at], axis=0), np.median(places[at : at + reach], axis=0)
        )
        for at in range(reach, len(places) - reach + 1)
    ]
    return float(max(steps))


def scatter(places: Array) -> float:
    """Return how much neighbouring frames differ, as a standard deviation in the plane, both axes together.

    From the median of the steps between neighbours, which neither drift nor single odd frames move.
    """
    if len(places) < 3:
        return math.inf
    steps = np.linalg.norm(np.diff(places, axis=0), axis=1)
    return float(np.median(steps) / _MEDIAN_STEP)


_MEDIAN_STEP: Final = math.sqrt(2.0) * math.sqrt(math.log(2.0))
"""Median length of the difference of two isotropic normal points whose squared spread, both axes, sums to 1."""


def _thinned(hours: Array, values: Array) -> tuple[Array, Array]:
    """Return medians of neighbours, so few that all pairs can be looked at."""
    count = min(len(values), _MOST)
    parts = np.array_split(np.arange(len(values)), count)
    return (
        np.array([np.median(hours[part]) for part in parts]),
        np.array([np.median(values[part]) for part in parts]),
    )


def _widening(residuals: Array) -> float:
    """Return the square root of frames per independent frame, from the first autocorrelation.

    The autocorrelation of a short series comes out too low; the correction is that of M. G. Kendall, "Note
    on bias in the estimation of autocorrelation", Biometrika 41, 1954, doi:10.1093/biomet/41.3-4.403.
    """
    off = residuals - np.median(residuals)
    power = float(off @ off)
    together = float(off[1:] @ off[:-1]) / power if power > 0.0 else 0.0
    together = (len(off) * together + 1.0) / (len(off) - 4.0)
    together = min(max(together, 0.0), 0.9)
    return math.sqrt((1.0 + together) / (1.0 - together))
