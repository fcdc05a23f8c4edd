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


def reduce_mosaic(raw: Any, colour: RawColour, target_px: int) -> NDArray[np.uint16] | None:
    """Return a small picture in linear Rec.2020 averaged from whole periods of the colour filter array.

    Parameters
    ----------
    raw : rawpy.RawPy
        Unpacked, with a flat mosaic.
    colour : RawColour
        Needs a matrix.
    target_px : int
        The longer side comes out between this and twice this, as far as the file has it.

    Returns
    -------
    (h, w, 3) uint16 or None
        Scaled as LibRaw scales its decode; None where this mosaic is of a kind that LibRaw should reduce itself.
    """
    pattern = raw.raw_pattern
    if pattern is None or colour.working_from_balanced is None or colour.colours < 3:
        return None
    mosaic = raw.raw_image_visible
    period = pattern.shape[0]
    cell = max(max(mosaic.shape) // (period * target_px), 1) * period
    if set(range(colour.colours)) - set(np.unique(pattern)) or min(mosaic.shape) < cell:
        return None
    black = np.asarray(raw.black_level_per_channel, np.float64)
    span = float(raw.white_level) - black.min()
    if span <= 0:
        return None
    gain = colour.balance / colour.balance[: max(colour.colours, 3)].min() / span
    sums, counts = _average(mosaic, pattern.astype(np.int64), black, gain, _SATURATED * span, cell)
    return _to_working(sums, counts, colour)


def _to_working(
    sums: NDArray[np.float64], counts: NDArray[np.float64], colour: RawColour
) -> NDArray[np.uint16]:
    if colour.colours == 3:  # the second green joins the first
        sums[..., 1] += sums[..., 3]
        counts[..., 1] += counts[..., 3]
    mean = (sums / np.maximum(counts[..., :4], 1))[..., : colour.colours]
    assert colour.working_from_balanced is not None
    working = np.einsum("yxc,dc->yxd", mean, colour.working_from_balanced)
    working[counts[..., 4] > _CLIPPED_SHARE] = 1.0
    return np.rint(np.clip(working, 0, 1) * _TOP).astype(np.uint16)


@jit
def _average(mosaic, pattern, black, gain, saturated, cell):  # type: ignore[no-untyped-def]
    """Return sums (h, w, 4) by colour of the balanced values and counts (h, w, 5): by colour, and the clipped share.

    A period of the filter array with a clipped photosite is left out, unless all are: then all are taken.
    """
    period = pattern.shape[0]
    h, w = mosaic.shape[0] // cell, mosaic.shape[1] // cell
    sums, counts = np.zeros((h, w, 4)), np.zeros((h, w, 5))
    per_cell = (cell // period) ** 2
    for cy in range(h):
        for cx in range(w):
            clipped = 0
            for y0 in range(cy * cell, (cy + 1) * cell, period):
                for x0 in range(cx * cell, (cx + 1) * cell, period):
                    over = False
                    for dy in range(period):
                        for dx in range(period):
                            c = pattern[dy, dx]
                            if mosaic[y0 + dy, x0 + dx] - black[c] >= saturated:
                                over = True
                    if over:
                        clipped += 1
                        continue
                    for dy in range(period):
                        for dx in range(period):
                            c = pattern[dy, dx]
                            value = max(mosaic[y0 + dy, x0 + dx] - black[c], 0.0) * gain[c]
                            sums[cy, cx, c] += min(value, 1.0)
                            counts[cy, cx, c] += 1
            counts[cy, cx, 4] = clipped / per_cell
    return sums, counts
