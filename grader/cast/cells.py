"""The few thousand cells of a proxy that vote on the light."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast import plane
from grader.cast.plane import AB_FROM_LOG_LMS, LMS_FROM_REC2020
from grader.cast.proxy_loops import sum_boxes
from grader.model import Proxy

Array = NDArray[np.float64]

CELLS: Final = 4096
"""About as many cells vote, whatever the frame's size; more gave the same lights, only slower."""
_USABLE_SHARE: Final = 0.5
"""A cell that is more than half clipped, black or empty does not vote."""


@dataclass(frozen=True, slots=True, eq=False)
class Cells:
    """Cells of a proxy in working light and in the log-opponent plane.

    ``linear`` (h, w, 3) working light; ``luminance`` (h, w); ``ab`` (h, w, 2) log-opponent chromaticity;
    ``ok`` (h, w) bool: which may vote.  Where not ``ok`` the others hold finite, meaningless values.
    """

    linear: Array
    luminance: Array
    ab: Array
    ok: NDArray[np.bool_]

    def pairs(self, axis: int) -> NDArray[np.bool_]:
        """Return where a cell and its lower (axis 0) or right (axis 1) neighbour may both vote."""
        if axis == 0:
            return np.asarray(self.ok[1:] & self.ok[:-1])
        return np.asarray(self.ok[:, 1:] & self.ok[:, :-1])


def cells_from_proxy(proxy: Proxy, target: int = CELLS) -> Cells:
    """Return the cells that vote: box averages of the proxy's usable parts.

    Parameters
    ----------
    proxy : Proxy
    target : int
        About how many cells; a proxy that is smaller stays as it is.

    Returns
    -------
    Cells
    """
    linear, usable = _box_average(proxy, target)
    lms = linear @ LMS_FROM_REC2020.T
    luminance = plane.luminance(linear)
    ok = (usable >= _USABLE_SHARE) & (lms.min(axis=-1) > 0) & (luminance > 0)
    ab = np.log(np.where(ok[..., None], lms, 1.0)) @ AB_FROM_LOG_LMS.T
    return Cells(linear, np.where(ok, luminance, 1.0), ab, ok)


def _box_average(proxy: Proxy, target: int) -> tuple[Array, Array]:
    h, w = proxy.usable.shape
    side = max(round((h * w / target) ** 0.5), 1)
    if side == 1:
        return proxy.linear.astype(np.float64), proxy.usable.astype(np.float64)
    total, share, area = sum_boxes(proxy.linear, proxy.usable, side)
    return total / np.where(share > 0, share, 1.0)[..., None], share / area
