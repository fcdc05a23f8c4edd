"""The samples of one TIFF page, brought to the common form."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader.errors import DamagedFile
from grader.files import tiff_check, tiff_embedded, tiff_ycbcr
from grader.files.raster import Decoded, Kind
from grader.files.raster_depth import like, scaled

_BUFFER_BYTES: Final = 8 << 20
_KINDS: Final[dict[int, Kind]] = {
    tiff_check.GREY_INVERTED: "grey",
    tiff_check.GREY: "grey",
    tiff_check.RGB: "rgb",
    tiff_check.PALETTE: "rgb",
    tiff_check.CMYK: "cmyk",
    tiff_check.YCBCR: "rgb",
    tiff_check.LAB: "lab",
    tiff_check.ICC_LAB: "lab",
}
_LAYERS, _EMPTY_LAYERS = 37724, 64
"""The tag in which layered files keep what their picture is made of, and the bytes of an empty one. (common practice)"""
_ALPHA: Final = {0: "unspecified", 1: "associated", 2: "straight"}


def decode(page: Any) -> Decoded:
    """Return the samples of a page that `tiff_check.check` let through."""
    samples = _samples(page)
    photometric, bits = int(page.photometric), page.bitspersample
    colours = tiff_check.colour_samples(page)
    alpha = samples[..., colours] if samples.shape[2] > colours else None
    decoded = Decoded(
        samples[..., :colours], _KINDS[photometric], bits, "tiff", icc=_profile(page), alpha=alpha
    )
    decoded.encoding = encoding(page)
    if alpha is not None:
        decoded.encoding["alpha"] = _ALPHA.get(int((page.extrasamples or (0,))[0]), "unspecified")
    if _LAYERS in page.tags and page.tags[_LAYERS].count > _EMPTY_LAYERS:
        decoded.notes.append(
            "the file holds layers; the picture they make was taken, the layers are not kept"
        )
    if photometric == tiff_check.GREY_INVERTED:
        decoded.samples = inverted(decoded.samples, bits)
    elif photometric == tiff_check.PALETTE:
        _look_up(decoded, page)
    elif decoded.kind == "lab":
        decoded.samples = _lab(decoded.samples, bits, unsigned=photometric == tiff_check.ICC_LAB)
    return decoded


def _samples(page: Any) -> NDArray[Any]:
    """Return (H, W, samples), native byte order."""
    if int(page.photometric) == tiff_check.YCBCR and int(page.compression) not in tiff_check.JPEG_KINDS:
        return tiff_ycbcr.samples(page)
    tiff_embedded.check(page, segments(page))
    data = page.asarray(squeeze=False, buffersize=_BUFFER_BYTES, maxworkers=1)
    data = data[:, 0]  # (separate samples, H, W, contiguous samples)
    data = np.moveaxis(data[..., 0], 0, -1) if int(page.planarconfig) == 2 else data[0]
    if data.shape[:2] != (page.imagelength, page.imagewidth):
        raise DamagedFile("the picture has another size than its header claims")
    native = data.dtype.newbyteorder("=")
    return np.ascontiguousarray(data, dtype=native)


def segments(page: Any) -> Iterator[bytes]:
    """Return the stored bytes of each strip or tile."""
    handle = page.parent.filehandle
    for offset, count in zip(page.dataoffsets, page.databytecounts, strict=False):
        handle.seek(offset)
        yield handle.read(count)


def _profile(page: Any) -> bytes | None:
    icc = page.tags.valueof(34675)
    return bytes(icc) if isinstance(icc, bytes | np.ndarray | tuple) else None


def encoding(page: Any) -> dict[str, Any]:
    """Return what a writer needs to write the same kind of TIFF (keys: see ``grader.files``)."""
    return {
        "compression": int(page.compression),
        "predictor": int(page.predictor),
        "tile": (page.tilelength, page.tilewidth) if page.is_tiled else None,
        "rows_per_strip": None if page.is_tiled else min(page.rowsperstrip, page.imagelength),
        "planar": int(page.planarconfig) == 2,
        "byteorder": page.parent.byteorder,
        "bigtiff": bool(page.parent.is_bigtiff),
        "min_is_white": int(page.photometric) == tiff_check.GREY_INVERTED,
        "resolution": _resolution(page),
        "sample_bytes": page.dtype.itemsize,
    }


def _resolution(page: Any) -> tuple[tuple[int, int], tuple[int, int], int] | None:
    """Return the x and y resolution as stored, and their unit (1 none, 2 inch, 3 cm); None where it says nothing."""
    x, y, unit = page.tags.valueof(282), page.tags.valueof(283), page.tags.valueof(296, 2)
    if not all(isinstance(v, tuple) and len(v) == 2 and v[0] > 0 and v[1] > 0 for v in (x, y)):
        return None
    if (x, y, unit) == ((1, 1), (1, 1), 1):
        return None
    return (x, y, int(unit))


def inverted(samples: NDArray[Any], bits: int) -> NDArray[Any]:
    """Return samples with black and white changed over."""
    if samples.dtype.kind == "f":
        return 1 - samples
    return np.asarray(samples.dtype.type(2**bits - 1) - samples)


def _look_up(decoded: Decoded, page: Any) -> None:
    """Replace palette indices by their colours."""
    colours = np.asarray(page.colormap, np.uint16).T
    indices = decoded.samples[..., 0].astype(np.intp, copy=False)
    if colours.ndim != 2 or colours.shape[1] != 3 or indices.max(initial=0) >= len(colours):
        raise DamagedFile("its pixels point outside its palette")
    if not colours.max() > 255:  # some writers store 8-bit entries
        colours = colours.astype(np.uint8)
    elif not np.any(colours % 257):
        colours = (colours // 257).astype(np.uint8)
    elif not np.any(colours & 255):  # others shift them up
        colours = (colours >> 8).astype(np.uint8)
    decoded.samples = colours[indices]
    if decoded.alpha is not None:
        decoded.alpha = like(scaled(decoded.alpha, decoded.bits), decoded.samples)
    decoded.bits = 8 * colours.dtype.itemsize
    decoded.flag("converted", "the palette was resolved: written as RGB")


def _lab(samples: NDArray[Any], bits: int, *, unsigned: bool) -> NDArray[np.float32]:
    """Return L* a* b* of stored samples.

    References
    ----------
    .. [1] Adobe, "TIFF Revision 6.0", 1992, section 23 (CIELab: a* and b* signed).
    .. [2] Adobe, "TIFF Technical Notes", 1995 and 2002 (ICCLab: a* and b* offset by half).
    """
    if samples.dtype.kind == "f":
        return samples.astype(np.float32)
    top = 2.0**bits - 1
    step = 2.0 ** (bits - 8)
    stored = samples.astype(np.int64) & (2**bits - 1)
    lightness = stored[..., :1] * (100.0 / top)
    chroma = stored[..., 1:]
    signed = chroma - 2 ** (bits - 1) if unsigned else (chroma ^ 2 ** (bits - 1)) - 2 ** (bits - 1)
    return np.concatenate([lightness, signed / step], axis=-1).astype(np.float32)
