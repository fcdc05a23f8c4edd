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

from grader.cast import shoot_course, vote
from grader.cast.shoot_course import Maps

Array = NDArray[np.float64]

_SPREAD: Final = np.array([0.010, 0.014])
"""Standard deviation of the step between bodies along a and b, before the frames are looked at: about the
largest that is known of camera matrices, 0.014 in b. (judgement)"""
_WORTH: Final = 6.0
"""Most independent frames that one body's share of a stretch is worth. (tuned on simulated shoots)"""
_APART: Final = 0.1
"""Probability that two bodies at work at the same time stand under different lights. (judgement)"""
_FEWEST: Final = 3
"""Frames that each body must have in a shared stretch."""
_STEPS: Final[Array] = np.stack(
    np.meshgrid(np.linspace(-0.035, 0.035, 15), np.linspace(-0.05, 0.05, 21), indexing="ij"), axis=-1
).reshape(-1, 2)
"""Steps that are tried, half a bin apart."""


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

    Each pair tells how likely every step is; pairs under different lights (another room) are told apart
    by their disagreement.

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
    """
    if not pairs:
        return None
    told = np.stack([_told_by(log_maps, log_prior, *_common(*pair)) for pair in pairs])
    even = 1.0 / len(_STEPS)
    log_weights = np.log((1.0 - _APART) * told + _APART * even).sum(axis=0)
    log_weights -= 0.5 * ((_STEPS / _SPREAD) ** 2).sum(axis=1)
    weights = vote.weights_from_log(log_weights)
    mean = weights @ _STEPS
    off = _STEPS - mean
    likely = told @ weights
    shared = (1.0 - _APART) * likely / ((1.0 - _APART) * likely + _APART * even)
    return Step(mean, (off * weights[:, None]).T @ off, shared)


def _common(one: Span, other: Span) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Return the rows of both that lie in the time they share."""
    first = max(one.times_s[0], other.times_s[0])
    last = min(one.times_s[-1], other.times_s[-1])
    return _between(one, first, last), _between(other, first, last)


def _between(span: Span, first: float, last: float) -> NDArray[np.intp]:
    return span.rows[(span.times_s >= first) & (span.times_s <= last)]


def _told_by(log_maps: Maps, log_prior: Array, one: NDArray[np.intp], other: NDArray[np.intp]) -> Array:
    """Return how likely each step is if both groups of frames are under one light, sum 1."""
    first, second = (
        log_maps[rows].sum(axis=0, dtype=np.float64) * min(1.0, _WORTH / len(rows)) for rows in (one, other)
    )
    moved = shoot_course.shifted(np.repeat(second[None].astype(np.float32), len(_STEPS), axis=0), _STEPS)
    return vote.weights_from_log(shoot_course.log_total(first + moved + log_prior))
