"""Chromatic adaptation: the matrix that carries one white onto another."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import ArrayLike

from grader.colour import _tables
from grader.colour.white import xyz_from_xy
from grader.errors import PresetError
from grader.model import Matrix

TRANSFORMS: Final[dict[str, Matrix]] = {k: np.array(rows) for k, rows in _tables.CONE_FROM_XYZ.items()}
"""Cone-like responses from XYZ, by the transform's name."""

_LEAST_RESPONSE: Final = 1e-3
"""Floor of a white's response: very saturated lights lie outside some transforms' cones."""


def adaptation_matrix(
    from_xy: ArrayLike, toward_xy: ArrayLike, transform: str = "cat16", degree: float = 1.0
) -> Matrix:
    """Return the XYZ matrix carrying one white onto another.

    Each response is scaled by ``degree * toward / from + 1 - degree``: no adaptation at 0, full at 1.

    Parameters
    ----------
    from_xy, toward_xy : (2,) array_like
        The whites, CIE 1931 xy, both at Y = 1.
    transform : {"cat16", "bradford", "cat02", "von-kries"}
        The responses in which the gains act.
    degree : float
        Degree of adaptation, 0 to 1. [unitless]

    Returns
    -------
    (3, 3) float64
        Use as ``xyz @ m.T``.

    Raises
    ------
    PresetError
        The transform's name is unknown.

    References
    ----------
    .. [1] Li et al., "Comprehensive color solutions: CAM16, CAT16, and CAM16-UCS", Color Research &
       Application 42(6), 2017, doi:10.1002/col.22131 (CAT16).
    .. [2] ICC.1:2022, annex E (Bradford).
    .. [3] CIE 159:2004 (CAT02).

    Examples
    --------
    >>> warm = (0.4476, 0.4075)
    >>> white = adaptation_matrix(warm, (0.3127, 0.3290)) @ xyz_from_xy(warm)
    >>> white.round(4)
    array([0.9505, 1.    , 1.0891])
    """
    if transform not in TRANSFORMS:
        raise PresetError(
            f"there is no adaptation called {transform!r}", hint=f"choose one of {', '.join(TRANSFORMS)}"
        )
    cone_from_xyz = TRANSFORMS[transform]
    before, after = (
        np.maximum(cone_from_xyz @ xyz_from_xy(xy), _LEAST_RESPONSE) for xy in (from_xy, toward_xy)
    )
    gains = degree * (after / before) + 1.0 - degree
    return np.asarray(np.linalg.solve(cone_from_xyz, gains[:, None] * cone_from_xyz))
