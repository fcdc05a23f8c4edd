"""Reduce a frame of any size to the small linear picture that measurement works on."""

from __future__ import annotations

from functools import lru_cache
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader.cast.proxy_loops import average_floats, average_integers
from grader.colour.transfer import decode, decode_table
from grader.errors import TooFewUsablePixels
from grader.model import Curve, Frame, Proxy

_LONG_PX: Final = 600
_SHORT_PX: Final = 400
_CLIPPED_LEVEL: Final = {np.dtype(np.uint8): 254, np.dtype(np.uint16): 65_200}
"""Encoded values from which a pixel counts as clipped, in any channel: the top half per cent. (judgement)"""
_DARK_LINEAR: Final = {np.dtype(np.uint8): 1.5e-3, np.dtype(np.uint16): 1.5e-4}
"""Linear values that quantisation and sensor noise drown: five steps of 8-bit sRGB, ten of 16-bit linear."""
_DARK_RELATIVE: Final = 1e-5
"""The same for floating point, as a share of the frame's own bright parts."""


def build_proxy(frame: Frame) -> Proxy:
    """Return the small linear picture of a frame.

    Averages squares of pixels in linear light (at least nine a square, evenly spread, where there are more), in
    float64, and leaves out every pixel that is clipped in a
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
    step = _step(width)
    matrix = frame.space.rec2020_from_linear
    if frame.header.daylight_from_decoded is not None:
        matrix = frame.header.daylight_from_decoded @ matrix
    if pixels.dtype in _CLIPPED_LEVEL:
        tables = _tables(frame.space.curves, int(np.iinfo(pixels.dtype).max) + 1)
        limits = (_CLIPPED_LEVEL[pixels.dtype], _dark_level(tables, _DARK_LINEAR[pixels.dtype]))
        averaged = average_integers(pixels, tables, *limits, width, step, matrix)
    else:
        rows, columns = (_looked_at(length, width, step) for length in pixels.shape[:2])
        linear = _linear_floats(pixels[np.ix_(rows, columns)], frame.space.curves)
        averaged = average_floats(linear, *_float_limits(linear), rows // width, columns // width, matrix)
    linear, usable, (clipped, dark, empty) = averaged
    return Proxy(linear, usable, frame.header, float(clipped), float(dark), float(empty))


def cell_width(height_px: int, width_px: int) -> int:
    """Return how many pixels wide and high one proxy cell is.

    Examples
    --------
    >>> cell_width(4000, 6000), cell_width(32, 48)
    (10, 1)
    """
    long, short = max(height_px, width_px), min(height_px, width_px)
    return max(-(-long // _LONG_PX), -(-short // _SHORT_PX), 1)


def _step(width: int) -> int:
    """Return the distance of the pixels that are looked at: three, or all up to four, along the side of a cell."""
    return 1 if width < 5 else -(-width // 3)


def _looked_at(length_px: int, width: int, step: int) -> NDArray[np.intp]:
    """Return the places of the pixels that are looked at along one side of the frame: the same in each cell."""
    places = np.arange(length_px)
    return np.asarray(places[places % width % step == 0])


@lru_cache(maxsize=16)
def _tables(curves: tuple[Curve, Curve, Curve], levels: int) -> NDArray[np.float32]:
    """Return decode tables (1, levels) where the channels share one curve (it stays in the cache), else (3, levels)."""
    tables = np.stack([decode_table(curve, levels) for curve in curves])
    return tables[:1] if (tables == tables[0]).all() else tables


def _dark_level(tables: NDArray[np.float32], dark: float) -> int:
    """Return the highest encoded value that is at the noise floor in every channel."""
    return int(np.count_nonzero((tables < dark).all(axis=0))) - 1


def _linear_floats(pixels: NDArray[Any], curves: tuple[Curve, Curve, Curve]) -> NDArray[np.float32]:
    if all(is_identity(curve) for curve in curves):
        return np.ascontiguousarray(pixels, np.float32)
    with np.errstate(all="ignore"):
        channels = [decode(curve, pixels[..., i].astype(np.float64)) for i, curve in enumerate(curves)]
    return np.stack(channels, axis=-1).astype(np.float32)


def is_identity(curve: Curve) -> bool:
    """Return whether a curve leaves values as they are: linear light."""
    return curve.samples is None and (curve.g, curve.a, curve.b, curve.e, curve.d) == (
        1.0,
        1.0,
        0.0,
        0.0,
        0.0,
    )


def _float_limits(linear: NDArray[np.float32]) -> tuple[float, float]:
    """Return the clipping level and the noise floor of floating-point pixels.

    Floats have no maximum of their own: they count as clipped where their largest value is shared by many
    (not by nearly all: that is a flat area below white).
    """
    brightest = linear.max(axis=2)
    brightest = brightest[np.isfinite(brightest)]
    if brightest.size == 0:
        return np.inf, 0.0
    top = float(brightest.max())
    shared = np.count_nonzero(brightest >= top * (1 - 1e-6))
    flat = shared > 0.9 * brightest.size and top < 1.0
    clipped = top * (1 - 1e-6) if shared > max(2e-4 * brightest.size, 4) and not flat else np.inf
    return clipped, _DARK_RELATIVE * max(float(np.percentile(brightest, 99)), 0.0)
