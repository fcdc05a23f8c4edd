"""Frames made from arrays."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from grader.colour.spaces import linear_variant, space_by_name
from grader.errors import PresetError, UnsupportedFile
from grader.model import Frame, Header, Metadata, Referred


def frame_from_array(
    pixels: NDArray[Any],
    *,
    space: str = "sRGB",
    linear: bool = False,
    referred: Referred = "display",
    **facts: Any,
) -> Frame:
    """Return a frame made from an array.

    Parameters
    ----------
    pixels : (H, W, 3) or (H, W)
        uint8 or uint16 (the maximum is white) or floating point (1 is white, kept as float32); grey pictures
        are repeated over the three channels.
    space : str
        Name of the colour space that explains them.
    linear : bool
        The values are linear light in that space's primaries.
    referred : {"display", "scene"}
        Whether a white balance is baked in, or the light's absolute chromaticity is meant.
    **facts
        Fields of `grader.model.Header` that are known besides, such as ``body`` or ``taken_at``, and
        ``metadata`` or ``alpha`` of the frame.

    Returns
    -------
    Frame
        ``space`` keeps its curve, or is the linear variant.

    Raises
    ------
    UnsupportedFile
        The array is not a picture of a type that grader grades.
    PresetError
        The space, the referral or a fact is unknown.

    Examples
    --------
    >>> frame = frame_from_array(np.full((2, 3, 3), 0.5), space="Rec.2020", linear=True, referred="scene")
    >>> frame.space.name, frame.pixels.dtype.name, frame.header.width_px
    ('linear Rec.2020', 'float32', 3)
    """
    if referred not in ("display", "scene"):
        raise PresetError(f"a frame is referred to 'display' or 'scene', not {referred!r}")
    picture = _as_picture(np.asarray(pixels))
    named = space_by_name(space)
    of_frame = {key: facts.pop(key) for key in ("alpha", "encoding") if key in facts}
    metadata = facts.pop("metadata", Metadata())
    height_px, width_px = picture.shape[:2]
    try:
        header = Header(width_px=width_px, height_px=height_px, referred=referred, **facts)
    except TypeError as error:
        raise PresetError(f"a frame has no such facts: {', '.join(facts)}") from error
    return Frame(picture, linear_variant(named) if linear else named, header, metadata, **of_frame)


def _as_picture(pixels: NDArray[Any]) -> NDArray[Any]:
    """Return (H, W, 3) uint8, uint16 or float32."""
    if pixels.ndim == 2:
        pixels = np.repeat(pixels[..., None], 3, axis=2)
    if pixels.ndim != 3 or pixels.shape[2] != 3 or 0 in pixels.shape:
        raise UnsupportedFile(
            f"an array of shape {pixels.shape} is not a picture",
            hint="give (height, width, 3) or (height, width)",
        )
    if pixels.dtype.kind == "u" and pixels.dtype.itemsize <= 2:
        return np.ascontiguousarray(pixels, dtype=pixels.dtype.newbyteorder("="))
    if pixels.dtype.kind == "f":
        return np.ascontiguousarray(pixels, dtype=np.float32)
    raise UnsupportedFile(
        f"pixels of type {pixels.dtype} are not supported", hint="give uint8, uint16 or float"
    )
