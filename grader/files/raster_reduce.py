"""A small frame from a whole one, averaged in linear light, that measures alike."""

from __future__ import annotations

from dataclasses import replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader.colour.compiled import jit
from grader.colour.transfer import decode, decode_table, encode
from grader.model import Frame

_CLIPPED: Final = {np.dtype(np.uint8): 254, np.dtype(np.uint16): 65_200}
"""Encoded values from which a pixel counts as clipped: the same half per cent as the proxy's."""
_SHARED: Final = 2e-4
"""Floats count as clipped where this share of the pixels has the largest value there is, as in the proxy."""
_ALL_UP_TO: Final = 4
"""Up to this cell width every pixel is looked at, beyond it three rows and columns of a cell, as in the proxy."""
_ROWS: Final = 64


def cell_width(height_px: int, width_px: int, target_px: int) -> int:
    """Return how many pixels wide and high a cell is: the longer side becomes at most ``target_px``.

    The shorter one becomes at most two thirds of it, so that the proxy need not average once more.

    Examples
    --------
    >>> cell_width(4000, 6000, 600), cell_width(300, 400, 600)
    (10, 1)
    """
    long, short = max(height_px, width_px), min(height_px, width_px)
    return max(-(-long // target_px), -(-3 * short // (2 * target_px)), 1)


def reduced(frame: Frame, target_px: int) -> Frame:
    """Return the frame with its longer side at most ``target_px``.

    A cell averages, in linear light, its pixels that are neither clipped nor empty, and is encoded at the
    frame's own depth; where most of them are clipped it is white, where most are empty it is zero.  A frame
    that is small already comes back as it is.
    """
    height_px, width_px = frame.pixels.shape[:2]
    width = cell_width(height_px, width_px, target_px)
    if width == 1:
        return frame
    step = 1 if width <= _ALL_UP_TO else -(-width // 3)
    linear, state, white = _reduce(frame, width, step)
    encoded = np.stack([encode(c, linear[..., i]) for i, c in enumerate(frame.space.curves)], axis=-1)
    pixels = _at_depth(encoded, frame.pixels.dtype)
    pixels[state == 1] = white
    pixels[state == 2] = 0
    alpha = None if frame.alpha is None else _thinned(frame.alpha, width)
    return replace(frame, pixels=pixels, alpha=alpha)


def _thinned(alpha: NDArray[Any], width: int) -> NDArray[Any]:
    """Return the alpha of about the middle of each cell."""
    rows, columns = (np.minimum(np.arange(0, n, width) + width // 2, n - 1) for n in alpha.shape)
    return alpha[np.ix_(rows, columns)]


def _at_depth(encoded: NDArray[np.float64], dtype: Any) -> NDArray[Any]:
    if dtype.kind == "f":
        return encoded.astype(dtype)
    top = int(np.iinfo(dtype).max)
    return np.clip(np.round(encoded * top), 0, top).astype(dtype)


def _reduce(frame: Frame, width: int, step: int) -> tuple[NDArray[np.float64], NDArray[np.int64], float]:
    """Return the light and the state of the cells (see `_average_integers`), and what white is."""
    if frame.pixels.dtype.kind == "f":
        return _reduce_floats(frame, width, step)
    top = int(np.iinfo(frame.pixels.dtype).max)
    tables = np.stack([decode_table(curve, top + 1) for curve in frame.space.curves])
    linear, state = _average_integers(frame.pixels, tables, _CLIPPED[frame.pixels.dtype], width, step)
    return linear, state, top


def _reduce_floats(
    frame: Frame, width: int, step: int
) -> tuple[NDArray[np.float64], NDArray[np.int64], float]:
    """Return the same of floating-point pixels, worked out a band of cells at a time."""
    brightest = frame.pixels.max(axis=2)
    finite = brightest[np.isfinite(brightest)]
    white = float(finite.max(initial=0.0))
    shared = np.count_nonzero(finite >= white * (1 - 1e-6)) > _SHARED * finite.size
    clipped = white * (1 - 1e-6) if shared else np.inf
    parts = []
    band = width * max(_ROWS // width, 1)
    for start in range(0, len(frame.pixels), band):
        encoded = np.ascontiguousarray(frame.pixels[start : start + band], np.float32)
        with np.errstate(all="ignore"):
            light = np.stack([decode(c, encoded[..., i]) for i, c in enumerate(frame.space.curves)], axis=-1)
        parts.append(_average_floats(encoded, light, clipped, width, step))
    return np.concatenate([p[0] for p in parts]), np.concatenate([p[1] for p in parts]), white


@jit
def _average_integers(pixels: Any, tables: Any, clipped: int, width: int, step: int) -> Any:
    """Return the mean linear light (h, w, 3) and the state (h, w) of cells: 0 measured, 1 clipped, 2 empty."""
    height_px, width_px = pixels.shape[0], pixels.shape[1]
    h, w = (height_px + width - 1) // width, (width_px + width - 1) // width
    linear, state = np.zeros((h, w, 3)), np.zeros((h, w), np.int64)
    for cy in range(h):
        for cx in range(w):
            r = g = b = 0.0
            used = over = empty = 0
            for y in range(cy * width, min((cy + 1) * width, height_px), step):
                for x in range(cx * width, min((cx + 1) * width, width_px), step):
                    i, j, k = pixels[y, x, 0], pixels[y, x, 1], pixels[y, x, 2]
                    top = max(i, j, k)
                    if top >= clipped:
                        over += 1
                    elif top == 0:
                        empty += 1
                    else:
                        r += tables[0, i]
                        g += tables[1, j]
                        b += tables[2, k]
                        used += 1
            state[cy, cx] = _settle(linear[cy, cx], (r, g, b), used, over, empty)
    return linear, state


@jit
def _average_floats(encoded: Any, light: Any, clipped: float, width: int, step: int) -> Any:
    """Return the same for floating-point pixels; what is not a number counts as empty."""
    height_px, width_px = light.shape[0], light.shape[1]
    h, w = (height_px + width - 1) // width, (width_px + width - 1) // width
    linear, state = np.zeros((h, w, 3)), np.zeros((h, w), np.int64)
    for cy in range(h):
        for cx in range(w):
            r = g = b = 0.0
            used = over = empty = 0
            for y in range(cy * width, min((cy + 1) * width, height_px), step):
                for x in range(cx * width, min((cx + 1) * width, width_px), step):
                    i, j, k = light[y, x, 0], light[y, x, 1], light[y, x, 2]
                    if not np.isfinite(i + j + k) or (i == 0 and j == 0 and k == 0):
                        empty += 1
                    elif max(encoded[y, x, 0], encoded[y, x, 1], encoded[y, x, 2]) >= clipped:
                        over += 1
                    else:
                        r += i
                        g += j
                        b += k
                        used += 1
            state[cy, cx] = _settle(linear[cy, cx], (r, g, b), used, over, empty)
    return linear, state


@jit
def _settle(mean: Any, sums: Any, used: int, over: int, empty: int) -> int:
    """Write the mean of a cell (3,) if most of its pixels were measured; return its state."""
    if used > 0 and used >= over and used >= empty:
        mean[0], mean[1], mean[2] = sums[0] / used, sums[1] / used, sums[2] / used
        return 0
    return 1 if over > empty else 2
