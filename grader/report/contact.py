"""The contact sheet: pages of small pictures, before over after, for people without a browser."""

from __future__ import annotations

import io
import math
import os
import unicodedata
from collections.abc import Iterable, Sequence
from functools import cache
from pathlib import Path
from typing import Final, NamedTuple

from PIL import Image, ImageDraw, ImageFont, ImageOps

from grader.atomic import write_atomic
from grader.report import charts, verdict, words
from grader.report.page import short_names
from grader.report.pictures import Thumbnails, pair_of, spread_evenly
from grader.report.records import FrameRow, Line, Shoot, flag_words
from grader.report.recount import read_shoot

MOST_FRAMES: Final = 2000
_COLUMNS: Final = 6
_ROWS: Final = 4
_PICTURE_PX: Final = (360, 240)
_GAP_PX: Final = 24
_TEXT_PX: Final = 96
_HEAD_PX: Final = 110
_PAPER: Final = (112, 112, 112)
"""Neutral, near mid grey: a ground against which a cast is seen, and white text is read (contrast 4.9 to 1)."""
_INK: Final = (255, 255, 255)
_EMPTY: Final = (92, 92, 92)


class _Page(NamedTuple):
    image: Image.Image
    draw: ImageDraw.ImageDraw


def write_contact_sheet(
    records: Iterable[Line], target: str | os.PathLike[str], *, thumbnails: Thumbnails
) -> list[Path]:
    """Write pages of small pictures, before over after, with file name and flags, as JPEG.

    Parameters
    ----------
    records : iterable of mappings
        The log's lines, parsed; for one file the later line stands.
    target : path-like
        The file of the first page; more pages take ``-2``, ``-3``, ... before the suffix. Existing files
        are replaced.
    thumbnails : callable
        Takes a frame's line and returns the JPEG bytes of the frame before and after, None where there is none.

    Returns
    -------
    list of Path
        The pages. A shoot of more than 2000 frames shows an even sample and those to look at.

    Raises
    ------
    WriteFailed
        A page cannot be written.
    """
    shoot = read_shoot(records)
    rows, names = _chosen(shoot), short_names([row.file for row in shoot.frames])
    per_page = _COLUMNS * _ROWS
    pages = max(math.ceil(len(rows) / per_page), 1)
    written = []
    for number in range(pages):
        page = _new_page(shoot, rows, number + 1, pages)
        for place, row in enumerate(rows[number * per_page : (number + 1) * per_page]):
            _put(page, _corner(place), row, names[row.file], thumbnails)
        path = _page_path(Path(target), number + 1)
        buffer = io.BytesIO()
        page.image.save(buffer, "JPEG", quality=88, optimize=True)
        write_atomic(path, buffer.getvalue(), overwrite=True)
        written.append(path)
    return written


