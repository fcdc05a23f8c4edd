"""A small linear picture straight from the mosaic, for measuring: no demosaicing at full size."""

from __future__ import annotations

from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader.colour.compiled import jit
from grader.files.raw_colour import RawColour

_CLIPPED_SHARE: Final = 0.5
"""A cell of which more than this is clipped is shown clipped; else it averages what is not. (judgement)"""
_TOP: Final = 65_535
_SATURATED: Final = 0.995
"""Share of the usable range from which a photosite counts as clipped: the same half per cent as the proxy's."""


def pattern_of(raw: Any) -> NDArray[np.uint8] | None:
    """Return the colours of a period of the filter array; None where there is none, or none that rawpy knows."""
    try:
        pattern: NDArray[np.uint8] | None = raw.raw_pattern
    except NotImplementedError:
        return None
    return pattern


def reduce_mosaic(raw: Any, colour: RawColour, target_px: int) -> NDArray[np.uint16] | None:
    """Return a small picture in linear Rec.2020 averaged from whole periods of the colour filter array.

    Parameters
    ----------
    raw : rawpy.RawPy
        Unpacked, with a flat mosaic.
    colour : RawColour
        Needs a matrix.
    target_px : int
        The longer side comes out at about this, the shorter at most at two thirds of it.

    Returns
    -------
    (h, w, 3) uint16 or None
        Scaled as LibRaw scales its decode; None where this mosaic is of a kind that LibRaw should reduce itself.
    """
    pattern = pattern_of(raw)
    if pattern is None or colour.working_from_balanced is None or colour.colours < 3:
        return None
    mosaic = raw.raw_image_visible
    period = pattern.shape[0]
    cell = _cell_px(mosaic.shape, period, target_px)
    if set(range(colour.colours)) - set(np.unique(pattern)) or min(mosaic.shape) < cell:
        return None
    black = np.asarray(raw.black_level_per_channel, np.int64)
    span = int(raw.white_level) - int(black.min())
    if span <= 0:
        return None
    gain = colour.balance / colour.balance[: max(colour.colours, 3)].min()  # LibRaw's: the least is 1
    top = np.minimum(black + np.rint(span / gain), _TOP).astype(np.int64)
    saturated = (black + _SATURATED * span).astype(np.int64)
    sums, counts, used = _average(mosaic, pattern.astype(np.int64), black, top, saturated, cell)
    if colour.colours == 3:  # the second green joins the first
        sums[..., 1] += sums[..., 3]
        counts[1] += counts[3]
    n = colour.colours
    with np.errstate(invalid="ignore"):
        mean = sums[..., :n] * (gain[:n] / span) / (counts[:n] * used[..., None])
        working = np.einsum("yxc,dc->yxd", mean, colour.working_from_balanced)
    working[used < (1 - _CLIPPED_SHARE) * (cell // period) ** 2] = 1.0
    return np.asarray(np.rint(np.clip(working, 0, 1) * _TOP), np.uint16)


def _cell_px(shape: tuple[int, ...], period: int, target_px: int) -> int:
    """Return a cell's width and height: whole periods, so that the picture fits target_px by two thirds of it."""
    long, short = max(shape), min(shape)
    return max(-(-long // (target_px * period)), -(-3 * short // (2 * target_px * period)), 1) * period


@jit
def _average(  # noqa: C901 - one loop
    mosaic: NDArray[Any],
    pattern: NDArray[np.int64],
    black: NDArray[np.int64],
    top: NDArray[np.int64],
    saturated: NDArray[np.int64],
    cell: int,
) -> tuple[NDArray[np.float64], NDArray[np.signedinteger[Any]], NDArray[np.int64]]:
    """Average the whole periods of the filter array in each cell, leaving out those with a clipped photosite.

    Returns sums (h, w, 4) above black by colour, how often each colour stands in a period (4,), and how many
    periods each cell used (h, w).
    """
    period = pattern.shape[0]
    h, w = mosaic.shape[0] // cell, mosaic.shape[1] // cell
    sums, used = np.zeros((h, w, 4)), np.zeros((h, w), np.int64)
    for cy in range(h):
        for cx in range(w):
            for y in range(cy * cell, (cy + 1) * cell, period):
                for x in range(cx * cell, (cx + 1) * cell, period):
                    over = False
                    for dy in range(period):
                        for dx in range(period):
                            over |= mosaic[y + dy, x + dx] >= saturated[pattern[dy, dx]]
                    if over:
                        continue
                    used[cy, cx] += 1
                    for dy in range(period):
                        for dx in range(period):
                            c = pattern[dy, dx]
                            value = np.int64(mosaic[y + dy, x + dx])
                            sums[cy, cx, c] += min(max(value, black[c]), top[c]) - black[c]
    counts = np.zeros(4, np.int64)
    for c in pattern.ravel():
        counts[c] += 1
    return sums, counts, used
