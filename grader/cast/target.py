"""The grey row of a 24-patch target, found by the target's corners."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader.cast.patch import PatchLimits, PatchSample, angles_deg, measure_pixels, refuse_unfit, with_light
from grader.colour.white import linear_from_xy, xy_from_linear
from grader.errors import PresetError, TooFewUsablePixels
from grader.model import Frame, Matrix

Array = NDArray[np.float64]
Corners = Sequence[Sequence[float]]

GREY_ROW: Final = (
    ("white 9.5", (0.9152, 0.9143, 0.8785)),
    ("neutral 8", (0.5846, 0.5903, 0.5857)),
    ("neutral 6.5", (0.3569, 0.3606, 0.3598)),
    ("neutral 5", (0.1891, 0.1920, 0.1920)),
    ("neutral 3.5", (0.0880, 0.0897, 0.0909)),
    ("black 2", (0.0319, 0.0320, 0.0326)),
)
"""The six greys and what they reflect, in working light under D65: averages of 30 targets as colour-science
carries them ("BabelColor Average"), adapted from D50 by Bradford."""
_USED: Final = (1, 2, 3, 4)
"""White is tinted and often clipped, black mostly flare."""
_COLUMNS, _ROWS = 6, 4
_CORE: Final = 0.4
"""Share of the pitch that is measured: the middle of a patch, clear of its frame."""
_TARGET_TINT_DEG: Final = 0.25
"""How far a single target is from the average of many. (judgement)"""
_MOST_APART_DEG: Final = 3.0
"""Greys under one light agree better than this even with some flare. (judgement)"""


def sample_target(frame: Frame, corners: Corners, *, limits: PatchLimits | None = None) -> PatchSample:
    """Return the light that the grey row of a 24-patch target shows.

    The four middle greys count, each against what it reflects; white and black only prove the order.

    Parameters
    ----------
    frame : Frame
    corners : four (x, y)
        Outer corners of the 6 x 4 field of patches in pixels of the stored orientation, in this order: at
        dark skin, bluish green, black, white (clockwise from the top left when the grey row is at the bottom).
    limits : PatchLimits, optional
        What is refused in a single grey.

    Raises
    ------
    PresetError
        The corners make no field inside the frame, or there is no grey row at its foot.
    TooFewUsablePixels
        The patches are too small, clipped or too dark.
    """
    limits = PatchLimits(fewest_px=16) if limits is None else limits
    frame_from_field = field_homography(corners, frame)
    greys = [_grey(frame, frame_from_field, column, limits) for column in range(_COLUMNS)]
    row = {column: grey for column, grey in enumerate(greys) if grey is not None}
    _check_order(row, frame.header.file)
    lights = np.array([_light(row[column], column) for column in _USED])
    centre = lights.mean(axis=0)
    apart = float(np.sqrt(np.mean(angles_deg(lights, centre) ** 2)))
    if apart > _MOST_APART_DEG:
        raise PresetError(
            f"the greys of the target disagree by {apart:.1f} degrees",
            path=frame.header.file,
            hint="check the corners; flare or a second light on the target does this too",
        )
    x, y = xy_from_linear(centre)
    return with_light(
        replace(
            row[_USED[0]],
            light_xy=(float(x), float(y)),
            doubt_deg=math.hypot(apart / math.sqrt(len(_USED)), _TARGET_TINT_DEG),
            by="target",
            n=sum(row[column].n for column in _USED),
            box_px=_bounding_box(corners),
        )
    )


def field_homography(corners: Corners, frame: Frame) -> Matrix:
    """Return the (3, 3) projective map from the field, 6 wide and 4 high, to the frame's pixels.

    Raises
    ------
    PresetError
        The corners are not a convex field inside the frame, in either sense of rotation.
    """
    points = np.array([[float(v) for v in corner] for corner in corners])
    height_px, width_px = frame.pixels.shape[:2]
    if points.shape != (4, 2) or not np.isfinite(points).all():
        raise PresetError("a target needs four corners x,y", path=frame.header.file)
    if points.min() < 0 or (points > (width_px, height_px)).any():
        hint = f"the frame has {width_px} x {height_px} pixels"
        raise PresetError("a corner of the target is not inside the frame", path=frame.header.file, hint=hint)
    sides = np.roll(points, -1, axis=0) - points
    turns = sides[:, 0] * np.roll(sides[:, 1], -1) - sides[:, 1] * np.roll(sides[:, 0], -1)
    if not ((turns > 0).all() or (turns < 0).all()):
        hint = "give them around the field: at dark skin, bluish green, black, white"
        raise PresetError(
            "the corners of the target cross or lie on a line", path=frame.header.file, hint=hint
        )
    field = np.array([(0, 0), (_COLUMNS, 0), (_COLUMNS, _ROWS), (0, _ROWS)], np.float64)
    rows = []
    for (u, v), (x, y) in zip(field, points, strict=True):
        rows += [(u, v, 1, 0, 0, 0, -u * x, -v * x), (0, 0, 0, u, v, 1, -u * y, -v * y)]
    solved = np.linalg.solve(np.array(rows), points.ravel())
    return np.append(solved, 1.0).reshape(3, 3)


def _grey(frame: Frame, frame_from_field: Matrix, column: int, limits: PatchLimits) -> PatchSample | None:
    """Return one grey of the row; None for white or black where they cannot be measured."""
    name, _ = GREY_ROW[column]
    crop, inside = _core_of_patch(frame, frame_from_field, column)
    try:
        sample = measure_pixels(frame, crop, inside=inside, limits=limits, what=f"the target's {name}")
    except TooFewUsablePixels:
        if column in _USED:
            raise
        return None
    refuse_unfit(sample, limits, f"the target's {name}", frame.header.file)
    return sample


def _core_of_patch(
    frame: Frame, frame_from_field: Matrix, column: int
) -> tuple[NDArray[Any], NDArray[np.bool_]]:
    """Return the pixels around the middle of a grey, and which of them belong to it."""
    u, v, half = column + 0.5, _ROWS - 0.5, _CORE / 2
    quad = np.array([(u + a, v + b, 1.0) for a in (-half, half) for b in (-half, half)]) @ frame_from_field.T
    xy = quad[:, :2] / quad[:, 2:]
    (left, top), (right, bottom) = np.floor(xy.min(axis=0)).astype(int), np.ceil(xy.max(axis=0)).astype(int)
    crop = frame.pixels[top:bottom, left:right]
    ys, xs = np.mgrid[top : top + crop.shape[0], left : left + crop.shape[1]] + 0.5
    back = np.stack([xs, ys, np.ones_like(xs)], axis=-1) @ np.linalg.inv(frame_from_field).T
    place = np.abs(back[..., :2] / back[..., 2:] - (u, v))
    return crop, np.asarray((place <= half).all(axis=-1))


def _check_order(row: Mapping[int, PatchSample], path: str | None) -> None:
    """Raise unless the row gets darker from white to black, about as its greys do."""
    found = [grey.luminance for grey in row.values()]
    levels, expected = np.log(found), np.log([GREY_ROW[column][1][1] for column in row])
    if (np.diff(levels) >= 0).any() or np.ptp(levels) < 0.25 * np.ptp(expected):
        figures = ", ".join(f"{luminance:.3f}" for luminance in found)
        hint = "give the corners in the order dark skin, bluish green, black, white"
        raise PresetError(f"no grey row there (luminances {figures})", path=path, hint=hint)


def _light(grey: PatchSample, column: int) -> Array:
    """Return the light's direction (3,) by one grey, its own reflectance taken out."""
    light = np.asarray(linear_from_xy(grey.light_xy), np.float64) / np.array(GREY_ROW[column][1])
    return np.asarray(light / float(np.linalg.norm(light)))


def _bounding_box(corners: Corners) -> tuple[int, int, int, int]:
    xs, ys = [c[0] for c in corners], [c[1] for c in corners]
    left, top = math.floor(min(xs)), math.floor(min(ys))
    return left, top, math.ceil(max(xs)) - left, math.ceil(max(ys)) - top
