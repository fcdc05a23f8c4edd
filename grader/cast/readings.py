"""The classical readings: what one published method makes of one frame.

References
----------
.. [1] G. Buchsbaum, "A spatial processor model for object colour perception", J. Franklin Inst. 310, 1980
   (grey-world).
.. [2] E. H. Land, "The retinex theory of color vision", Scientific American 237(6), 1977 (white-patch).
.. [3] G. D. Finlayson and E. Trezzi, "Shades of gray and colour constancy", CIC 12, 2004.
.. [4] J. van de Weijer, T. Gevers and A. Gijsenij, "Edge-based color constancy", IEEE TIP 16(9), 2007,
   doi:10.1109/TIP.2007.901808 (grey-edge).
"""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast.cells import Cells

Array = NDArray[np.float64]

_WHITE_PERCENTILE: Final = 97.0
"""High enough to be light, low enough not to be one lamp in the picture. (common practice)"""
_SHADES_NORM: Final = 6.0
"""The Minkowski norm that its authors found best."""


def read_lights(cells: Cells) -> dict[str, Array]:
    """Return the light that each method sees.

    Parameters
    ----------
    cells : Cells
        At least one must be usable.

    Returns
    -------
    dict of str to (3,) float64
        Working light, any scale; a channel may be zero or negative when the method fails.
    """
    used = cells.linear[cells.ok]
    return {
        "grey-world": used.mean(axis=0),
        "white-patch": np.percentile(used, _WHITE_PERCENTILE, axis=0),
        "shades-of-grey": _minkowski(used),
        "grey-edge": _edges(cells),
    }


def _minkowski(used: Array) -> Array:
    positive = np.maximum(used, 0.0)
    top = max(float(positive.max()), 1e-300)
    return np.asarray(top * ((positive / top) ** _SHADES_NORM).mean(axis=0) ** (1 / _SHADES_NORM))


def _edges(cells: Cells) -> Array:
    """Return the mean absolute difference between neighbours, first derivative, both directions."""
    total = np.zeros(3)
    for axis in (0, 1):
        both = cells.pairs(axis)
        total += np.abs(np.diff(cells.linear, axis=axis))[both].sum(axis=0)
    return total
