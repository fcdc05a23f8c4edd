"""Stretches: where the light of a sequence of frames switches, and what it is in between."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from grader.cast import plane, shoot_course, vote
from grader.cast.shoot_course import Maps
from grader.colour.white import cct_duv_from_xy, xy_from_cct_duv, xy_from_linear

Array = NDArray[np.float64]

WORTH: Final = 6.0
"""Most independent frames that a stretch is worth against the prior. (tuned on simulated shoots)"""
_FLATTEN: Final = 0.5
"""Power of the prior that a new light is drawn from: after a switch, lamps are likelier than in all photographs.
(tuned on simulated shoots)"""
_TRUST: Final = 0.6
_WITNESS_REACH: Final = 4
_WITNESS_PROBABILITY: Final = 0.5
"""A switch must also show, roughly there, when each frame's evidence is trusted less: neighbours show the same
things and err together. (tuned on simulated shoots)"""
_WANDER: Final = 0.001
"""Random step of the light from frame to frame while switches are sought. (tuned on simulated shoots)"""
_SWITCH_PROBABILITY: Final = 0.5
_SURE_PROBABILITY: Final = 0.6
"""Of a jump at one frame: two neighbours that are both so sure cannot be one jump. (probabilities)"""
_WEAK_PROBABILITY: Final = 0.1
"""Of a jump at one frame: from here a second look is worth its time. (tuned on simulated shoots)"""
_SWITCH_REACH: Final = 2
"""A switch may be spread over this many frames to either side."""
_LEAST_STEP_DEG: Final = 1.5
"""Smaller steps are not told apart from drift. (tuned on simulated shoots)"""
_LEAST_WEAK_STEP_DEG: Final = 3.0
"""The same for switches that only a second look finds."""
_STEP_FRAMES: Final = 8
_FEWEST_TO_DRIFT: Final = 6
_FEWEST_TO_WANDER: Final = 24
_WANDER_WITHIN: Final = 0.003
_DRIFT_COST: Final = 0.0
_WANDER_COST: Final = 5.0
"""Log-evidence by which a moving light must beat a steady one, besides half the logarithm of the number of
frames. (tuned on simulated shoots; the form is that of the Bayesian information criterion, Schwarz 1978)"""
_DRIFT_SPREAD: Final = 0.03
"""Standard deviation of the drift over a stretch, along b, before the frames are looked at. (judgement)"""
_DRIFTS: Final[Array] = np.linspace(-0.1, 0.1, 17)
_BINS: Final = 16


@dataclass(frozen=True, slots=True, eq=False)
class Light:
    """The light of a stretch: one place in the plane, and how each of its n frames departs from it.

    ``moves`` (n, 2) have mean 0 and are all zero where the light held still; ``log_sum`` (C,) is what the
    frames say of the centre, each carried along its move.
    """

    centre: Array
    moves: Array
    log_sum: Array
    model: Literal["steady", "drift", "wander"]

    @property
    def places(self) -> Array:
        """Return the light of each frame, (n, 2)."""
        return np.asarray(self.centre + self.moves)


def find_switches(log_maps: Maps, log_prior: Array, odds: Array) -> list[int]:
    """Return the frames that are the first under another light.

    Parameters
    ----------
    log_maps : (n, C) float32
        From `shoot_course.log_robust`.
    log_prior : (C,) float64
    odds : (n,) float64
        From `shoot_order.switch_odds`.

    Returns
    -------
    list of int
        Ascending; never 0.
    """
    anew = _FLATTEN * log_prior
    course = shoot_course.follow(log_maps, anew, odds, _WANDER)
    doubtful = shoot_course.follow(log_maps * np.float32(_TRUST), anew, odds, _WANDER)
    witnessed = np.convolve(doubtful.jumps, np.ones(2 * _WITNESS_REACH + 1), "full")[_WITNESS_REACH:]
    sure = [at for at in _declared(course.jumps) if witnessed[at] >= _WITNESS_PROBABILITY]
    switches = _with_weak(log_maps, log_prior, odds, course.jumps, sure)
    while True:
        steps = [_step_deg(log_maps, log_prior, switches, at) for at in range(len(switches))]
        if not steps or min(steps) >= _LEAST_STEP_DEG:
            return switches
        del switches[int(np.argmin(steps))]


def measure_light(log_maps: Maps, log_prior: Array, clock: Array) -> Light:
    """Return the light of one stretch: steady, drifting evenly, or wandering, whichever its frames support.

    Parameters
    ----------
    log_maps : (n, C) float32
        From `shoot_course.log_robust`.
    log_prior : (C,) float64
    clock : (n,) float64
        Capture times or frame numbers, ascending, any unit.

    Returns
    -------
    Light
    """
    count = len(log_maps)
    steady = _light(log_maps.sum(axis=0, dtype=np.float64), log_prior, np.zeros((count, 2)), "steady")
    tried = [(0.0, steady)]
    if count >= _FEWEST_TO_DRIFT:
        drift, gain = _even_drift(log_maps, log_prior, clock, steady.centre)
        tried.append((gain - _DRIFT_COST - 0.5 * np.log(count), drift))
    if count >= _FEWEST_TO_WANDER:
        tried.append(_wandering(log_maps, log_prior, _log_evidence(steady.log_sum, log_prior)))
    return max(tried, key=lambda candidate: candidate[0])[1]


def pooled_place(log_maps: Maps, log_prior: Array) -> Array:
    """Return the light that frames share if it holds still, as its place in the plane, (2,)."""
    return _place(log_maps.sum(axis=0, dtype=np.float64), log_prior, len(log_maps))


def _place(log_sum: Array, log_prior: Array, frames: int) -> Array:
    return shoot_course.place_of(shoot_course.pooled(log_sum, log_prior, frames, WORTH))


def _declared(jumps: Array) -> list[int]:
    """Return where the light jumps, ascending.

    That is at every frame that is sure of it, however near the next, and elsewhere at the middle of the few
    frames over which a likely jump is spread.
    """
    found = np.flatnonzero(jumps >= _SURE_PROBABILITY).tolist()
    left = jumps.copy()
    for at in found:
        left[max(at - _SWITCH_REACH, 0) : at + _SWITCH_REACH + 1] = 0.0
    reach = np.ones(2 * _SWITCH_REACH + 1)
    while True:
        near = np.convolve(left, reach, "full")[_SWITCH_REACH : _SWITCH_REACH + len(left)]
        peak = int(near.argmax())
        if near[peak] < _SWITCH_PROBABILITY:
            return sorted(found)
        first, last = max(peak - _SWITCH_REACH, 0), peak + _SWITCH_REACH + 1
        share = np.cumsum(left[first:last])
        found.append(first + int(np.searchsorted(share, share[-1] / 2.0)))
        left[first:last] = 0.0


def _with_weak(log_maps: Maps, log_prior: Array, odds: Array, jumps: Array, sure: list[int]) -> list[int]:
    """Return the switches, and the weak ones at which two lights, each at rest or drifting, explain more than one.

    A light that drifts fast and then falls back looks to the chain of frames like one that wanders.
    """
    found = list(sure)
    for at in np.argsort(-jumps, kind="stable").tolist():
        if jumps[at] < _WEAK_PROBABILITY:
            break
        first = max([0, *(other for other in found if other <= at)])
        last = min([len(log_maps), *(other for other in found if other > at)])
        if min(at - first, last - at) < _FEWEST_TO_DRIFT:
            continue
        before, after, whole = (
            _moving_evidence(log_maps[part], log_prior)
            for part in (slice(first, at), slice(at, last), slice(first, last))
        )
        more = sorted([*found, at])
        likelier = _TRUST * (before + after - whole) > -np.log(odds[at])
        if likelier and _step_deg(log_maps, log_prior, more, more.index(at)) >= _LEAST_WEAK_STEP_DEG:
            found = more
    return found


def _moving_evidence(log_maps: Maps, log_prior: Array) -> float:
    """Return the log-evidence of a light that is steady or drifts evenly, whichever has more."""
    count = len(log_maps)
    steady = _light(log_maps.sum(axis=0, dtype=np.float64), log_prior, np.zeros((count, 2)), "steady")
    _, gain = _even_drift(log_maps, log_prior, np.arange(count, dtype=np.float64), steady.centre)
    return _log_evidence(steady.log_sum, log_prior) + max(
        gain - _DRIFT_COST - 0.5 * float(np.log(count)), 0.0
    )


def _step_deg(log_maps: Maps, log_prior: Array, switches: list[int], at: int) -> float:
    """Return how far the light moves at a switch, from a few frames on either side."""
    here = switches[at]
    first = max(here - _STEP_FRAMES, switches[at - 1] if at else 0)
    last = min(here + _STEP_FRAMES, switches[at + 1] if at + 1 < len(switches) else len(log_maps))
    before, after = (pooled_place(part, log_prior) for part in (log_maps[first:here], log_maps[here:last]))
    return float(shoot_course.degrees_apart(before, after))


def _even_drift(log_maps: Maps, log_prior: Array, clock: Array, centre: Array) -> tuple[Light, float]:
    """Return the light that moves evenly along the locus, and its gain over a steady one."""
    since = clock - clock.mean()
    since = since / max(float(np.ptp(since)), 1e-12)
    along = _along_locus(centre)
    knots, binned = _binned(log_maps, since)

    def carried(drift: float) -> Array:
        moved = shoot_course.shifted(binned, np.outer(knots * drift, along))
        return np.asarray(moved.sum(axis=0, dtype=np.float64))

    scores = np.array([_log_evidence(carried(float(drift)), log_prior) for drift in _DRIFTS])
    log_weights = np.log(vote.weights_from_log(-0.5 * (_DRIFTS / _DRIFT_SPREAD) ** 2))
    drift = float(vote.weights_from_log(scores + log_weights) @ _DRIFTS)
    gain = shoot_course.log_total(scores + log_weights) - scores[len(_DRIFTS) // 2]
    return _light(carried(drift), log_prior, np.outer(since * drift, along), "drift"), float(gain)


def _wandering(log_maps: Maps, log_prior: Array, steady_evidence: float) -> tuple[float, Light]:
    """Return the light that wanders, after its score against a steady one."""
    count = len(log_maps)
    course = shoot_course.follow(log_maps, log_prior, np.zeros(count), _WANDER_WITHIN)
    moves = course.places - course.places.mean(axis=0)
    moved = shoot_course.shifted(log_maps, moves).sum(axis=0, dtype=np.float64)
    score = course.log_evidence - steady_evidence - _WANDER_COST - 0.5 * np.log(count)
    return float(score), _light(moved, log_prior, moves, "wander")


def _light(
    log_sum: Array, log_prior: Array, moves: Array, model: Literal["steady", "drift", "wander"]
) -> Light:
    return Light(_place(log_sum, log_prior, len(moves)), moves, log_sum, model)


def _log_evidence(log_sum: Array, log_prior: Array) -> float:
    return float(shoot_course.log_total(log_sum + log_prior) - shoot_course.log_total(log_prior))


def _binned(log_maps: Maps, since: Array) -> tuple[Array, Maps]:
    """Return sums of log-maps over equal parts of time, and the mean time of each part."""
    part = np.minimum(((since - since.min()) / max(np.ptp(since), 1e-12) * _BINS).astype(np.intp), _BINS - 1)
    used = np.unique(part)
    knots = np.array([since[part == one].mean() for one in used])
    return knots, np.stack([log_maps[part == one].sum(axis=0) for one in used])


def _along_locus(centre: Array) -> Array:
    """Return the direction in the plane in which a light near ``centre`` warms, scaled to a step of 1 in b."""
    cct_k, duv = cct_duv_from_xy(xy_from_linear(plane.linear_from_ab(centre)))
    mired = 1e6 / cct_k if cct_k is not None else 200.0
    ends = plane.ab_from_xy(xy_from_cct_duv(1e6 / np.array([mired - 5.0, mired + 5.0]), duv))
    step = ends[1] - ends[0]
    return np.asarray(step / step[1])