def _chosen(shoot: Shoot) -> list[FrameRow]:
    ordered = charts.in_order(shoot.frames)
    if len(ordered) <= MOST_FRAMES:
        return ordered
    look = {row.file for row in shoot.to_look_at[: MOST_FRAMES // 2]}
    others = [index for index, row in enumerate(ordered) if row.file not in look]
    kept = look | {ordered[index].file for index in spread_evenly(others, MOST_FRAMES - len(look))}
    return [row for row in ordered if row.file in kept]


def _page_path(target: Path, number: int) -> Path:
    return target if number == 1 else target.with_name(f"{target.stem}-{number}{target.suffix}")


def _new_page(shoot: Shoot, rows: Sequence[FrameRow], number: int, pages: int) -> _Page:
    width = _COLUMNS * (_PICTURE_PX[0] + _GAP_PX) + _GAP_PX
    used = min(len(rows) - (number - 1) * _COLUMNS * _ROWS, _COLUMNS * _ROWS)
    lines = max(math.ceil(used / _COLUMNS), 1)
    height = _HEAD_PX + lines * (2 * _PICTURE_PX[1] + _TEXT_PX + _GAP_PX) + _GAP_PX
    image = Image.new("RGB", (width, height), _PAPER)
    draw = ImageDraw.Draw(image)
    sample = f"; {len(rows)} of {len(shoot.frames)} frames are shown" if len(rows) < len(shoot.frames) else ""
    draw.text((_GAP_PX, 20), drawable(verdict.headline(shoot)), _INK, _font(36))
    told = f"Above as shot, below corrected, both with the same tone{sample}. Page {number} of {pages}."
    draw.text((_GAP_PX, 66), told, _INK, _font(24))
    return _Page(image, draw)


def _corner(place: int) -> tuple[int, int]:
    line, column = divmod(place, _COLUMNS)
    return (
        _GAP_PX + column * (_PICTURE_PX[0] + _GAP_PX),
        _HEAD_PX + line * (2 * _PICTURE_PX[1] + _TEXT_PX + _GAP_PX),
    )


def _put(page: _Page, corner: tuple[int, int], row: FrameRow, name: str, thumbnails: Thumbnails) -> None:
    x, y = corner
    for picture, when in zip(pair_of(thumbnails, row), ("before", "after"), strict=True):
        if picture is None:
            page.draw.rectangle((x, y, x + _PICTURE_PX[0] - 1, y + _PICTURE_PX[1] - 1), _EMPTY)
            page.draw.text((x + 12, y + 12), f"no picture {when}", _INK, _font(22))
        else:
            small = ImageOps.contain(picture, _PICTURE_PX, Image.Resampling.LANCZOS)
            left, top = (_PICTURE_PX[0] - small.width) // 2, (_PICTURE_PX[1] - small.height) // 2
            page.image.paste(small, (x + left, y + top))
        y += _PICTURE_PX[1]
    _caption(page.draw, (x, y + 4), row, name)
    if row.needs_eye or row.status == "failed":
        edge = (x - 5, corner[1] - 5, x + _PICTURE_PX[0] + 4, y + 4)
        page.draw.rectangle(edge, outline=_INK, width=5)


def _caption(draw: ImageDraw.ImageDraw, corner: tuple[int, int], row: FrameRow, name: str) -> None:
    told = row.error if row.status == "failed" else "; ".join(flag_words(flag) for flag in row.flags)
    mark = "FAILED: " if row.status == "failed" else "LOOK: " if row.needs_eye else ""
    cast = words.frame_cast(row)
    lines = [(name, 24), *((line, 19) for line in _wrapped(mark + (told or cast), 19))]
    x, y = corner
    for line, size in lines[:4]:
        draw.text((x, y), _shortened(drawable(line), size), _INK, _font(size))
        y += size + 3


def _wrapped(content: str, size: int) -> list[str]:
    lines = [""]
    for word in drawable(content).split():
        longer = f"{lines[-1]} {word}".strip()
        if lines[-1] and _font(size).getlength(longer) > _PICTURE_PX[0]:
            lines.append(word)
        else:
            lines[-1] = longer
    return lines


def _shortened(line: str, size: int) -> str:
    if _font(size).getlength(line) <= _PICTURE_PX[0]:
        return line
    while line and _font(size).getlength(line + "...") > _PICTURE_PX[0]:
        line = line[:-1]
    return line + "..."


def drawable(content: str) -> str:
    r"""Return text in the characters that the bundled font has: accents dropped, the others as escapes.

    Examples
    --------
    >>> drawable("Café – 写")
    'Cafe - \\u5199'
    """
    plain = content.translate({0x2013: "-", 0x2212: "-", 0xB0: " degrees"})
    parts = unicodedata.normalize("NFKD", plain)
    return "".join(c if c.isascii() else ascii(c)[1:-1] for c in parts if not unicodedata.combining(c))


@cache
def _font(size: int) -> ImageFont.FreeTypeFont | ImageFont.ImageFont:
    return ImageFont.load_default(size)
