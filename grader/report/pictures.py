"""Small pictures for a report: made from the JPEG bytes that the caller hands over, within a budget of bytes."""

from __future__ import annotations

import base64
import io
from collections.abc import Callable, Sequence
from typing import Final

from PIL import Image, ImageOps

from grader.errors import GraderError
from grader.report.records import FrameRow, Line

Pair = tuple[bytes | None, bytes | None]
Thumbnails = Callable[[Line], Pair]

CARD_SIDE_PX: Final = 320
_CARD_QUALITY: Final = 60
_SIDES: Final = ((320, 11_000), (240, 7_000), (160, 3_600), (128, 2_300), (96, 1_300))
"""Longer sides of a small picture and the bytes that a busy photograph takes there (measured on packaged ones)."""
_QUALITIES: Final = (50, 30, 15)


def open_picture(data: bytes | None) -> Image.Image | None:
    """Return the picture in these bytes as RGB, or None where there is none."""
    if not data:
        return None
    try:
        with Image.open(io.BytesIO(data)) as picture:
            return picture.convert("RGB")
    except (OSError, ValueError, SyntaxError, Image.DecompressionBombError):
        return None


def pair_of(thumbnails: Thumbnails | None, row: FrameRow) -> tuple[Image.Image | None, Image.Image | None]:
    """Return a frame's pictures before and after; None where the files are gone or cannot be read."""
    if thumbnails is None:
        return None, None
    try:
        before, after = thumbnails(row.record)
    except (GraderError, OSError, ValueError):
        return None, None
    return open_picture(before), open_picture(after)


def small_uri(picture: Image.Image, side_px: int, most_bytes: int | None = None) -> str:
    """Return a picture as a ``data:`` address, no longer than wanted where its content allows.

    Parameters
    ----------
    picture : Image
        RGB.
    side_px : int
        Longest side.
    most_bytes : int, optional
        Coarser settings are tried, up to the coarsest, until the picture fits.
    """
    small = (
        ImageOps.contain(picture, (side_px, side_px), Image.Resampling.LANCZOS)
        if _larger(picture, side_px)
        else picture
    )
    for quality in (_CARD_QUALITY,) if most_bytes is None else _QUALITIES:
        buffer = io.BytesIO()
        small.save(buffer, "WEBP", quality=quality, method=4)
        if most_bytes is None or buffer.tell() <= most_bytes:
            break
    return "data:image/webp;base64," + base64.b64encode(buffer.getvalue()).decode("ascii")


def plan_sides(frames: int, budget_bytes: int) -> tuple[int, int, int]:
    """Return how many frames get a pair of pictures, their longest side, and the most bytes of one.

    Examples
    --------
    >>> plan_sides(100, 4_000_000)
    (100, 320, 15000)
    >>> plan_sides(50_000, 4_000_000)
    (1153, 96, 1300)
    """
    if frames <= 0 or budget_bytes <= 0:
        return 0, _SIDES[-1][0], _SIDES[-1][1]
    allowance = int(budget_bytes / (2 * frames) * 3 / 4)  # base64 makes four bytes of three
    for side_px, usual_bytes in _SIDES:
        if usual_bytes <= allowance:
            return frames, side_px, allowance
    side_px, least = _SIDES[-1]
    return int(budget_bytes / (2 * least) * 3 / 4), side_px, least


def spread_evenly(items: Sequence[int], wanted: int) -> list[int]:
    """Return about this many items, evenly spread, the first and the last among them.

    Examples
    --------
    >>> spread_evenly(range(100), 4)
    [0, 33, 66, 99]
    """
    if wanted >= len(items):
        return list(items)
    if wanted < 2:
        return list(items[:wanted])
    return [items[round(k * (len(items) - 1) / (wanted - 1))] for k in range(wanted)]


def _larger(picture: Image.Image, side_px: int) -> bool:
    return max(picture.size) > side_px
