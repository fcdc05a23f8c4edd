"""Find a grey card in a frame, or say that there is none to be sure of."""

from __future__ import annotations

import contextlib
import math
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader.cast import plane
from grader.cast.box import Box
from grader.cast.measure import measure_proxy
from grader.cast.patch import PatchSample, angles_deg, direction
from grader.cast.proxy import build_proxy, cell_width
from grader.cast.sample import sample_patch
from grader.colour.spaces import SRGB_CURVE, linear_variant, space_by_name
from grader.colour.transfer import encode
from grader.errors import GraderError, PresetError, TooFewUsablePixels
from grader.model import Cast, Frame, Proxy

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# All figures below are judgements, tried on packaged photographs with and without a pasted card.
_EDGE_LOG: Final = 0.06
"""A step of luminance or of a colour ratio between cells two apart that counts as an edge. [natural log]"""
_LEAST_SHARE, _MOST_SHARE = 0.002, 0.35
"""Area of a card. [share of the frame]"""
_LEAST_SIDE: Final = 8
"""Shorter side of a card. [cells of the proxy]"""
_RECTANGULAR: Final = 0.86
"""Share of its smallest surrounding rectangle that a card fills; a triangle fills half, an ellipse 0.79."""
_SET_OFF: Final = 0.85
"""Share of a card's surroundings that differ from it visibly."""
_SET_OFF_LOG: Final = 0.12
_SAME_LIGHT_DEG: Final = 2.5
_MOST_DOUBTS: Final = 2.5
"""How far from the frame's own measurement a card's light may lie. [times the measurement's doubt]"""
_LEAST_DOUBT_DEG: Final = 1.5


@dataclass(frozen=True, slots=True, eq=False)
class GreyCard:
    """A grey card that was found: its light and place, and a small picture to check it by.

    ``picture`` is (h, w, 3) uint8, sRGB, in the stored orientation, with a line around the measured box.
    """

    sample: PatchSample
    picture: NDArray[np.uint8]

    @property
    def box_px(self) -> Box:
        """The measured box: x, y, width, height in pixels of the stored orientation."""
        box = self.sample.box_px
        return (0, 0, 0, 0) if box is None else box


@dataclass(frozen=True, slots=True)
class _Candidate:
    sample: PatchSample
    doubts: float
    """Distance of its light from the frame's own measurement. [times the doubt]"""


def find_grey_card(frame: Frame, cast: Cast | None = None) -> GreyCard:
    """Return the grey card in a frame: a flat, unclipped, near-neutral rectangle that stands apart.

    A tidy grey or white sheet passes for a card too: look at the picture.

    Parameters
    ----------
    frame : Frame
    cast : Cast, optional
        The frame's own measurement, if it was made already.

    Raises
    ------
    PresetError
        No rectangle qualifies, or several do and show different lights.
    TooFewUsablePixels
        Nothing in the frame can be measured.
    """
    proxy = build_proxy(frame)
    cast = measure_proxy(proxy) if cast is None else cast
    path = frame.header.file
    if cast.white_xy is None or cast.doubt_deg is None:
        raise TooFewUsablePixels("nothing in the frame can be measured", path=path, hint="take another frame")
    light, doubt_deg = direction(cast.white_xy), max(cast.doubt_deg, _LEAST_DOUBT_DEG)
    samples = _fit_samples(frame, [_box_px(box, frame) for box in _card_boxes(proxy)], cast)
    candidates = [_Candidate(s, _apart_deg(direction(s.light_xy), light) / doubt_deg) for s in samples]
    found = sorted((c for c in candidates if c.doubts <= _MOST_DOUBTS), key=lambda c: c.doubts)
    if not found:
        hint = "hold it flat to the camera, or say where it is: --patch X,Y,W,H"
        raise PresetError("no grey card was found", path=path, hint=hint)
    best = direction(found[0].sample.light_xy)
    agreeing = [c for c in found if _apart_deg(direction(c.sample.light_xy), best) <= _SAME_LIGHT_DEG]
    if len(agreeing) < len(found):
        places = " or ".join(",".join(str(v) for v in c.sample.box_px or ()) for c in found[:3])
        hint = "say which: --patch X,Y,W,H"
        raise PresetError(f"several areas could be the grey card ({places})", path=path, hint=hint)
    chosen = max(agreeing, key=lambda c: c.sample.n).sample
    return GreyCard(replace(chosen, by="grey-card"), mark_box(proxy, chosen.box_px or (0, 0, 1, 1)))


