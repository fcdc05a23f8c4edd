"""The vote: evidence maps over the plausible lights, a prior, and the light that they agree on."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast import plane
from grader.cast.cells import Cells
from grader.cast.natural import mean_log_density
from grader.cast.plane import A_BINS, A_START, B_BINS, B_START, STEP
from grader.colour import white
from grader.model import XY, Referred

Array = NDArray[np.float64]

_FLOOR: Final = 4e-6
"""Share of votes that any light has, so that one empty bin does not rule it out. (judgement)"""
_GREY_BLUR: Final = 0.006
_GREY_SHARPNESS: Final = 10.0
"""How fast a cell stops counting as grey when its colour changes with its brightness; 5 to 20 give the same
lights within 0.02 degrees. (judgement)"""
_WEIGHTS: Final = np.array([0.35, 2.8, 2.65])
"""Weight of grey cells, surface colours and edge colours. (fitted: benchmarks/light_fit.py DATA weights)"""
PRIOR_POWER: Final = 1.65
"""The scene prior against the evidence. (fitted: the same command)"""
_TRUST: Final = {"scene": 1.0, "display": 0.6}
"""Tone curves and earlier grading bend the colours of a finished picture. (judgement)"""
_FULL_CELLS: Final = 256
"""Fewer cells than this are a poor sample of a scene's colours. (judgement)"""
_CAMERA_SPREAD, _CAMERA_FREEDOM = 0.03, 3.0
"""Scale and degrees of freedom of a camera's own balance around the light, about 4 degrees with heavy tails. (judgement)"""


@dataclass(frozen=True, slots=True, eq=False)
class Vote:
    """What the cells say about the candidates.

    ``parts`` (3, C) are the weighted log-likelihoods of grey cells, surface colours and edge colours,
    ``log_likelihood`` (C,) their sum, ``log_prior`` (C,) the prior, the camera's own balance in it,
    ``weights`` (C,) the posterior (sums to 1).
    """

    parts: Array
    log_likelihood: Array
    log_prior: Array
    weights: Array


@cache
def candidates() -> Array:
    """Return the places of the candidate lights in the log-opponent plane, (C, 2) float64."""
    return plane.grid_places()[plane.candidate_bins()]


@cache
def candidate_lights() -> Array:
    """Return the candidates as working light of unit length, (C, 3) float64."""
    linear = plane.linear_from_ab(candidates())
    return np.asarray(linear / np.linalg.norm(linear, axis=1, keepdims=True))


@cache
def log_prior(referred: Referred) -> Array:
    """Return how plausible each candidate is before the frame is looked at.

    Parameters
    ----------
    referred : 'scene' or 'display'

    Returns
    -------
    (C,) float64
        Natural logarithm, normalised over the candidates.
    """
    mired, duv = plane.mired_duv_from_xy(white.xy_from_linear(candidate_lights()))
    density = _scene_prior(mired, duv) if referred == "scene" else _display_prior(mired, duv)
    return np.asarray(np.log(density / density.sum()))


def _bump(x: Array, centre: float, spread: float | Array) -> Array:
    return np.asarray(np.exp(-0.5 * ((x - centre) / spread) ** 2))


def _scene_prior(mired: Array, duv: Array) -> Array:
    """Return daylight's bump, steep toward warm and wide toward shade, on a broad hill of every lamp.

    Figures fitted by hand on photographs whose light was measured with a chart.
    """
    daylight = _bump(mired, 175.0, np.where(mired > 175.0, 20.0, 40.0)) / 30.0
    anything = _bump(mired, 182.0, 140.0) / 140.0
    return np.asarray(((0.7 * daylight + 0.3 * anything + 1e-6) * _bump(duv, 0.0005, 0.007)) ** PRIOR_POWER)


