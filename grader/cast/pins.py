"""Pins: lights known from a grey card hold their stretch and show a body's bias in all others."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast import plane
from grader.cast.shoot_lights import Stretch
from grader.cast.stretches import Light
from grader.model import XY, Cast, Referred

Array = NDArray[np.float64]

_BIAS_SPREAD: Final = np.array([0.005, 0.007])
"""Standard deviation of a body's bias along a and b: what cameras with measured charts differ by. (judgement)"""
_STRETCH_ERROR: Final = np.array([0.0025, 0.006])
"""What a pooled stretch errs by besides the bias of its body. (from simulated shoots)"""


def apply_pins(casts: Sequence[Cast], found: Sequence[Stretch], pins: Mapping[int, XY]) -> list[Stretch]:
    """Return the stretches with their lights held by what is known.

    A stretch with a pin takes the pinned light, its drift as measured.  What the pins show of a body's
    bias is taken out of the lights of all its other stretches, as far as one stretch's error lets it be known.

    Parameters
    ----------
    casts : sequence of Cast
    found : sequence of Stretch
    pins : mapping of int to XY
        Known light of frames, by place, at the camera's daylight setting.

    Returns
    -------
    list of Stretch
    """
    known = {place: plane.ab_from_xy(np.array(xy)) for place, xy in pins.items()}
    biases = _biases(casts, found, known)
    return [_held(stretch, known) or _without_bias(casts, stretch, biases) for stretch in found]


def _inside(stretch: Stretch, known: Mapping[int, Array]) -> list[tuple[int, Array]]:
    """Return the pins of a stretch as (frame of the stretch, place)."""
    return [(at, known[int(row)]) for at, row in enumerate(stretch.rows) if int(row) in known]


def _held(stretch: Stretch, known: Mapping[int, Array]) -> Stretch | None:
    pins = _inside(stretch, known)
    if not pins:
        return None
    count = len(stretch.rows)
    if stretch.light is None:
        centre = np.mean([place for _, place in pins], axis=0)
        light = Light(centre, np.zeros((count, 2)), np.zeros(0), "steady")
        return replace(stretch, light=light, pinned=True)
    carried = [place - stretch.light.moves[at] - stretch.steps[at] for at, place in pins]
    return replace(stretch, light=replace(stretch.light, centre=np.mean(carried, axis=0)), pinned=True)


def _biases(
    casts: Sequence[Cast], found: Sequence[Stretch], known: Mapping[int, Array]
) -> dict[tuple[str, Referred], Array]:
    """Return the bias of each body that has a pin, shrunk by how well it is known."""
    seen: dict[tuple[str, Referred], list[Array]] = {}
    for stretch in found:
        if stretch.light is None:
            continue
        own: dict[str, list[Array]] = {}
        for at, place in _inside(stretch, known):
            own.setdefault(casts[stretch.rows[at]].header.body, []).append(stretch.places[at] - place)
        for body, offsets in own.items():
            seen.setdefault((body, stretch.referred), []).append(np.mean(offsets, axis=0))
    return {
        key: np.mean(offsets, axis=0) * _BIAS_SPREAD**2 / (_BIAS_SPREAD**2 + _STRETCH_ERROR**2 / len(offsets))
        for key, offsets in seen.items()
    }


def _without_bias(
    casts: Sequence[Cast], stretch: Stretch, biases: Mapping[tuple[str, Referred], Array]
) -> Stretch:
    """Return the stretch with the mean bias of its bodies' frames taken out; bodies without a pin follow the others."""
    keys = [(casts[row].header.body, stretch.referred) for row in stretch.rows]
    told = [biases[key] for key in keys if key in biases]
    if not told or stretch.light is None:
        return stretch
    centre = stretch.light.centre - np.mean(told, axis=0)
    return replace(stretch, light=replace(stretch.light, centre=centre), unbiased=True)
