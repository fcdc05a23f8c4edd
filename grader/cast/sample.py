"""The light that a known neutral shows: a patch of a frame, several of them, or a whole measured frame.

Pure functions on frames and casts.  The light is stated at the camera's daylight setting, as every
measured light is.
"""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from grader.cast.box import parse_box, pixels_of_box, stored_box
from grader.cast.correction import aim_xy, angle_deg, kept_xy
from grader.cast.patch import (
    CARD_TINT_DEG,
    PatchLimits,
    PatchSample,
    angles_deg,
    direction,
    measure_pixels,
    refuse_unfit,
    with_light,
)
from grader.colour.white import xy_from_linear
from grader.errors import PresetError, TooFewUsablePixels
from grader.model import Cast, Fixed, Frame, Header, Recipe

__all__ = [
    "PatchLimits",
    "PatchSample",
    "fixed_from_sample",
    "parse_box",
    "robust_mean",
    "sample_hero",
    "sample_patch",
    "stored_box",
]

Array = NDArray[np.float64]
_ONE_LIGHT_DEG = 3.0
"""Samples farther than this from the middle show another light. (judgement)"""


def sample_patch(
    frame: Frame,
    box: Sequence[float],
    *,
    limits: PatchLimits | None = None,
    cast: Cast | None = None,
) -> PatchSample:
    """Return the light that a neutral patch of a frame shows.

    Parameters
    ----------
    frame : Frame
    box : (x, y, width, height)
        Whole numbers are pixels in the stored orientation; with any fraction among them all four are
        shares of the frame's width and height.
    limits : PatchLimits, optional
        What is refused.
    cast : Cast, optional
        What the frame as a whole was measured to be: a note tells when the patch is far from it.

    Raises
    ------
    PresetError
        The patch is not inside the frame, is textured or coloured; the message has the figures.
    TooFewUsablePixels
        The patch is too small, clipped or too dark.

    Examples
    --------
    >>> frame = Frame.from_array(np.full((40, 60, 3), (128, 120, 90), np.uint8))
    >>> sample = sample_patch(frame, (10, 10, 20, 20))
    >>> sample.n, [round(v, 3) for v in sample.light_xy]
    (400, [0.359, 0.386])
    """
    limits = PatchLimits() if limits is None else limits
    x, y, width, height = pixels_of_box(box, frame.header, frame.pixels.shape[:2])
    crop = frame.pixels[y : y + height, x : x + width]
    sample = measure_pixels(frame, crop, limits=limits, what=f"the patch {x},{y},{width},{height}")
    sample = replace(sample, box_px=(x, y, width, height))
    refuse_unfit(sample, limits, f"the patch {x},{y},{width},{height}", frame.header.file)
    return sample if cast is None else _compared(sample, cast)


def robust_mean(samples: Sequence[PatchSample]) -> PatchSample:
    """Return the light on which most samples agree; a few stray ones count little.

    The geometric median of the lights' directions in working light, each weighted by one over its doubt.

    Raises
    ------
    PresetError
        There is no sample, or they show no common light.

    References
    ----------
    .. [1] Weiszfeld and Plastria, "On the point for which the sum of the distances to n given points is
       minimum", Annals of Operations Research 167, 2009, doi:10.1007/s10479-008-0352-z.

    Examples
    --------
    >>> warm, warmer, stray = (PatchSample((x, 0.36), 0.5) for x in (0.340, 0.341, 0.43))
    >>> round(robust_mean([warm, warmer, stray, warm]).light_xy[0], 3)
    0.34
    """
    if not samples:
        raise PresetError("no sample to take a mean of", hint="give at least one frame or patch")
    if len(samples) == 1:
        return samples[0]
    lights = np.array([direction(s.light_xy) for s in samples])
    weights = 1.0 / np.maximum([s.doubt_deg for s in samples], 0.1)
    centre = _geometric_median(lights, weights)
    apart = angles_deg(lights, centre)
    near = apart <= _ONE_LIGHT_DEG
    agreeing = int(near.sum())
    if 2 * agreeing <= len(samples):
        raise PresetError(
            f"the {len(samples)} samples show no common light: {np.median(apart):.1f} degrees from the middle",
            hint="take frames under one light, or make a preset of each",
        )
    spread = float(np.sqrt(np.mean(apart[near] ** 2)))
    own = max(CARD_TINT_DEG, float(np.mean([s.doubt_deg for s in samples])) / math.sqrt(agreeing))
    strays = len(samples) - agreeing
    notes = (f"{strays} of {len(samples)} samples show another light and count little",) if strays else ()
    x, y = xy_from_linear(centre)
    return with_light(
        PatchSample(
            light_xy=(float(x), float(y)),
            doubt_deg=math.sqrt(spread**2 / agreeing + own**2),
            by="frames",
            n=len(samples),
            notes=notes,
        )
    )


