"""Measure the light of one frame."""

from __future__ import annotations

from dataclasses import replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast.cells import Cells, cells_from_proxy
from grader.cast.doubt import MOST_DEG, believed_light, doubt_deg
from grader.cast.flags import frame_flags, is_coloured, light_flags
from grader.cast.halves import halves_apart
from grader.cast.plane import GRID
from grader.cast.proxy import build_proxy, is_identity
from grader.cast.readings import read_lights
from grader.cast.vote import Vote, candidate_lights, cast_vote
from grader.colour.difference import grey_delta_e_2000
from grader.colour.opponent import cast_from_xy
from grader.colour.white import cct_duv_from_xy, mired_from_k, xy_from_linear
from grader.model import XY, Cast, Evidence, Frame, Proxy, Reading, Recipe

Array = NDArray[np.float64]

_FEWEST_CELLS: Final = 16
"""Fewer cells than this are no picture of a scene. (judgement)"""
_DAYLIGHT_SETTING: Final = 0.01
"""A recorded balance this near to daylight is taken for the fixed daylight setting, which tells nothing. (judgement)"""


def measure(frame: Frame, recipe: Recipe | None = None) -> Cast:
    """Return the light of one frame, and how sure it is.

    Parameters
    ----------
    frame : Frame
    recipe : Recipe, optional
        Only the opponent space, and what linear TIFFs hold, matter here.

    Returns
    -------
    Cast
        All numbers None, flagged ``nothing-measured``, where the frame has nothing to measure.

    Raises
    ------
    TooFewUsablePixels
        The frame has no pixel at all.
    """
    recipe = recipe or Recipe()
    return measure_proxy(build_proxy(as_told(frame, recipe)), recipe)


def as_told(frame: Frame, recipe: Recipe) -> Frame:
    """Return the frame, scene-referred if it is a linear floating-point TIFF and the recipe says that those are."""
    linear = frame.header.format == "tiff" and frame.pixels.dtype.kind == "f"
    if not linear or recipe.linear_tiff == "display" or not all(map(is_identity, frame.space.curves)):
        return frame
    return replace(frame, header=replace(frame.header, referred=recipe.linear_tiff))


def measure_proxy(proxy: Proxy, recipe: Recipe | None = None) -> Cast:
    """Return the light of one frame from its proxy (see `measure`)."""
    recipe = recipe or Recipe()
    flags = proxy.header.flags
    if "grey" in flags:
        return Cast(proxy.header, recipe.opponent, flags=flags)
    cells = cells_from_proxy(proxy)
    flags += frame_flags(proxy, cells)
    if np.count_nonzero(cells.ok) < _FEWEST_CELLS:
        return Cast(proxy.header, recipe.opponent, flags=(*flags, "few-usable-pixels", "nothing-measured"))
    referred = proxy.header.referred
    vote = cast_vote(cells, referred, _camera_light(proxy))
    halves = halves_apart(cells, referred)
    lights = read_lights(cells)
    unsure = doubt_deg(vote, cells, referred, proxy.clipped_fraction)
    doubt = MOST_DEG if is_coloured(lights) else unsure
    return replace(
        _cast(believed_light(vote.weights @ candidate_lights(), doubt, referred), proxy, recipe),
        doubt_deg=doubt,
        readings=_readings(lights, recipe),
        flags=flags + light_flags(cells, lights, halves, doubt),
        evidence=_evidence(vote, cells),
    )


def _cast(light: Array, proxy: Proxy, recipe: Recipe) -> Cast:
    x, y = xy_from_linear(light)
    xy: XY = (float(x), float(y))
    cct_k, duv = cct_duv_from_xy(xy)
    yellow_blue, green_magenta = cast_from_xy(xy, recipe.opponent)
    return Cast(
        header=proxy.header,
        opponent=recipe.opponent,
        yellow_blue=float(yellow_blue),
        green_magenta=float(green_magenta),
        white_xy=xy,
        cct_k=cct_k,
        duv=duv,
        mired=None if cct_k is None else float(mired_from_k(cct_k)),
        delta_e_2000=grey_delta_e_2000(xy),
    )


def _camera_light(proxy: Proxy) -> Array | None:
    """Return the light that the camera balanced for, None where it says nothing about this frame."""
    matrix = proxy.header.daylight_from_decoded
    if matrix is None or proxy.header.referred != "scene" or "balance-unusable" in proxy.header.flags:
        return None
    light = np.asarray(matrix @ np.ones(3), np.float64)
    if not np.isfinite(light).all() or light.min() <= 0:
        return None
    return None if np.ptp(light) < _DAYLIGHT_SETTING * light.max() else light


def _readings(lights: dict[str, Array], recipe: Recipe) -> dict[str, Reading]:
    return {name: Reading(*_cast_of(light, recipe)) for name, light in lights.items() if light.min() > 0}


def _cast_of(light: Array, recipe: Recipe) -> tuple[float, float]:
    x, y = xy_from_linear(light)
    xy: XY = (float(x), float(y))
    yellow_blue, green_magenta = cast_from_xy(xy, recipe.opponent)
    return float(yellow_blue), float(green_magenta)


def _evidence(vote: Vote, cells: Cells) -> Evidence:
    below_peak = (vote.log_likelihood.max() - vote.log_likelihood) * 16.0
    return Evidence(GRID, np.minimum(np.rint(below_peak), 255).astype(np.uint8), int(cells.ok.sum()))
