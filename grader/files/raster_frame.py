"""From decoded samples to a frame: depth, grey, alpha and colour, the same way for TIFF, JPEG and PNG."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

from grader.files import raster_alpha, raster_colour, raster_depth
from grader.files.raster import Decoded
from grader.model import Frame, Header


def frame_from_decoded(decoded: Decoded, path: Path, sha256: str) -> Frame:
    """Return the frame of decoded samples.

    Parameters
    ----------
    decoded : Decoded
        Its ``encoding`` is completed on the way.
    path : Path
    sha256 : str
        Digest of the file.
    """
    decoded.encoding |= {
        "kind": decoded.kind,
        "bits": decoded.bits,
        "sample": "float" if decoded.samples.dtype.kind == "f" else "uint",
    }
    pixels, space = raster_colour.coloured(decoded)
    alpha = None
    if decoded.alpha is not None:
        alpha = raster_depth.scaled(decoded.alpha, decoded.bits)
        pixels = raster_alpha.unassociated(pixels, alpha, decoded)
        alpha = raster_depth.like(alpha, pixels)
    header = Header(file=str(path), format=decoded.format, sha256=sha256)
    header = replace(header, **decoded.facts)
    header = replace(
        header,
        width_px=pixels.shape[1],
        height_px=pixels.shape[0],
        flags=(*header.flags, *decoded.flags, *(("grey",) if decoded.kind == "grey" else ())),
        notes=(*header.notes, *decoded.notes),
    )
    return Frame(pixels, space, header, decoded.metadata, alpha, decoded.encoding)