def sample_hero(cast: Cast) -> PatchSample:
    """Return the measured light of a whole frame as a sample.

    Raises
    ------
    TooFewUsablePixels
        Nothing was measured in that frame.
    """
    if cast.white_xy is None or cast.doubt_deg is None:
        raise TooFewUsablePixels(
            "no light could be measured in the frame",
            path=cast.header.file,
            hint="take another one, or give a patch",
        )
    note = "estimated from the picture's content: a grey card in the same light would be surer"
    return with_light(
        PatchSample(light_xy=cast.white_xy, doubt_deg=cast.doubt_deg, by="frame", n=1, notes=(note,))
    )


def fixed_from_sample(
    sample: PatchSample, recipe: Recipe | None = None, header: Header | None = None
) -> Fixed:
    """Return the fixed correction that a sample asks for.

    Parameters
    ----------
    sample : PatchSample
    recipe : Recipe, optional
        Where to aim, what to keep, by which transform, and the output.
    header : Header, optional
        Of the frame it was measured on.

    Examples
    --------
    >>> fixed_from_sample(PatchSample((0.44, 0.40), 0.5)).toward_xy
    (0.3127, 0.329)
    """
    recipe = Recipe() if recipe is None else recipe
    header = Header() if header is None else header
    light = (round(sample.light_xy[0], 6), round(sample.light_xy[1], 6))
    x, y = kept_xy(light, aim_xy(recipe.toward), recipe)
    return Fixed(
        from_xy=light,
        toward_xy=(float(x), float(y)),
        adaptation=recipe.adaptation,
        degree=recipe.degree,
        keep_yellow_blue=recipe.keep_yellow_blue,
        keep_green_magenta=recipe.keep_green_magenta,
        output=recipe.output,
        measured_on_body=header.body,
        measured_doubt_deg=round(sample.doubt_deg, 3),
        measured_by=sample.by,
        measured_on_file=_file_name(header.file),
        measured_on_sha256=header.sha256 or "",
        measured_patch_px=sample.box_px,
        measured_referred=header.referred,
    )


def _compared(sample: PatchSample, cast: Cast) -> PatchSample:
    if cast.white_xy is None or cast.doubt_deg is None:
        return sample
    apart = angle_deg(direction(sample.light_xy), direction(cast.white_xy))
    if apart <= 2.0 * cast.doubt_deg + 1.0:
        return sample
    note = f"the patch lies {apart:.1f} degrees from what the whole frame suggests: make sure that it is grey"
    return replace(sample, notes=(*sample.notes, note))


def _geometric_median(points: Array, weights: Array) -> Array:
    centre = np.average(points, axis=0, weights=weights)
    if len(points) == 2:
        return np.asarray(centre)
    for _ in range(200):
        distance = np.linalg.norm(points - centre, axis=1)
        pull = weights / np.maximum(distance, 1e-9)
        moved = np.average(points, axis=0, weights=pull)
        if np.linalg.norm(moved - centre) < 1e-12:
            break
        centre = moved
    return np.asarray(centre)


def _file_name(path: str | None) -> str:
    """Return the last part of a path of either kind."""
    return re.split(r"[/\\]", path)[-1] if path else ""
