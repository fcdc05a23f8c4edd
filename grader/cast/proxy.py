"""Reduce a frame of any size to the small linear picture that measurement works on."""

from __future__ import annotations

from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader.colour.compiled import jit
from grader.colour.transfer import decode, decode_table
from grader.errors import TooFewUsablePixels
from grader.model import Curve, Frame, Proxy

_LONG_PX: Final = 600
_SHORT_PX: Final = 400
_SKIP_FROM: Final = 6
"""From this cell width on, every second row and column is enough (nine pixels a cell and more)."""
_CLIPPED_LEVEL: Final = {np.dtype(np.uint8): 254, np.dtype(np.uint16): 65_200}
"""Encoded values from which a pixel counts as clipped, in any channel: the top half per cent. (judgement)"""
_DARK_LINEAR: Final = {np.dtype(np.uint8): 1.5e-3, np.dtype(np.uint16): 1.5e-4}
"""Linear values that quantisation and sensor noise drown: five steps of 8-bit sRGB, ten of 16-bit linear."""
_DARK_RELATIVE: Final = 1e-5
"""The same for floating point, as a share of the frame's own bright parts."""


def build_proxy(frame: Frame) -> Proxy:
    """Return the small linear picture of a frame.

    Averages squares of pixels in linear light, in float64, and leaves out every pixel that is clipped in a
    channel, at the noise floor, or empty (all channels zero, or not a number).  Never enlarges.

    Parameters
    ----------
    frame : Frame
        Pixels (H, W, 3) of uint8, uint16 or float32.

    Returns
    -------
    Proxy
        At most about 600 x 400 cells of working light at the camera's daylight setting.

    Raises
    ------
    TooFewUsablePixels
        The frame has no pixel at all.
    """
    pixels = frame.pixels
    if pixels.size == 0:
        raise TooFewUsablePixels("the frame is empty")
    width = cell_width(*pixels.shape[:2])
    step = 2 if width >= _SKIP_FROM else 1
    if pixels.dtype in _CLIPPED_LEVEL:
        tables = _tables(frame.space.curves, int(np.iinfo(pixels.dtype).max) + 1)
        sums, counts = _average_integers(
            pixels, tables, _CLIPPED_LEVEL[pixels.dtype], _DARK_LINEAR[pixels.dtype], width, step
        )
    else:
        linear = _linear_floats(pixels[::step, ::step], frame.space.curves)
        sums, counts = _average_floats(linear, *_float_limits(linear), max(width // step, 1))
    return _finish(frame, sums, counts)


def cell_width(height_px: int, width_px: int) -> int:
    """Return how many pixels wide and high one proxy cell is.

    Examples
    --------
    >>> cell_width(4000, 6000), cell_width(32, 48)
    (10, 1)
    """
    long, short = max(height_px, width_px), min(height_px, width_px)
    return max(-(-long // _LONG_PX), -(-short // _SHORT_PX), 1)


def _tables(curves: tuple[Curve, Curve, Curve], levels: int) -> NDArray[np.float32]:
    return np.stack([decode_table(curve, levels) for curve in curves])


def _linear_floats(pixels: NDArray[Any], curves: tuple[Curve, Curve, Curve]) -> NDArray[np.float32]:
    if all(_is_identity(curve) for curve in curves):
        return np.ascontiguousarray(pixels, np.float32)
    with np.errstate(all="ignore"):
        channels = [decode(curve, pixels[..., i].astype(np.float64)) for i, curve in enumerate(curves)]
    return np.stack(channels, axis=-1).astype(np.float32)


def _is_identity(curve: Curve) -> bool:
    return curve.samples is None and (curve.g, curve.a, curve.b, curve.e, curve.d) == (
        1.0,
        1.0,
        0.0,
        0.0,
        0.0,
    )


def _float_limits(linear: NDArray[np.float32]) -> tuple[float, float]:
    """Return the clipping level and the noise floor of floating-point pixels.

    Floats have no maximum of their own: they count as clipped where their largest value is shared by many.
    """
    brightest = linear.max(axis=2)
    brightest = brightest[np.isfinite(brightest)]
    if brightest.size == 0:
        return np.inf, 0.0
    top = float(brightest.max())
    shared = np.count_nonzero(brightest >= top * (1 - 1e-6))
    clipped = top * (1 - 1e-6) if shared > max(2e-4 * brightest.size, 4) else np.inf
    return clipped, _DARK_RELATIVE * max(float(np.percentile(brightest, 99)), 0.0)


def _finish(frame: Frame, sums: NDArray[np.float64], counts: NDArray[np.int64]) -> Proxy:
    matrix = frame.space.rec2020_from_linear
    if frame.header.daylight_from_decoded is not None:
        matrix = frame.header.daylight_from_decoded @ matrix
    used = counts[..., 0]
    mean = sums / np.maximum(used, 1)[..., None]
    linear = np.einsum("yxc,dc->yxd", mean, matrix)
    seen = counts.sum(axis=2)
    total = max(int(seen.sum()), 1)
    return Proxy(
        linear=linear.astype(np.float32),
        usable=(used / np.maximum(seen, 1)).astype(np.float32),
        header=frame.header,
        clipped_fraction=int(counts[..., 1].sum()) / total,
        dark_fraction=int(counts[..., 2].sum()) / total,
        empty_fraction=int(counts[..., 3].sum()) / total,
    )


@jit
def _average_integers(pixels, tables, clipped, dark, width, step):  # type: ignore[no-untyped-def]
    """Return sums (h, w, 3) of the usable pixels and counts (h, w, 4): usable, clipped, dark, empty."""
    height_px, width_px = pixels.shape[0], pixels.shape[1]
    h, w = (height_px + width - 1) // width, (width_px + width - 1) // width
    sums, counts = np.zeros((h, w, 3)), np.zeros((h, w, 4), np.int64)
    for y in range(0, height_px, step):
        cy = y // width
        for cx in range(w):
            r = g = b = 0.0
            used = over = under = empty = 0
            for x in range(cx * width, min((cx + 1) * width, width_px), step):
                i, j, k = pixels[y, x, 0], pixels[y, x, 1], pixels[y, x, 2]
                top = max(i, j, k)
                if top >= clipped:
                    over += 1
                    continue
                if top == 0:
                    empty += 1
                    continue
                lr, lg, lb = tables[0, i], tables[1, j], tables[2, k]
                if max(lr, lg, lb) < dark:
                    under += 1
                    continue
                r += lr
                g += lg
                b += lb
                used += 1
            sums[cy, cx, 0] += r
            sums[cy, cx, 1] += g
            sums[cy, cx, 2] += b
            counts[cy, cx, 0] += used
            counts[cy, cx, 1] += over
            counts[cy, cx, 2] += under
            counts[cy, cx, 3] += empty
    return sums, counts


@jit
def _average_floats(linear, clipped, dark, width):  # type: ignore[no-untyped-def]
    """Return the same for floating-point pixels; what is not a number counts as empty."""
    height_px, width_px = linear.shape[0], linear.shape[1]
    h, w = (height_px + width - 1) // width, (width_px + width - 1) // width
    sums, counts = np.zeros((h, w, 3)), np.zeros((h, w, 4), np.int64)
    for y in range(height_px):
        cy = y // width
        for x in range(width_px):
            cx = x // width
            r, g, b = linear[y, x, 0], linear[y, x, 1], linear[y, x, 2]
            if not np.isfinite(r + g + b) or (r == 0 and g == 0 and b == 0):
                counts[cy, cx, 3] += 1
                continue
            top = max(r, g, b)
            if top >= clipped:
                counts[cy, cx, 1] += 1
                continue
            if top < dark:
                counts[cy, cx, 2] += 1
                continue
            sums[cy, cx, 0] += r
            sums[cy, cx, 1] += g
            sums[cy, cx, 2] += b
            counts[cy, cx, 0] += 1
    return sums, counts
