"""A small frame from a whole one, averaged in linear light, that measures alike."""

from __future__ import annotations

from dataclasses import replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader.colour import transfer
from grader.model import Curve, Frame

_CLIPPED_SHARE: Final = 0.5
"""A cell of which more than this is clipped is shown clipped; else it averages what is not. (judgement)"""


def reduced(frame: Frame, target_px: int) -> Frame:
    """Return the frame with its longer side between ``target_px`` and twice that.

    Cells are averaged in linear light and encoded again at the frame's own depth, so that white stays white
    and black black.  A frame that is small already comes back as it is.
    """
    height, width = frame.pixels.shape[:2]
    factor = max(height, width) // target_px
    if factor < 2 or min(height, width) < factor:
        return frame
    pixels = np.stack(
        [_reduced_channel(frame.pixels[..., i], curve, factor) for i, curve in enumerate(frame.space.curves)],
        axis=-1,
    )
    alpha = None
    if frame.alpha is not None:
        alpha = _reduced_channel(frame.alpha, Curve(), factor)
    return replace(frame, pixels=pixels, alpha=alpha)


def _reduced_channel(channel: NDArray[Any], curve: Curve, factor: int) -> NDArray[Any]:
    rows, columns = channel.shape[0] // factor, channel.shape[1] // factor
    result = np.empty((rows, columns), channel.dtype)
    table = _table(channel.dtype, curve)
    for row in range(rows):
        cells = channel[row * factor : (row + 1) * factor, : columns * factor]
        clipped = cells >= _white(channel.dtype)
        linear = transfer.decode(curve, cells) if table is None else table[cells]
        kept = np.where(clipped, 0.0, linear).reshape(factor, columns, factor).sum(axis=(0, 2))
        count = factor * factor - clipped.reshape(factor, columns, factor).sum(axis=(0, 2))
        mean = kept / np.maximum(count, 1)
        encoded = _encode(mean, curve, channel.dtype)
        result[row] = np.where(count < factor * factor * (1 - _CLIPPED_SHARE), _white(channel.dtype), encoded)
    return result


def _table(dtype: Any, curve: Curve) -> NDArray[np.float64] | None:
    if dtype.kind == "f":
        return None
    return transfer.decode(curve, np.linspace(0.0, 1.0, int(np.iinfo(dtype).max) + 1))


def _white(dtype: Any) -> Any:
    return dtype.type(1.0) if dtype.kind == "f" else np.iinfo(dtype).max


def _encode(linear: NDArray[np.float64], curve: Curve, dtype: Any) -> NDArray[Any]:
    encoded = transfer.encode(curve, linear)
    if dtype.kind == "f":
        return encoded.astype(dtype)
    top = int(np.iinfo(dtype).max)
    return np.clip(np.round(encoded * top), 0, top).astype(dtype)
