"""Luma and chroma that a TIFF stores without JPEG: subsampled data units, turned into RGB.

References
----------
.. [1] Adobe, "TIFF Revision 6.0", 1992, section 21.
"""

from __future__ import annotations

from math import ceil
from typing import Any, Final

import imagecodecs
import numpy as np
import tifffile
from numpy.typing import NDArray

from grader.errors import DamagedFile, UnsupportedFile
from grader.files.border import CONVERT_HINT

_SUBSAMPLING, _COEFFICIENTS, _REFERENCE = 530, 529, 532
_CCIR_601: Final = (0.299, 0.587, 0.114)
_FULL_RANGE: Final = (0.0, 255.0, 128.0, 255.0, 128.0, 255.0)
_FACTORS: Final = (1, 2, 4)


def samples(page: Any) -> NDArray[np.uint8]:
    """Return (H, W, 3) RGB of an 8-bit page that `tiff_check.check` let through.

    Chroma is repeated over its unit, not interpolated, as the common library does.

    Raises
    ------
    UnsupportedFile, DamagedFile
    """
    if (
        page.bitspersample != 8
        or page.samplesperpixel != 3
        or int(page.planarconfig) != 1
        or page.predictor != 1
    ):
        raise UnsupportedFile("its luma and chroma are stored in an unusual way", hint=CONVERT_HINT)
    across, down = page.tags.valueof(_SUBSAMPLING, (2, 2))
    if across not in _FACTORS or down not in _FACTORS:
        raise DamagedFile("its chroma has impossible subsampling")
    width, length = (
        (page.tilewidth, page.tilelength) if page.is_tiled else (page.imagewidth, page.rowsperstrip)
    )
    result = np.empty((page.imagelength, page.imagewidth, 3), np.uint8)
    per_row = ceil(page.imagewidth / width)
    for index, (offset, count) in enumerate(zip(page.dataoffsets, page.databytecounts, strict=False)):
        top, left = index // per_row * length, index % per_row * width
        if top >= page.imagelength:
            break
        rows = length if page.is_tiled else min(length, page.imagelength - top)
        piece = _piece(_stored(page, offset, count), (rows, width), (down, across))
        piece = piece[: page.imagelength - top, : page.imagewidth - left]
        result[top : top + len(piece), left : left + piece.shape[1]] = _rgb(piece, page)
    return result


def _stored(page: Any, offset: int, count: int) -> NDArray[np.uint8]:
    handle = page.parent.filehandle
    handle.seek(offset)
    data = handle.read(count)
    if page.fillorder == 2:
        data = imagecodecs.bitorder_decode(data)
    if page.compression != 1:
        data = tifffile.TIFF.DECOMPRESSORS[page.compression](data)
    return np.frombuffer(data, np.uint8)


def _piece(data: NDArray[np.uint8], shape: tuple[int, int], factors: tuple[int, int]) -> NDArray[np.uint8]:
    """Return luma and chroma at full size (rows, columns, 3) of one strip's or tile's data units."""
    (rows, columns), (down, across) = shape, factors
    units = ceil(rows / down), ceil(columns / across)
    size = down * across + 2
    if data.size < units[0] * units[1] * size:
        raise DamagedFile("a piece of the picture is too short")
    unit = data[: units[0] * units[1] * size].reshape(*units, size)
    full = np.empty((units[0] * down, units[1] * across, 3), np.uint8)
    luma = unit[..., :-2].reshape(*units, down, across).transpose(0, 2, 1, 3)
    full[..., 0] = luma.reshape(full.shape[:2])
    full[..., 1:] = unit[..., -2:].repeat(down, axis=0).repeat(across, axis=1)
    return full[:rows, :columns]


def _rgb(piece: NDArray[np.uint8], page: Any) -> NDArray[np.uint8]:
    red, green, blue = _numbers(page.tags.valueof(_COEFFICIENTS), _CCIR_601)
    black = _numbers(page.tags.valueof(_REFERENCE), _FULL_RANGE)
    stored = piece.astype(np.float32)
    luma = (stored[..., 0] - black[0]) * 255.0 / (black[1] - black[0])
    chroma_blue = (stored[..., 1] - black[2]) * 127.0 / (black[3] - black[2])
    chroma_red = (stored[..., 2] - black[4]) * 127.0 / (black[5] - black[4])
    r = luma + chroma_red * (2 - 2 * red)
    b = luma + chroma_blue * (2 - 2 * blue)
    g = (luma - blue * b - red * r) / green
    return np.asarray(np.clip(np.floor(np.stack([r, g, b], axis=-1) + 0.5), 0, 255), np.uint8)


def _numbers(stored: Any, default: tuple[float, ...]) -> tuple[float, ...]:
    """Return stored rationals (numerators and denominators in turn) as numbers; the default where there are none."""
    if not isinstance(stored, tuple) or len(stored) != 2 * len(default):
        return default
    return tuple(a / b for a, b in zip(stored[::2], stored[1::2], strict=True))
