"""How sure a measured light is: expected error in degrees, and what to tell the reader."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast.cells import Cells
from grader.cast.vote import Vote, angle_deg, candidate_lights, weights_from_log
from grader.model import Referred

Array = NDArray[np.float64]

_FITTED: Final[dict[Referred, tuple[float, ...]]] = {
    "scene": (-0.272, 0.235, 0.310, 0.655, -0.150),
    "display": (-0.762, 0.308, 0.014, 0.979, -0.090),
}
"""Intercept, then one factor a sign. (fitted: benchmarks/light_fit.py DATA doubt)"""


_LEAVE_BELOW, _BELIEVE_ABOVE = 0.8, 1.2
"""Casts of a finished picture, in units of their doubt, that are left alone and that are believed whole.
(judgement: with these no packaged photograph under a cast of 40 mired or more ends worse than it began)"""
_FLAT, _NOISE = 0.004, 0.4
_CLIPPED_DEG: Final = 15.0
"""Expected error of a frame of which nearly all is clipped; what was cut off may have been the light itself. (judgement)"""
MOST_DEG: Final = 12.0
"""The lights of a shoot lie about so far apart: not to know the light at all is no worse. (judgement)"""


def signs(vote: Vote, cells: Cells) -> Array:
    """Return the signs that a measured light may be wrong, as logarithms.

    How far the light moves when the prior is left out, and when the surface colours are; how wide the
    posterior is; and how varied the colours of the frame are.

    Parameters
    ----------
    vote : Vote
    cells : Cells
        Those that voted.

    Returns
    -------
    (4,) float64
    """
    lights = candidate_lights()
    mean = vote.weights @ lights
    data = weights_from_log(vote.log_likelihood) @ lights
    no_surfaces = weights_from_log(vote.parts[[0, 2]].sum(axis=0) + vote.log_prior) @ lights
    found = np.array(
        [
            angle_deg(data, mean) + 0.3,
            angle_deg(no_surfaces, mean) + 0.3,
            vote.weights @ angle_deg(lights, mean) + 0.1,
            colour_spread(cells) + 0.005,
        ],
        np.float64,
    )
    return np.asarray(np.log(found))


def colour_spread(cells: Cells) -> float:
    """Return the standard deviation of the cells' colours in the log-opponent plane."""
    return float(np.sqrt(cells.ab[cells.ok].var(axis=0).sum()))


def is_no_picture(cells: Cells) -> bool:
    """Return whether a frame is noise or one flat colour, which says nothing about the light.

    Neighbouring cells of photographs are alike in brightness (correlation 0.64 at the least in 568 of them, 0 in
    noise), and their colours vary (standard deviation 0.0046 at the least).
    """
    if colour_spread(cells) < _FLAT:
        return True
    log_y = np.log(cells.luminance)
    down, right = cells.pairs(0), cells.pairs(1)
    first = np.concatenate([log_y[:-1][down], log_y[:, :-1][right]])
    second = np.concatenate([log_y[1:][down], log_y[:, 1:][right]])
    if len(first) < 2 or min(np.ptp(first), np.ptp(second)) == 0:
        return True
    return float(np.corrcoef(first, second)[0, 1]) < _NOISE


def doubt_deg(vote: Vote, cells: Cells, referred: Referred, clipped_fraction: float = 0.0) -> float:
    """Return the expected error of a vote's mean light.

    Parameters
    ----------
    vote : Vote
    cells : Cells
        Those that voted.
    referred : 'scene' or 'display'
    clipped_fraction : float
        Share of the frame that is clipped and therefore had no vote.

    Returns
    -------
    float
        Expected recovery angle. [degrees]
    """
    if is_no_picture(cells):
        return MOST_DEG
    intercept, *factors = _FITTED[referred]
    expected = float(np.exp(intercept + signs(vote, cells) @ np.array(factors)))
    return min(float(np.hypot(expected, _CLIPPED_DEG * clipped_fraction)), MOST_DEG)


def believed_light(light: Array, doubt_deg: float, referred: Referred) -> Array:
    """Return the light to act on: in a finished picture, a cast that is no larger than its doubt is none.

    Somebody balanced a display-referred picture already, so the burden of proof lies with the measurement.
    The light of a scene-referred frame is returned as it is.

    Parameters
    ----------
    light : (3,) float64
        Mean light of the vote. [working light]
    doubt_deg : float
        Its doubt. [degrees]
    referred : 'scene' or 'display'

    Returns
    -------
    (3,) float64
        Of unit length.
    """
    unit = light / np.linalg.norm(light)
    if referred == "scene":
        return np.asarray(unit)
    neutral = np.full(3, 3.0**-0.5)
    size = float(angle_deg(unit, neutral)) / doubt_deg
    share = np.clip((size - _LEAVE_BELOW) / (_BELIEVE_ABOVE - _LEAVE_BELOW), 0.0, 1.0)
    return np.asarray(neutral + share * (unit - neutral))
