"""Small pictures for a report: made from the JPEG bytes that the caller hands over, within a budget of bytes."""

from __future__ import annotations

import base64
import io
from collections.abc import Callable, Sequence
from typing import Final

from PIL import Image

from grader.errors import GraderError
from grader.report.records import FrameRow, Line

Pair = tuple[bytes | None, bytes | None]
Thumbnails = Callable[[Line], Pair]
UriPair = tuple[str | None, str | None]

CARD_SIDE_PX: Final = 320
_CARD_QUALITY: Final = 60
_SMALL_QUALITY: Final = 45
_SIDES: Final = (320, 240, 160, 128, 96)
_TRIED: Final = 12
_SPARE: Final = 0.9
"""Share of the budget that is planned for; pictures differ from those tried."""


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


def small_uri(picture: Image.Image, side_px: int, quality: int = _SMALL_QUALITY) -> str:
    """Return a picture as a ``data:`` address, its longer side at most ``side_px``."""
    small = picture.copy()
    small.thumbnail((side_px, side_px), Image.Resampling.BICUBIC, reducing_gap=2.0)
    buffer = io.BytesIO()
    small.save(buffer, "WEBP", quality=quality, method=2)
    return "data:image/webp;base64," + base64.b64encode(buffer.getvalue()).decode("ascii")


def picture_pairs(
    rows: Sequence[FrameRow],
    thumbnails: Thumbnails | None,
    *,
    large: Sequence[int],
    first: Sequence[int],
    budget: int,
) -> dict[int, UriPair]:
    """Return small pictures of frames before and after, together within a budget.

    Parameters
    ----------
    rows : sequence of FrameRow
        The frames.
    thumbnails : callable, optional
        Gives the JPEG bytes of a frame.
    large : sequence of int
        Places of the frames that get larger pictures in any case.
    first : sequence of int
        Places of those that come next; of the rest an even sample gets pictures where the budget is short.
    budget : int
        Length of all addresses together. [bytes]

    Returns
    -------
    dict
        Addresses (before, after) by place; a frame without any picture is left out.
    """
    if thumbnails is None:
        return {}
    pairs = _encoded(rows, thumbnails, large, CARD_SIDE_PX, _CARD_QUALITY)
    left = budget - sum(map(_length, pairs.values()))
    rest = sorted(set(range(len(rows))) - set(large) - set(first))
    side_px, most = _fitting(rows, thumbnails, len(first) + len(rest), left)
    chosen = [*first, *spread_evenly(rest, max(most - len(first), 0))][:most]
    small = _encoded(rows, thumbnails, chosen, side_px, _SMALL_QUALITY)
    while small and sum(map(_length, small.values())) > left:
        kept = spread_evenly(list(small), int(len(small) * _SPARE))
        small = {place: small[place] for place in kept}
    return pairs | small


def _fitting(rows: Sequence[FrameRow], thumbnails: Thumbnails, wanted: int, budget: int) -> tuple[int, int]:
    """Return the longest side at which all wanted frames fit, else the shortest and how many fit, by trying some."""
    tried = [pair_of(thumbnails, rows[place]) for place in spread_evenly(range(len(rows)), _TRIED)]
    known = [picture for pair in tried for picture in pair if picture is not None]
    if not known or budget <= 0:
        return _SIDES[-1], 0
    for side_px in _SIDES:
        usual = 2 * sum(len(small_uri(picture, side_px)) for picture in known) / len(known)
        if wanted * usual <= _SPARE * budget:
            return side_px, wanted
    return _SIDES[-1], int(_SPARE * budget / usual)


def _encoded(
    rows: Sequence[FrameRow], thumbnails: Thumbnails, places: Sequence[int], side_px: int, quality: int
) -> dict[int, UriPair]:
    pairs = {}
    for place in places:
        before, after = pair_of(thumbnails, rows[place])
        if before is not None or after is not None:
            pairs[place] = (
                None if before is None else small_uri(before, side_px, quality),
                None if after is None else small_uri(after, side_px, quality),
            )
    return pairs


def _length(pair: UriPair) -> int:
    return sum(len(uri) for uri in pair if uri is not None)


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
