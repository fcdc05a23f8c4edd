"""Alpha: kept beside the colours, which are graded as the colours themselves, never multiplied by it."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from grader.files.raster import Decoded

Pixels = NDArray[Any]


def unassociated(pixels: Pixels, alpha: Pixels, decoded: Decoded) -> Pixels:
    """Divide associated (premultiplied) colour by its alpha, so that the frame holds the colours themselves.

    `associated` gives the same integers back: the quotient is off by at most a half, times alpha / white,
    which rounding undoes.  Where a colour exceeds its alpha no quotient exists, and it stays as it is.
    """
    if decoded.encoding.get("alpha") != "associated":
        return pixels
    if decoded.kind in ("cmyk", "lab") or pixels.dtype != alpha.dtype:
        decoded.encoding["alpha"] = "kept-associated"
        return pixels
    if pixels.dtype.kind == "u" and bool(np.any(pixels.max(axis=2) > alpha)):
        decoded.encoding["alpha"] = "kept-associated"
        decoded.notes.append("colours exceed their alpha: graded as they stand, still multiplied")
        return pixels
    return _rescaled(pixels, alpha, divide=True)


def associated(pixels: Pixels, alpha: Pixels) -> Pixels:
    """Multiply colours by their alpha, for a file whose alpha is associated."""
    return _rescaled(pixels, alpha, divide=False)


def _rescaled(pixels: Pixels, alpha: Pixels, *, divide: bool) -> Pixels:
    top = 1.0 if pixels.dtype.kind == "f" else float(np.iinfo(pixels.dtype).max)
    result = np.empty_like(pixels)
    for start in range(0, len(pixels), 256):
        rows = slice(start, start + 256)
        share = np.asarray(alpha[rows], np.float64)[..., None] / top
        share = np.where(share == 0.0, 1.0, share)
        values = pixels[rows] / share if divide else pixels[rows] * share
        result[rows] = values if pixels.dtype.kind == "f" else np.floor(values + 0.5)
    return result
