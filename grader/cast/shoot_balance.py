"""A camera that balances every frame anew: finished frames under one light whose own casts still differ.

The light of a stretch is one, but an automatic balance moves the cast that is left in each finished file.  How much
it moves is learned from the stretch itself: if the frames' own evidence fits better with a spread around the light of
the stretch than without, each frame goes part of the way to its own evidence (empirical Bayes [1]_).

References
----------
.. [1] B. Efron, C. Morris, "Stein's estimation rule and its competitors", JASA 68(341), 1973,
   doi:10.1080/01621459.1973.10481350.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast import shoot_course, vote
from grader.cast.shoot_course import Maps

Array = NDArray[np.float64]

_SPREADS: Final[Array] = np.array([0.006, 0.010, 0.015, 0.022, 0.032, 0.045])
"""Standard deviations of the balance along b, yellow to blue, that are tried; 0.045 is about 65 mired."""
_ALONG_A: Final = 0.4
"""The same along a, green to magenta, as a share: balances move along the locus first. (judgement)"""
_FINEST: Final = (0.002, 0.003)
"""Least spread along a and b: a fifth and a third of a bin."""
_SHARPEN: Final = 1.4
"""Power of a finished frame's evidence, which its vote took down to 0.6. (tuned on photographs re-lit)"""
_COST: Final = 4.0
"""Log-evidence that a balance that moves must bring beyond one that holds. (tuned on the same)"""
_WORTH: Final = 32
"""Most frames whose evidence counts for it: frames of one room err together. (tuned on the same)"""
_FEWEST: Final = 6
_LOOKED_AT: Final = 64
"""Most frames of a stretch that are asked, evenly spread; more would change nothing much."""
_BLOCK: Final = 256


@dataclass(frozen=True, slots=True, eq=False)
class Balance:
    """The casts of frames that were balanced one by one: ``places`` (n, 2) in the plane, and their doubt in degrees."""

    places: Array
    doubt_deg: float


def balanced_anew(log_maps: Maps, places: Array) -> Balance | None:
    """Return each frame's own cast where the frames of a stretch were balanced one by one.

    Parameters
    ----------
    log_maps : (n, C) float32
        From `shoot_course.log_robust`, of display-referred frames under one light.
    places : (n, 2) float64
        The light of the stretch at each frame.

    Returns
    -------
    Balance or None
        None where one balance for all explains the frames as well, or where they are too few to tell.
    """
    if len(places) < _FEWEST:
        return None
    some = np.unique(np.linspace(0, len(places) - 1, min(len(places), _LOOKED_AT)).astype(np.intp))
    gain = _gain(log_maps[some], places[some])
    if float(shoot_course.log_total(gain - np.log(len(_SPREADS)))) < 0.0:
        return None
    weights = vote.weights_from_log(gain)
    means, variances = np.zeros((2, len(places), 2))
    for first in range(0, len(places), _BLOCK):
        rows = slice(first, first + _BLOCK)
        for weight, spread in zip(weights, _SPREADS, strict=True):
            _, mean, variance = _around(log_maps[rows], places[rows], float(spread))
            means[rows] += weight * mean
            variances[rows] += weight * variance
    spread_ab = float(np.sqrt(np.median(variances.sum(axis=1))))
    return Balance(means, float(shoot_course.degrees_apart(np.zeros(2), np.array([0.0, spread_ab]))))


def _gain(log_maps: Maps, places: Array) -> Array:
    """Return the log-evidence of each spread beyond that of one balance for all, and beyond its cost."""
    held = _around(log_maps, places, 0.0)[0].sum()
    evidence = np.array([_around(log_maps, places, float(spread))[0].sum() for spread in _SPREADS])
    return np.asarray((evidence - held) * min(1.0, _WORTH / len(places)) - _COST)


def _around(log_maps: Maps, places: Array, spread: float) -> tuple[Array, Array, Array]:
    """Return log-evidence (n,), mean and variance (n, 2) of each frame's cast, given how casts spread."""
    candidates = vote.candidates()
    maps = log_maps.astype(np.float64) * _SHARPEN
    width = np.maximum(np.array([_ALONG_A, 1.0]) * spread, _FINEST)
    off = (candidates - places[:, None]) / width
    prior = vote.weights_from_log(-0.5 * (off**2).sum(axis=-1))
    peak = maps.max(axis=1, keepdims=True)
    joint = prior * np.exp(maps - peak)
    total = joint.sum(axis=1)
    mean = joint @ candidates / total[:, None]
    variance = joint @ candidates**2 / total[:, None] - mean**2
    return np.log(total) + peak[:, 0], mean, np.maximum(variance, 0.0)
