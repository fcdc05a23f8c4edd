"""Places in a frame: boxes as people give them, and as the stored pixels need them."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence

import numpy as np

from grader.errors import PresetError
from grader.model import Header

Box = tuple[int, int, int, int]
"""x, y, width, height in pixels of the stored orientation."""


def parse_box(text: str) -> tuple[float, float, float, float]:
    """Return the box that a text gives: four whole numbers of pixels, fractions, or percentages.

    Raises
    ------
    PresetError
        The text is no box.

    Examples
    --------
    >>> parse_box("120,80,64,48"), parse_box("0.4, 0.4, 0.1, 0.1"), parse_box("40%,40%,10%,10%")
    ((120, 80, 64, 48), (0.4, 0.4, 0.1, 0.1), (0.4, 0.4, 0.1, 0.1))
    """
    parts = [part.strip() for part in text.split(",")]
    if len(parts) == 4 and all(re.fullmatch(r"[0-9]{1,7}", p) for p in parts):
        x, y, width, height = (int(p) for p in parts)
        return x, y, width, height
    if len(parts) == 4 and all(re.fullmatch(r"[0-9]{1,3}(\.[0-9]{0,17})?%?", p) for p in parts):
        shares = [float(p.removesuffix("%")) / (100 if p.endswith("%") else 1) for p in parts]
        return shares[0], shares[1], shares[2], shares[3]
    raise PresetError(
        f"{text!r} is no patch",
        hint="give X,Y,W,H in pixels, or all four as fractions (0.4) or per cent (40%)",
    )


def stored_box(box: Sequence[float], header: Header) -> tuple[float, float, float, float]:
    """Return where a box of the upright picture, as viewers show it, lies in the stored pixels.

    Parameters
    ----------
    box : (x, y, width, height)
        Pixels or fractions, as for `sample_patch`.
    header : Header
        Its EXIF orientation, width and height count.

    Examples
    --------
    >>> stored_box((0, 0, 10, 20), Header(width_px=600, height_px=400, orientation=6))
    (0, 390, 20, 10)
    """
    x, y, width, height = box
    stored_width, stored_height = (1.0, 1.0) if _is_fractions(box) else (header.width_px, header.height_px)
    if header.orientation in (5, 6, 7, 8):
        x, y, width, height = y, x, height, width
    if header.orientation in (2, 3, 7, 8):
        x = stored_width - x - width
    if header.orientation in (3, 4, 6, 7):
        y = stored_height - y - height
    return x, y, width, height


def pixels_of_box(box: Sequence[float], header: Header, shape: tuple[int, ...]) -> Box:
    """Return a box in whole pixels, wholly inside a frame of this (height, width).

    Raises
    ------
    PresetError
        It is not a box, or not inside.
    """
    height_px, width_px = shape[:2]
    numbers = [float(v) for v in box]
    if len(numbers) != 4 or not all(math.isfinite(v) for v in numbers):
        raise PresetError("a patch is four numbers: x, y, width, height", path=header.file)
    if _is_fractions(box):
        if max(numbers) > 1.0:
            hint = "give whole pixels, or four fractions from 0 to 1"
            raise PresetError("the patch mixes pixels and fractions", path=header.file, hint=hint)
        scale = (width_px, height_px)
        left, top = round(numbers[0] * scale[0]), round(numbers[1] * scale[1])
        right, bottom = (
            round((numbers[0] + numbers[2]) * scale[0]),
            round((numbers[1] + numbers[3]) * scale[1]),
        )
    else:
        left, top = int(numbers[0]), int(numbers[1])
        right, bottom = left + int(numbers[2]), top + int(numbers[3])
    if not (0 <= left < right <= width_px and 0 <= top < bottom <= height_px):
        raise PresetError(
            f"the patch {left},{top},{right - left},{bottom - top} is not inside the frame",
            path=header.file,
            hint=f"the frame has {width_px} x {height_px} pixels",
        )
    return left, top, right - left, bottom - top


def _is_fractions(box: Sequence[float]) -> bool:
    """Whether any of the numbers is a fraction; 10.0 is ten pixels, but 0.0 and 1.0 alone are fractions."""
    floats = [float(v) for v in box if isinstance(v, (float, np.floating))]
    whole = all(v.is_integer() for v in floats) and any(v > 1 for v in box)
    return bool(floats) and not whole