def mark_box(proxy: Proxy, box_px: Box) -> NDArray[np.uint8]:
    """Return a small sRGB picture (h, w, 3) of the frame with a line around a box.

    Parameters
    ----------
    proxy : Proxy
        Of the frame.
    box_px : (x, y, width, height)
        In pixels of the frame's stored orientation.
    """
    srgb_linear = np.linalg.inv(linear_variant(space_by_name("sRGB")).rec2020_from_linear)
    linear = np.einsum("yxc,dc->yxd", proxy.linear.astype(np.float64), srgb_linear)
    bright = float(np.percentile(linear, 99.0)) or 1.0
    encoded = encode(SRGB_CURVE, np.clip(linear / bright, 0.0, 1.0))
    picture = np.rint(encoded * 255.0).astype(np.uint8)
    cell = cell_width(proxy.header.height_px, proxy.header.width_px)
    left, top = box_px[0] // cell, box_px[1] // cell
    right, bottom = (box_px[0] + box_px[2] - 1) // cell, (box_px[1] + box_px[3] - 1) // cell
    for grow, value in ((1, 255), (2, 0)):
        _outline(picture, left - grow, top - grow, right + grow, bottom + grow, value)
    return picture


def _outline(picture: NDArray[np.uint8], left: int, top: int, right: int, bottom: int, value: int) -> None:
    rows, columns = slice(max(top, 0), bottom + 1), slice(max(left, 0), right + 1)
    for y in (top, bottom):
        if 0 <= y < picture.shape[0]:
            picture[y, columns] = value
    for x in (left, right):
        if 0 <= x < picture.shape[1]:
            picture[rows, x] = value


def _fit_samples(frame: Frame, boxes: list[Box], cast: Cast) -> list[PatchSample]:
    samples = []
    for box in boxes:
        with contextlib.suppress(GraderError):
            samples.append(sample_patch(frame, box, cast=cast))
    return samples


def _apart_deg(first: Array, second: Array) -> float:
    return float(angles_deg(first[None], second)[0])


def _card_boxes(proxy: Proxy) -> list[Box]:
    """Return the measurable middle of every card-like region, in cells."""
    from scipy import ndimage  # noqa: PLC0415 - heavy, and needed here alone

    features, valid = _features(proxy)
    labels, count = ndimage.label(_flat(features) & valid)
    places = ndimage.find_objects(labels)
    areas = np.bincount(labels.ravel(), minlength=count + 1)[1:]
    least, most = _LEAST_SHARE * labels.size, _MOST_SHARE * labels.size
    boxes = []
    for index in np.flatnonzero((areas >= max(least, _LEAST_SIDE**2)) & (areas <= most)):
        region = labels == index + 1
        if _is_card(ndimage, region, features, places[index]):
            box = _largest_middle_box(region)
            if min(box[2:]) >= _LEAST_SIDE // 2:
                boxes.append(box)
    return boxes


def _features(proxy: Proxy) -> tuple[Array, Mask]:
    """Return (h, w, 3) logarithms of luminance, red to green and blue to green, smoothed, and where they hold."""
    linear = proxy.linear.astype(np.float64)
    seen = (proxy.usable > 0.95)[..., None]
    smooth = _box3(np.where(seen, linear, 0.0)) / np.maximum(_box3(seen.astype(np.float64)), 1e-9)
    luminance = plane.luminance(smooth)
    floor = 0.01 * float(np.percentile(luminance, 99.0)) + 1e-9
    logs = np.log(np.maximum(smooth, 0.1 * floor))
    features = np.stack(
        [np.log(np.maximum(luminance, floor)), logs[..., 0] - logs[..., 1], logs[..., 2] - logs[..., 1]],
        axis=-1,
    )
    return features, seen[..., 0] & (luminance > 2.0 * floor)


