"""The compiled loops that reduce a frame: each pixel is looked at once, each cell written once."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from grader.colour.compiled import jit

Float32 = NDArray[np.float32]
Averaged = tuple[Float32, Float32, NDArray[np.float64]]


@jit
def average_integers(
    pixels: NDArray[Any],
    tables: Float32,
    clipped: int,
    dark: int,
    width: int,
    step: int,
    matrix: NDArray[np.float64],
) -> Averaged:
    """Return the means (h, w, 3) of usable pixels through a matrix, their share (h, w), and what was left out.

    Parameters
    ----------
    pixels : (H, W, 3) uint8 or uint16
    tables : (1 or 3, levels) float32
        Linear light of each encoded value, one for all channels or one each.
    clipped, dark : int
        A pixel counts where its largest encoded value lies between.
    width, step : int
        Side of a cell, and distance of the pixels looked at. [px]
    matrix : (3, 3) float64

    Returns
    -------
    linear, usable, left_out
        ``left_out`` (3,): shares of the frame that are clipped, dark, and empty.
    """
    height_px, width_px = pixels.shape[0], pixels.shape[1]
    h, w = (height_px + width - 1) // width, (width_px + width - 1) // width
    linear, usable, left_out = np.zeros((h, w, 3), np.float32), np.zeros((h, w), np.float32), np.zeros(4)
    red, green, blue = tables[0], tables[len(tables) // 2], tables[len(tables) - 1]
    for cy in range(h):
        sums, used = np.zeros((w, 3)), np.zeros(w)
        seen = np.zeros(w)
        for y in range(cy * width, min((cy + 1) * width, height_px), step):
            for cx in range(w):
                r = g = b = 0.0
                good = over = empty = 0
                x, end = cx * width, min((cx + 1) * width, width_px)
                looked = (end - x + step - 1) // step
                while x < end:
                    i, j, k = pixels[y, x, 0], pixels[y, x, 1], pixels[y, x, 2]
                    x += step
                    top = max(i, j, k)
                    if dark < top < clipped and top > 0:
                        r += red[i]
                        g += green[j]
                        b += blue[k]
                        good += 1
                    elif top == 0:
                        empty += 1
                    elif top >= clipped:
                        over += 1
                sums[cx, 0] += r
                sums[cx, 1] += g
                sums[cx, 2] += b
                used[cx] += good
                seen[cx] += looked
                left_out[0] += over
                left_out[1] += looked - good - over - empty
                left_out[2] += empty
                left_out[3] += looked
        _finish_row(linear[cy], usable[cy], sums, used, seen, matrix)
    return linear, usable, left_out[:3] / left_out[3]


@jit
def average_floats(
    pixels: Float32,
    clipped: float,
    dark: float,
    cell_rows: NDArray[np.intp],
    cell_columns: NDArray[np.intp],
    matrix: NDArray[np.float64],
) -> Averaged:
    """Return the same for linear floating-point pixels; what is not a number is empty.

    ``cell_rows`` (H,) and ``cell_columns`` (W,), both ascending, tell the cell of each pixel.
    """
    h, w = cell_rows[-1] + 1, cell_columns[-1] + 1
    linear, usable, left_out = np.zeros((h, w, 3), np.float32), np.zeros((h, w), np.float32), np.zeros(4)
    sums, used, seen = np.zeros((w, 3)), np.zeros(w), np.zeros(w)
    for y in range(len(cell_rows)):
        for x in range(len(cell_columns)):
            cx = cell_columns[x]
            seen[cx] += 1.0
            left_out[3] += 1.0
            r, g, b = pixels[y, x, 0], pixels[y, x, 1], pixels[y, x, 2]
            top = max(r, g, b)
            if not np.isfinite(r + g + b) or (r == 0.0 and g == 0.0 and b == 0.0):
                left_out[2] += 1.0
            elif top >= clipped:
                left_out[0] += 1.0
            elif top < dark:
                left_out[1] += 1.0
            else:
                sums[cx, 0] += r
                sums[cx, 1] += g
                sums[cx, 2] += b
                used[cx] += 1.0
        cy = cell_rows[y]
        if y + 1 == len(cell_rows) or cell_rows[y + 1] > cy:
            _finish_row(linear[cy], usable[cy], sums, used, seen, matrix)
            sums[:], used[:], seen[:] = 0.0, 0.0, 0.0
    return linear, usable, left_out[:3] / left_out[3]


@jit
def _finish_row(
    linear: Float32,
    usable: Float32,
    sums: NDArray[np.float64],
    used: NDArray[np.float64],
    seen: NDArray[np.float64],
    matrix: NDArray[np.float64],
) -> None:
    for x in range(len(used)):
        if used[x] > 0.0:
            r, g, b = sums[x, 0] / used[x], sums[x, 1] / used[x], sums[x, 2] / used[x]
            for channel in range(3):
                linear[x, channel] = matrix[channel, 0] * r + matrix[channel, 1] * g + matrix[channel, 2] * b
            usable[x] = used[x] / seen[x]


@jit
def sum_boxes(
    linear: Float32, usable: Float32, side: int
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Return sums of usable light (h, w, 3), of usable shares (h, w), and the areas (h, w) of square boxes."""
    height, width = usable.shape
    h, w = (height + side - 1) // side, (width + side - 1) // side
    total, share, area = np.zeros((h, w, 3)), np.zeros((h, w)), np.zeros((h, w))
    for y in range(height):
        for x in range(width):
            weight = usable[y, x]
            cy, cx = y // side, x // side
            area[cy, cx] += 1.0
            if weight > 0.0:
                share[cy, cx] += weight
                for channel in range(3):
                    total[cy, cx, channel] += np.float64(weight) * linear[y, x, channel]
    return total, share, area
