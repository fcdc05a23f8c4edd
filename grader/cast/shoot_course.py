"""Arithmetic of evidence over many frames: robust maps, shifts in the plane, smoothing along a course.

A *map* is (C,) over the candidate lights of `grader.cast.vote`; log-maps have no fixed offset.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache, lru_cache
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast import plane, vote
from grader.cast.plane import A_BINS, B_BINS, STEP
from grader.model import Cast

Array = NDArray[np.float64]
Maps = NDArray[np.float32]

FLOOR: Final = 1e-3
"""Share of a frame's evidence that lies on every candidate alike: a frame that contradicts its neighbours
can cost a stretch only so much. About what an even spread would give. (tuned on simulated shoots)"""
_STEPS: Final = 16.0
"""Steps of the quantised log-likelihood to one unit of natural logarithm (see `grader.model.Evidence`)."""
_PARTS: Final = 64
"""Shifts are rounded to this part of a bin, 0.02 degrees."""
_DEGREES_PER_AB: Final = 150.0
"""Recovery angle for a unit of the plane, roughly. [degrees]"""


@dataclass(frozen=True, slots=True, eq=False)
class Course:
    """A light followed over n frames.

    ``places`` (n, 2) is the mean light in the plane, ``variance`` (n, 2) its variance along either axis,
    ``jumps`` (n,) the probability that the light of a frame is another one than that of the frame before,
    ``log_evidence`` the natural logarithm of what the frames are worth under the assumptions made.
    """

    places: Array
    variance: Array
    jumps: Array
    log_evidence: float


def frame_maps(casts: Sequence[Cast]) -> Maps:
    """Return each frame's likelihood, normalised over the candidates, (n, C) float32.

    Frames whose evidence is missing or belongs to another grid vote with a round bump at their own light,
    as wide as their doubt; frames without either vote for nothing.
    """
    maps = np.empty((len(casts), len(vote.candidates())), np.float32)
    for row, cast in enumerate(casts):
        log_map = _log_likelihood(cast)
        weights = np.exp(log_map - log_map.max())
        maps[row] = weights / weights.sum()
    return maps


def log_robust(maps: Maps) -> Maps:
    """Return the logarithm of maps with the floor under them."""
    return np.asarray(np.log(maps + np.float32(FLOOR)))


def shifted(log_maps: Maps, by: Array) -> Maps:
    """Return log-maps read at ``place + by``: what they say of lights that differ by a known step.

    Bilinear; whatever the fraction of a bin, the result is blurred alike, so that no step is preferred.

    Parameters
    ----------
    log_maps : (n, C) float32
    by : (2,) or (n, 2) float64
        Step in the plane.

    Returns
    -------
    (n, C) float32
        Lights beyond the candidates count as the map's lowest.
    """
    steps = np.broadcast_to(np.rint(np.asarray(by, np.float64) / STEP * _PARTS) / _PARTS, (len(log_maps), 2))
    result = np.empty_like(log_maps)
    for row, (step_a, step_b) in enumerate(steps):
        grid = np.full(A_BINS * B_BINS, log_maps[row].min(), np.float32)
        grid[plane.candidate_bins()] = log_maps[row]
        moved = (
            _shift_taps(A_BINS, float(step_a))
            @ grid.reshape(A_BINS, B_BINS)
            @ _shift_taps(B_BINS, float(step_b)).T
        )
        result[row] = moved.ravel()[plane.candidate_bins()]
    return result


def follow(log_maps: Maps, log_prior: Array, odds: Array, wander: float) -> Course:
    """Return the light along a sequence of frames: forward-backward smoothing on the grid.

    From frame to frame the light stays but for a small random step, or, with the given odds, is drawn anew
    from the prior.

    Parameters
    ----------
    log_maps : (n, C) float32
        Log-likelihoods; any offset.
    log_prior : (C,) float64
    odds : (n,) float64
        Probability of another light than at the frame before.
    wander : float
        Standard deviation of the step along b, yellow to blue; that along a is 0.4 of it, since lamps and
        daylight drift along the locus. 0 holds the light still between jumps.

    Returns
    -------
    Course

    References
    ----------
    .. [1] L. R. Rabiner, "A tutorial on hidden Markov models", Proc. IEEE 77(2), 1989, doi:10.1109/5.18626.
    """
    likelihood = np.exp(log_maps - log_maps.max(axis=1, keepdims=True))
    prior = vote.weights_from_log(log_prior)
    forward, scale = _forward(likelihood, prior, odds, wander)
    count = len(likelihood)
    places, jumps = vote.candidates(), np.zeros(count)
    mean, variance = np.empty((count, 2)), np.empty((count, 2))
    backward = np.ones(len(prior))
    for at in range(count - 1, -1, -1):
        weights = forward[at] * backward
        weights /= weights.sum()
        mean[at] = weights @ places
        variance[at] = weights @ (places - mean[at]) ** 2
        ahead = likelihood[at] * backward
        anew = float(prior @ ahead)
        jumps[at] = odds[at] * anew / scale[at] if at else 0.0
        backward = ((1.0 - odds[at]) * _wandered(ahead, wander) + odds[at] * anew) / scale[at]
    offset = log_maps.max(axis=1).sum(dtype=np.float64)
    return Course(mean, variance, jumps, float(np.log(scale).sum() + offset))


def pooled(log_sum: Array, log_prior: Array, frames: int, worth: float) -> Array:
    """Return the posterior of one light that many frames share.

    Frames of a shoot err together (the same room, the same faces), so that all of them are worth no more
    than ``worth`` independent ones; few frames count double, for what the floor takes from each.

    Parameters
    ----------
    log_sum : (C,) float64
        Sum of the frames' log-maps.
    log_prior : (C,) float64
        Counted once.
    frames : int
        How many frames are in the sum.
    worth : float
        How many independent frames they can be worth at most.

    Returns
    -------
    (C,) float64
        Weights, sum 1.
    """
    return vote.weights_from_log(log_sum * min(2.0, worth / frames) + log_prior)


def log_total(log_weights: Array) -> Array:
    """Return the logarithm of a sum over the candidates from logarithms, (...) from (..., C)."""
    peak = log_weights.max(axis=-1)
    return np.asarray(peak + np.log(np.exp(log_weights - peak[..., None]).sum(axis=-1)))


def place_of(weights: Array) -> Array:
    """Return the mean light of a posterior in the plane, (2,); the same light as `vote.light_from_weights`."""
    return plane.ab_from_xy(np.array(vote.light_from_weights(weights)))


def degrees_apart(first: Array, second: Array) -> Array:
    """Return the angle between lights given by their places in the plane, (...) from (..., 2)."""
    one, two = plane.linear_from_ab(first), plane.linear_from_ab(second)
    cross = np.linalg.norm(np.cross(one, two), axis=-1)
    return np.asarray(np.degrees(np.arctan2(cross, (one * two).sum(axis=-1))))


def _log_likelihood(cast: Cast) -> Array:
    evidence, places = cast.evidence, vote.candidates()
    if evidence is not None and evidence.grid == plane.GRID and len(evidence.log_likelihood) == len(places):
        return np.asarray(evidence.log_likelihood, np.float64) / -_STEPS
    if cast.white_xy is None:
        return np.zeros(len(places))
    width = max(cast.doubt_deg or 3.0, 0.3) / _DEGREES_PER_AB
    off = (places - plane.ab_from_xy(np.array(cast.white_xy))) / width
    return np.asarray(-0.5 * (off**2).sum(axis=1))


def _forward(likelihood: Maps, prior: Array, odds: Array, wander: float) -> tuple[Maps, Array]:
    forward, scale = np.empty_like(likelihood), np.empty(len(likelihood))
    state = prior
    for at, frame in enumerate(likelihood):
        ahead = state if at == 0 else (1.0 - odds[at]) * _wandered(state, wander) + odds[at] * prior
        state = ahead * frame
        scale[at] = state.sum()
        state /= scale[at]
        forward[at] = state
    return forward, scale


def _wandered(weights: Array, wander: float) -> Array:
    """Return weights after a random step of the light, reflected where the grid ends."""
    if wander == 0.0:
        return weights
    flat = np.zeros(A_BINS * B_BINS)
    flat[plane.candidate_bins()] = weights
    grid = flat.reshape(A_BINS, B_BINS)
    for along, spread in ((grid, 0.4 * wander), (grid.T, wander)):
        share, times = _to_neighbours(spread)
        for _ in range(times):
            flow = share * (along[1:] - along[:-1])
            along[:-1] += flow
            along[1:] -= flow
    return np.asarray(flat[plane.candidate_bins()])


@cache
def _to_neighbours(spread: float) -> tuple[float, int]:
    """Return what goes to either neighbour, and how many times, for a step of this standard deviation, however small beside a bin."""
    variance = (spread / STEP) ** 2
    times = max(int(np.ceil(2.0 * variance)), 1)
    return variance / times / 2.0, times


@lru_cache(maxsize=1024)
def _shift_taps(bins: int, step: float) -> Maps:
    """Return the matrix that reads a row of bins at ``i + step``, blurred by a quarter of a squared bin."""
    whole = int(np.floor(step))
    part = step - whole
    side = (0.25 - part * (1.0 - part)) / 2.0
    taps = {whole: 1.0 - part, whole + 1: part}
    spread: dict[int, float] = {}
    for at, weight in taps.items():
        for offset, share in ((-1, side), (0, 1.0 - 2.0 * side), (1, side)):
            spread[at + offset] = spread.get(at + offset, 0.0) + weight * share
    matrix = np.zeros((bins, bins), np.float32)
    rows = np.arange(bins)
    for at, weight in spread.items():
        np.add.at(matrix, (rows, np.clip(rows + at, 0, bins - 1)), np.float32(weight))
    return matrix
