"""Two bodies under one light: what one makes of it against the other, from the stretches they share in time.

Sensors and their published matrices differ, so that the same lamp has another chromaticity in each body's
frames, by a nearly constant step in the log-opponent plane.  Knowing the step, both bodies' frames are
evidence of one light, and both land on one look.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast.shoot_course import Maps
from grader.cast.stretches import pooled_place

Array = NDArray[np.float64]

_SPREAD: Final[Array] = np.array([0.010, 0.014])
"""Standard deviation of the step between bodies along a and b, before the frames are looked at: about the
largest that is known of camera matrices, 0.014 in b. (judgement)"""
_PER_LIGHT: Final[Array] = np.array([0.003, 0.006])
"""How much the step differs from lamp to lamp, since two sensors do not see all spectra alike. (simulated shoots)"""
_PER_FRAME: Final[Array] = np.array([0.010, 0.020])
"""What one frame adds to the error of a pooled light, falling with the root of their number. (simulated shoots)"""
_APART: Final = 0.1
"""Probability that two bodies at work at the same time stand under different lights. (judgement)"""
_APART_DENSITY: Final = 50.0
"""Density of the difference of two unrelated lights: even over 0.1 along a and 0.2 along b. (judgement)"""
_FEWEST: Final = 3
"""Frames that each body must have in a shared stretch."""
_ROUNDS: Final = 12


@dataclass(frozen=True, slots=True, eq=False)
class Span:
    """One body's frames under one light: ``rows`` (n,) into the maps, ``times_s`` (n,) ascending."""

    rows: NDArray[np.intp]
    times_s: Array


@dataclass(frozen=True, slots=True, eq=False)
class Step:
    """How far the second body's lights lie from the first's.

    ``ab`` (2,) and its covariance (2, 2) in the log-opponent plane; ``shared`` (pairs,) the probability
    that the spans of each pair are under one light.
    """

    ab: Array
    covariance: Array
    shared: Array

    @property
    def doubt(self) -> float:
        """Return the standard deviation of the step, both axes together, in the plane."""
        return float(np.sqrt(np.trace(self.covariance)))


def overlaps(first: Sequence[Span], second: Sequence[Span]) -> list[tuple[int, int]]:
    """Return which spans of two bodies overlap in time with a few frames of either."""
    return [
        (i, j)
        for i, one in enumerate(first)
        for j, other in enumerate(second)
        if min(len(part) for part in _common(one, other)) >= _FEWEST
    ]


def measure_step(log_maps: Maps, log_prior: Array, pairs: Sequence[tuple[Span, Span]]) -> Step | None:
    """Return the step between two bodies from pairs of spans that overlap in time.

    Each pair gives a difference of two pooled lights, surer the more frames it has; pairs under different
    lights (another room) are told apart by their disagreement (expectation and maximisation [1]_).

    Parameters
    ----------
    log_maps : (n, C) float32
        From `shoot_course.log_robust`, all frames.
    log_prior : (C,) float64
    pairs : sequence of (Span, Span)
        Of the first and the second body.

    Returns
    -------
    Step or None
        None without a pair.

    References
    ----------
    .. [1] A. P. Dempster, N. M. Laird, D. B. Rubin, "Maximum likelihood from incomplete data via the EM
       algorithm", JRSS B 39(1), 1977, doi:10.1111/j.2517-6161.1977.tb01600.x.
    """
    if not pairs:
        return None
    common = [_common(*pair) for pair in pairs]
    lights = np.array([[pooled_place(log_maps[rows], log_prior) for rows in pair] for pair in common])
    differences = lights[:, 1] - lights[:, 0]
    frames = np.array([[1.0 / len(one) + 1.0 / len(other)] for one, other in common])
    variance = _PER_LIGHT**2 + _PER_FRAME**2 * frames
    ab = np.median(differences, axis=0)
    for _ in range(_ROUNDS):
        shared = _probably_shared(differences - ab, variance)
        weights = shared[:, None] / variance
        precision = weights.sum(axis=0) + _SPREAD**-2.0
        ab = (weights * differences).sum(axis=0) / precision
    scatter = (weights * (differences - ab) ** 2).sum(axis=0) / max(float(shared.sum()) - 1.0, 1.0)
    return Step(ab, np.diag(np.maximum(scatter, 1.0) / precision), shared)


def _probably_shared(off: Array, variance: Array) -> Array:
    """Return the probability that each pair is under one light, by how far it is off the common step."""
    density = np.exp(-0.5 * (off**2 / variance).sum(axis=1)) / (2.0 * np.pi * np.sqrt(variance.prod(axis=1)))
    return np.asarray((1.0 - _APART) * density / ((1.0 - _APART) * density + _APART * _APART_DENSITY))


def _common(one: Span, other: Span) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Return the rows of both that lie in the time they share."""
    first = max(one.times_s[0], other.times_s[0])
    last = min(one.times_s[-1], other.times_s[-1])
    return _between(one, first, last), _between(other, first, last)


def _between(span: Span, first: float, last: float) -> NDArray[np.intp]:
    return span.rows[(span.times_s >= first) & (span.times_s <= last)]
