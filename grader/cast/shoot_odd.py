"""Odd frames: when a frame keeps its own light against that of its stretch."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast import plane, shoot_course, vote
from grader.model import Cast

Array = NDArray[np.float64]

_ODD_SHARE: Final = 0.007
"""Share of frames that stand under another light than their neighbours and show it. (tuned on simulated shoots: a
frame that is followed wrongly is worse than an odd one that is not)"""
_STRETCH_SPREAD: Final = np.array([0.010, 0.020])
"""How far the best candidate of a frame lies from the light of its stretch, along a and b, although the light
is the same. (tuned on simulated shoots)"""
_LEAST_DEG: Final = 3.0
"""A frame whose own light is nearer than this to that of its stretch is not odd: its own doubt is as large.
(judgement)"""
_MOST_DOUBT_DEG: Final = 4.0
"""A frame with more doubt about its own light is not followed. (tuned on simulated shoots)"""
_CONTENT_FLAGS: Final = frozenset({"one-coloured", "coloured-light", "few-usable-pixels", "dark", "clipped"})
"""What makes a frame's own light worth little."""


@dataclass(frozen=True, slots=True)
class Oddness:
    """How a frame stands to the light of its stretch.

    ``probability`` that its light is another one; ``degrees`` between its own light and that of the stretch;
    ``pull`` the weight of its own light, 0 to 1.
    """

    probability: float
    degrees: float
    pull: float

    @property
    def odd(self) -> bool:
        """Return whether the frame disagrees so much that a reader should know."""
        return self.probability >= 0.5 and self.degrees >= _LEAST_DEG


def oddness(log_map: NDArray[np.float32], log_prior: Array, cast: Cast, stretch: Array) -> Oddness:
    """Weigh a frame's own vote against the light of its stretch.

    The frame's evidence under the light of its stretch stands against its evidence under any light.  Frames
    that show little besides one colour, or are unsure themselves, can disagree without another light: they
    are flagged, not followed.

    Parameters
    ----------
    log_map : (C,) float32
        From `shoot_course.log_robust`.
    log_prior : (C,) float64
    cast : Cast
        Of the frame, measured.
    stretch : (2,) float64
        The light of the stretch in the plane.

    Returns
    -------
    Oddness
    """
    evidence = np.exp(log_map.astype(np.float64)) - shoot_course.FLOOR
    off = (vote.candidates() - stretch) / _STRETCH_SPREAD
    near = vote.weights_from_log(-0.5 * (off**2).sum(axis=1))
    under_stretch = (1.0 - _ODD_SHARE) * float(near @ evidence)
    under_another = _ODD_SHARE * float(vote.weights_from_log(log_prior) @ evidence)
    probability = under_another / max(under_another + under_stretch, 1e-12)
    degrees = float(shoot_course.degrees_apart(plane.ab_from_xy(np.array(cast.white_xy)), stretch))
    sure = cast.doubt_deg is None or cast.doubt_deg <= _MOST_DOUBT_DEG
    followed = degrees >= _LEAST_DEG and sure and _CONTENT_FLAGS.isdisjoint(cast.flags)
    return Oddness(probability, degrees, _ramp(probability) if followed else 0.0)


def _ramp(probability: float) -> float:
    """Return 0 up to four to one and 1 from nineteen to one, as tuned on simulated shoots."""
    return min(max((probability - 0.8) / 0.15, 0.0), 1.0)
