"""Whether the halves of a frame see the same light."""

from __future__ import annotations

from dataclasses import replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader.cast.cells import Cells
from grader.cast.vote import angle_deg, candidate_lights, cast_vote
from grader.model import Referred

Array = NDArray[np.float64]

TWO_LIGHTS: Final = 1.8
"""From here two lights are suspected. (judgement; rates in docs/MEASURING.md)"""
_FEWEST: Final = 128


def halves_apart(cells: Cells, referred: Referred) -> float:
    """Return how far the lights of left and right, or of top and bottom, lie apart, in units of their spread.

    Parameters
    ----------
    cells : Cells
    referred : 'scene' or 'display'

    Returns
    -------
    float
        The larger of the two; 0 where the halves hold too few cells.
    """
    h, w = cells.ok.shape
    pairs = ((np.s_[:, : w // 2], np.s_[:, (w + 1) // 2 :]), (np.s_[: h // 2], np.s_[(h + 1) // 2 :]))
    return max(_apart(_part(cells, one), _part(cells, other), referred) for one, other in pairs)


def _part(cells: Cells, where: Any) -> Cells:
    return replace(
        cells,
        linear=cells.linear[where],
        luminance=cells.luminance[where],
        ab=cells.ab[where],
        ok=cells.ok[where],
    )


def _apart(one: Cells, other: Cells, referred: Referred) -> float:
    if min(one.ok.sum(), other.ok.sum()) < _FEWEST:
        return 0.0
    (light, spread), (second, second_spread) = _light(one, referred), _light(other, referred)
    return float(angle_deg(light, second) / (spread + second_spread + 1.0))


def _light(cells: Cells, referred: Referred) -> tuple[Array, float]:
    lights, weights = candidate_lights(), cast_vote(cells, referred).weights
    mean = weights @ lights
    return mean, float(weights @ angle_deg(lights, mean))