def _box3(values: Array) -> Array:
    """Return the sum over 3 x 3 cells, edges repeated."""
    padded = np.pad(values, ((1, 1), (1, 1), (0, 0)), mode="edge")
    rows = padded[:-2] + padded[1:-1] + padded[2:]
    return np.asarray(rows[:, :-2] + rows[:, 1:-1] + rows[:, 2:])


def _flat(features: Array) -> Mask:
    """Return where no edge runs; noise of the frame itself raises the bar."""
    padded = np.pad(features, ((1, 1), (1, 1), (0, 0)), mode="edge")
    down = np.abs(padded[2:, 1:-1] - padded[:-2, 1:-1])
    right = np.abs(padded[1:-1, 2:] - padded[1:-1, :-2])
    step = np.maximum(down, right)
    return np.asarray((step < _EDGE_LOG).all(axis=-1))


def _is_card(ndimage: Any, region: Mask, features: Array, place: tuple[slice, slice]) -> bool:
    rows, columns = place
    height, width = region.shape
    inside = rows.start > 0 and columns.start > 0 and rows.stop < height and columns.stop < width
    if not inside or min(rows.stop - rows.start, columns.stop - columns.start) < _LEAST_SIDE:
        return False
    filled = ndimage.binary_fill_holes(region)
    if _rectangularity(filled) < _RECTANGULAR or region.sum() < 0.9 * filled.sum():
        return False
    near = ndimage.binary_dilation(filled, iterations=3)
    ring = ndimage.binary_dilation(near, iterations=3) & ~near
    middle = np.median(features[region], axis=0)
    differs = np.abs(features[ring] - middle).max(axis=1) > _SET_OFF_LOG
    return bool(differs.mean() >= _SET_OFF)


def _rectangularity(region: Mask) -> float:
    """Return area over the smallest surrounding rectangle in any direction (steps of 3 degrees)."""
    ys, xs = np.nonzero(region & ~_interior(region))
    best = math.inf
    for angle in np.radians(np.arange(0.0, 90.0, 3.0)):
        along, across = xs * np.cos(angle) + ys * np.sin(angle), ys * np.cos(angle) - xs * np.sin(angle)
        one = abs(np.cos(angle)) + abs(np.sin(angle))
        best = min(best, (np.ptp(along) + one) * (np.ptp(across) + one))
    return float(region.sum() / best)


def _interior(region: Mask) -> Mask:
    padded = np.pad(region, 1)
    return np.asarray(padded[2:, 1:-1] & padded[:-2, 1:-1] & padded[1:-1, 2:] & padded[1:-1, :-2])


def _largest_middle_box(region: Mask) -> Box:
    """Return a box about the region's middle that lies inside it, of its own proportions."""
    ys, xs = np.nonzero(region)
    y, x = float(ys.mean()), float(xs.mean())
    half_height, half_width = np.ptp(ys) / 2, np.ptp(xs) / 2
    for share in np.arange(0.8, 0.2, -0.1):
        top, left = round(y - share * half_height), round(x - share * half_width)
        height, width = round(2 * share * half_height), round(2 * share * half_width)
        if height > 0 and width > 0 and region[top : top + height, left : left + width].mean() > 0.98:
            return left, top, width, height
    return round(x), round(y), 0, 0


def _box_px(cells: Box, frame: Frame) -> Box:
    height_px, width_px = frame.pixels.shape[:2]
    cell = cell_width(height_px, width_px)
    x, y, width, height = (v * cell for v in cells)
    return x, y, min(width, width_px - x), min(height, height_px - y)