def _display_prior(mired: Array, duv: Array) -> Array:
    """Return a spike at the file's own white (D65: 154 mired, Duv 0.0032), a hill around it, and wide tails.

    The spike holds half: a picture that somebody balanced is to stay as it is.  (judgement, from
    the casts that benchmarks/light_fit.py gives to neutral photographs)
    """

    def around_white(spread_mired: float, spread_duv: float) -> Array:
        near = _bump(mired, 154.0, spread_mired) * _bump(duv, 0.0032, spread_duv)
        return np.asarray(near / near.sum())

    return np.asarray(
        0.50 * around_white(6.0, 0.0015)
        + 0.45 * around_white(35.0, 0.006)
        + 0.05 * around_white(105.0, 0.015)
        + 1e-9
    )


def cast_vote(cells: Cells, referred: Referred, camera_light: Array | None = None) -> Vote:
    """Return what the cells of one frame say about every candidate light.

    Parameters
    ----------
    cells : Cells
    referred : 'scene' or 'display'
    camera_light : (3,) float64, optional
        The light that the camera itself balanced for. [working light, any scale]

    Returns
    -------
    Vote
    """
    parts = _TRUST[referred] * _WEIGHTS[:, None] * evidence(cells)
    likelihood = parts.sum(axis=0)
    prior = log_prior(referred) + camera_log_weight(camera_light)
    return Vote(parts, likelihood, prior, weights_from_log(likelihood + prior))


def evidence(cells: Cells) -> Array:
    """Return the three unweighted log-evidences of a frame, (3, C) float64."""
    surfaces = splat(cells.ab[cells.ok], np.ones(int(cells.ok.sum())))
    sample = min(1.0, cells.ok.sum() / _FULL_CELLS)
    at = plane.candidate_bins()
    return np.stack(
        [
            np.log(_spread(grey_histogram(cells), _GREY_BLUR) + _FLOOR),
            sample * mean_log_density(surfaces, "surface").ravel()[at],
            sample * mean_log_density(splat(*edge_votes(cells)), "edge").ravel()[at],
        ]
    )


def camera_log_weight(camera_light: Array | None) -> Array:
    """Return what the camera's own balance says about the candidates, (C,) float64.

    A broad Student bump around the balance: cameras err by several degrees, and keep some of a warm light.

    Parameters
    ----------
    camera_light : (3,) float64 or None
        None where the camera stood at its daylight setting or recorded nothing: then no light is preferred.
    """
    if camera_light is None:
        return np.zeros(len(candidates()))
    place = plane.ab_from_linear(camera_light)
    if not np.isfinite(place).all():
        return np.zeros(len(candidates()))
    squared = ((candidates() - place) ** 2).sum(axis=1) / _CAMERA_SPREAD**2
    return np.asarray(-0.5 * (_CAMERA_FREEDOM + 2.0) * np.log1p(squared / _CAMERA_FREEDOM))


def grey_histogram(cells: Cells) -> Array:
    """Return the votes of cells that look grey: brightness changes around them, colour does not.

    After the grey index of Qian et al. 2019, with each cell's four neighbours.

    Returns
    -------
    (A_BINS, B_BINS) float64
        Sums to 1, or all zero where nothing voted.
    """
    change, colour, neighbours = np.zeros((3, *cells.ok.shape))
    log_y = np.log(cells.luminance)
    for axis in (0, 1):
        both = cells.pairs(axis)
        steps = (
            both * np.abs(np.diff(log_y, axis=axis)),
            both * 3.0 * np.hypot(*np.moveaxis(np.diff(cells.ab, axis=axis), -1, 0)),
            both,
        )
        for total, step in zip((change, colour, neighbours), steps, strict=True):
            first, second = (np.s_[:-1], np.s_[1:]) if axis == 0 else (np.s_[:, :-1], np.s_[:, 1:])
            total[first] += step
            total[second] += step
    weight = cells.luminance * change * np.exp(-_GREY_SHARPNESS * colour / (change + 1e-4))
    voting = cells.ok & (neighbours > 0)
    return splat(cells.ab[voting], (weight / np.maximum(neighbours, 1.0))[voting])


