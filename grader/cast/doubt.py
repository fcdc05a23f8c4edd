"""How sure a measured light is: expected error in degrees, and what to tell the reader."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from grader.cast.vote import Vote, candidate_lights, weights_from_log

Array = NDArray[np.float64]

_INTERCEPT, _DATA_ALONE, _EDGES_ALONE, _SPREAD = 0.202, 0.230, 0.162, 0.479


def angle_deg(light: Array, other: Array) -> Array:
    """Return the angle between lights of shape (..., 3) in degrees.

    Examples
    --------
    >>> angle_deg(np.array([1.0, 0, 0]), np.array([0, 2.0, 0]))
    90.0
    """
    cosine = (light * other).sum(axis=-1) / (np.linalg.norm(light, axis=-1) * np.linalg.norm(other, axis=-1))
    return np.degrees(np.arccos(np.clip(cosine, -1.0, 1.0)))


def doubt_deg(vote: Vote) -> float:
    """Return the expected error of a vote's mean light.

    Grows with the spread of the posterior, and with how far the light moves when the prior or the grey
    cells are left out.

    Parameters
    ----------
    vote : Vote

    Returns
    -------
    float
        Expected recovery angle. [degrees]
    """
    lights = candidate_lights()
    mean = vote.weights @ lights
    data = weights_from_log(vote.log_likelihood) @ lights
    edges = weights_from_log(vote.edge + vote.log_prior) @ lights
    spread = vote.weights @ angle_deg(lights, mean)
    return float(
        np.exp(
            _INTERCEPT
            + _DATA_ALONE * np.log(angle_deg(data, mean) + 0.3)
            + _EDGES_ALONE * np.log(angle_deg(edges, mean) + 0.3)
            + _SPREAD * np.log(spread + 0.1)
        )
    )
