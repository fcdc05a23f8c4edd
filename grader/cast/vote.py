"""The vote: evidence maps over the plausible lights, a prior, and the light that they agree on."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast import plane
from grader.cast.cells import Cells
from grader.cast.plane import A_BINS, A_START, B_BINS, B_START, STEP
from grader.colour import white
from grader.model import XY, Referred

Array = NDArray[np.float64]

_FLOOR: Final = 4e-6
_GREY_WEIGHT, _EDGE_WEIGHT = 0.9, 1.25
_GREY_BLUR, _EDGE_BLUR = 0.006, 0.02
_GREY_SHARPNESS: Final = 10.0
_EDGE_SHIFT: Final = {"scene": 0.03, "display": 0.07}


@dataclass(frozen=True, slots=True, eq=False)
class Vote:
    """What the cells say about the candidates.

    ``grey`` and ``edge`` (C,) are the two evidences' log-likelihoods, ``log_likelihood`` their sum,
    ``log_prior`` the prior, ``weights`` the posterior (sums to 1).
    """

    grey: Array
    edge: Array
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
    return np.log(density / density.sum())


def _bump(x: Array, centre: float, spread: float | Array) -> Array:
    return np.asarray(np.exp(-0.5 * ((x - centre) / spread) ** 2))


def _scene_prior(mired: Array, duv: Array) -> Array:
    daylight = _bump(mired, 175.0, np.where(mired > 175.0, 20.0, 40.0)) / 30.0
    anything = _bump(mired, 182.0, 140.0) / 140.0
    return np.asarray((0.7 * daylight + 0.3 * anything + 1e-6) * _bump(duv, 0.0005, 0.007))


def _display_prior(mired: Array, duv: Array) -> Array:
    def around_white(spread_mired: float, spread_duv: float) -> Array:
        near = _bump(mired, 154.0, spread_mired) * _bump(duv, 0.0032, spread_duv)
        return np.asarray(near / near.sum())

    return np.asarray(
        0.3 * around_white(6.0, 0.001)
        + 0.63 * around_white(35.0, 0.006)
        + 0.07 * around_white(105.0, 0.015)
        + 1e-9
    )


def cast_vote(cells: Cells, referred: Referred) -> Vote:
    """Return what the cells of one frame say about every candidate light.

    Parameters
    ----------
    cells : Cells
    referred : 'scene' or 'display'

    Returns
    -------
    Vote
    """
    grey = _GREY_WEIGHT * np.log(grey_map(cells) + _FLOOR)
    edge = _EDGE_WEIGHT * np.log(edge_map(cells, _EDGE_SHIFT[referred]) + _FLOOR)
    prior = log_prior(referred)
    return Vote(grey, edge, grey + edge, prior, weights_from_log(grey + edge + prior))


def grey_map(cells: Cells) -> Array:
    """Return the votes of cells that look grey: brightness changes around them, colour does not.

    Parameters
    ----------
    cells : Cells

    Returns
    -------
    (C,) float64
        Share of the votes at each candidate.
    """
    corner = cells.pairs(0)[:, :-1] & cells.pairs(1)[:-1]
    log_y = np.log(cells.luminance)
    down, right = np.diff(log_y, axis=0)[:, :-1], np.diff(log_y, axis=1)[:-1]
    luminance_change = np.abs(down) + np.abs(right)
    colour_change = 3.0 * (
        np.linalg.norm(np.diff(cells.ab, axis=0)[:, :-1], axis=-1)
        + np.linalg.norm(np.diff(cells.ab, axis=1)[:-1], axis=-1)
    )
    weight = cells.luminance[:-1, :-1] * luminance_change
    weight = weight * np.exp(-_GREY_SHARPNESS * colour_change / (luminance_change + 1e-4))
    return _spread(cells.ab[:-1, :-1][corner], weight[corner], _GREY_BLUR)


def edge_map(cells: Cells, shift: float) -> Array:
    """Return the votes of edges where all three channels move the same way.

    Parameters
    ----------
    cells : Cells
    shift : float
        How much warmer than the light such edges are on average, along b.

    Returns
    -------
    (C,) float64
    """
    places, weights = [], []
    for axis in (0, 1):
        step = np.diff(cells.linear, axis=axis)[cells.pairs(axis)]
        step = np.abs(step[(step > 0).all(axis=1) | (step < 0).all(axis=1)])
        places.append(plane.ab_from_linear(step))
        weights.append(step @ plane.XYZ_FROM_REC2020[1])
    return _spread(np.concatenate(places) - [0.0, shift], np.concatenate(weights), _EDGE_BLUR)


def _spread(places: Array, weights: Array, blur: float) -> Array:
    """Return weighted places as a normalised, smoothed histogram, read at the candidates."""
    histogram = _splat(places, weights)
    total = histogram.sum()
    if total <= 0:
        return np.full(len(candidates()), 1.0 / histogram.size)
    smooth = _blur_matrix(A_BINS, blur) @ (histogram / total) @ _blur_matrix(B_BINS, blur)
    return np.asarray(smooth.ravel()[plane.candidate_bins()])


def _splat(places: Array, weights: Array) -> Array:
    """Return a histogram on the grid, each vote shared bilinearly among the four nearest bins."""
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
    return np.asarray(total.reshape(A_BINS, B_BINS))


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