def edge_votes(cells: Cells) -> tuple[Array, Array]:
    """Return the colours of edges where all three channels move the same way, weighted by their luminance.

    Returns
    -------
    places, weights : (n, 2), (n,) float64
    """
    steps = np.concatenate([np.diff(cells.linear, axis=axis)[cells.pairs(axis)] for axis in (0, 1)])
    red, green, blue = steps.T
    agree = ((red > 0) & (green > 0) & (blue > 0)) | ((red < 0) & (green < 0) & (blue < 0))
    steps = np.abs(steps[agree])
    return plane.ab_from_linear(steps), plane.luminance(steps)


def _spread(histogram: Array, blur: float) -> Array:
    """Return a histogram smoothed and read at the candidates."""
    smooth = _blur_matrix(A_BINS, blur) @ histogram @ _blur_matrix(B_BINS, blur)
    return np.asarray(smooth.ravel()[plane.candidate_bins()])


def splat(places: Array, weights: Array) -> Array:
    """Return a normalised histogram on the grid, each vote shared bilinearly among the four nearest bins."""
    x = (places[:, 0] - A_START) / STEP - 0.5
    y = (places[:, 1] - B_START) / STEP - 0.5
    inside = (x >= 0) & (y >= 0) & (x < A_BINS - 1) & (y < B_BINS - 1)
    x, y, weights = x[inside], y[inside], weights[inside]
    i, j = x.astype(np.intp), y.astype(np.intp)
    fx, fy = x - i, y - j
    flat = i * B_BINS + j
    size = A_BINS * B_BINS
    total = np.bincount(flat, weights * (1 - fx) * (1 - fy), size)
    total += np.bincount(flat + B_BINS, weights * fx * (1 - fy), size)
    total += np.bincount(flat + 1, weights * (1 - fx) * fy, size)
    total += np.bincount(flat + B_BINS + 1, weights * fx * fy, size)
    mass = total.sum()
    return np.asarray((total / mass if mass > 0 else total).reshape(A_BINS, B_BINS))


@cache
def _blur_matrix(bins: int, spread: float) -> Array:
    at = np.arange(bins) * STEP
    kernel = np.exp(-0.5 * ((at[:, None] - at[None]) / spread) ** 2)
    return np.asarray(kernel / np.exp(-0.5 * (np.arange(-bins, bins + 1) * STEP / spread) ** 2).sum())


def weights_from_log(log_weights: Array) -> Array:
    """Return weights that sum to 1 from logarithms of any offset, (..., C)."""
    weights = np.exp(log_weights - log_weights.max(axis=-1, keepdims=True))
    return np.asarray(weights / weights.sum(axis=-1, keepdims=True))


def light_from_weights(weights: Array) -> XY:
    """Return the mean light of a posterior as CIE 1931 xy.

    Parameters
    ----------
    weights : (C,) float64
        Sum to 1.

    Returns
    -------
    (x, y)
    """
    x, y = white.xy_from_linear(weights @ candidate_lights())
    return float(x), float(y)


def covariance(weights: Array) -> Array:
    """Return the covariance (2, 2) of a posterior in the log-opponent plane."""
    places = candidates()
    off = places - weights @ places
    return np.asarray((off * weights[:, None]).T @ off)


def angle_deg(light: Array, other: Array) -> Array:
    """Return the angle between lights of shape (..., 3) in degrees.

    Examples
    --------
    >>> float(angle_deg(np.array([1.0, 0, 0]), np.array([0, 2.0, 0])))
    90.0
    """
    dot, own, others = (
        np.einsum("...i,...i", *pair) for pair in ((light, other), (light, light), (other, other))
    )
    cosine = dot / np.sqrt(own * others)
    return np.asarray(np.degrees(np.arccos(np.clip(cosine, -1.0, 1.0))))
