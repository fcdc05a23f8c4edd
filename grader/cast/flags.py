"""What a reader should know about a measured frame, as flag codes of `grader.model.FLAGS`."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast import plane
from grader.cast.cells import Cells
from grader.cast.doubt import colour_spread
from grader.cast.halves import TWO_LIGHTS
from grader.cast.vote import angle_deg
from grader.colour import white
from grader.model import Proxy

Array = NDArray[np.float64]

# Thresholds are judgement; docs/MEASURING.md tells how often each flag fires (benchmarks/light_flags.py).
_FEW_CELLS, _FEW_SHARE = 256, 0.25
_CLIPPED_SHARE: Final = 0.15
_DARK_SHARE, _DARK_LUMINANCE = 0.5, 0.02
_DISAGREE_DEG: Final = 15.0
_ONE_COLOUR: Final = 0.015
_HIGH_DOUBT_DEG: Final = 4.5
_OUTSIDE_READINGS: Final = 3


def frame_flags(proxy: Proxy, cells: Cells) -> tuple[str, ...]:
    """Return the flags that need no light: ``clipped`` and ``dark``."""
    lit = cells.luminance[cells.ok]
    dim = lit.size > 0 and np.percentile(lit, 90) < _DARK_LUMINANCE
    tests = {
        "clipped": proxy.clipped_fraction > _CLIPPED_SHARE,
        "dark": dim or proxy.dark_fraction > _DARK_SHARE,
    }
    return tuple(flag for flag, true in tests.items() if true)


def light_flags(
    cells: Cells, readings: Mapping[str, Array], halves: float, doubt_deg: float
) -> tuple[str, ...]:
    """Return the flags that concern the light.

    Parameters
    ----------
    cells : Cells
    readings : mapping of str to (3,) float64
        The light that each classical method sees. [working light]
    halves : float
        How far the frame's halves disagree, from `grader.cast.halves.halves_apart`.
    doubt_deg : float
        Doubt of the measured light. [degrees]
    """
    tests = {
        "few-usable-pixels": cells.ok.sum() < _FEW_CELLS or cells.ok.mean() < _FEW_SHARE,
        "readings-disagree": _widest_deg(readings) > _DISAGREE_DEG,
        "coloured-light": is_coloured(readings),
        "one-coloured": colour_spread(cells) < _ONE_COLOUR,
        "two-lights": halves > TWO_LIGHTS,
        "high-doubt": doubt_deg > _HIGH_DOUBT_DEG,
    }
    return tuple(flag for flag, true in tests.items() if true)


def is_coloured(readings: Mapping[str, Array]) -> bool:
    """Return whether nearly all methods see a light that the vote does not even consider."""
    return sum(map(is_outside, readings.values())) >= _OUTSIDE_READINGS


def is_outside(light: Array) -> bool:
    """Return whether a light lies outside everything that lamps and daylight look like."""
    if not np.isfinite(light).all() or light.min() <= 0:
        return True
    mired, duv = plane.mired_duv_from_xy(white.xy_from_linear(light)[None])
    return not plane.is_plausible(mired, duv)[0]


def _widest_deg(readings: Mapping[str, Array]) -> float:
    lights = np.array([light for light in readings.values() if np.linalg.norm(light) > 0])
    return float(angle_deg(lights[:, None], lights[None]).max()) if len(lights) else 0.0
