"""The table on the terminal: a line a stretch, aligned, as wide as the terminal allows."""

from __future__ import annotations

import textwrap
import unicodedata
from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import Final, NamedTuple

from grader.report import verdict, words
from grader.report.records import Line, Shoot, Stretch
from grader.report.recount import read_shoot

_BOLD, _LOOK, _QUIET, _PLAIN = "\x1b[1m", "\x1b[33m", "\x1b[2m", "\x1b[0m"
_GAP: Final = "  "
_LEAST_NAME: Final = 12
_MOST_LOOK: Final = 10


class _Column(NamedTuple):
    head: str
    cells: list[str]
    right: bool = False
    rank: int = 0
    """Columns of the highest rank are dropped first where the terminal is narrow; 0 always stays."""


def table(summary_or_records: Line | Iterable[Line], *, colour: bool, width: int) -> str:
    """Return the shoot as a table: the verdict, a line a stretch, the bodies, the frames to look at.

    Parameters
    ----------
    summary_or_records : mapping or iterable of mappings
        A log's summary line, or all of its lines, parsed.
    colour : bool
        Use the terminal's colours; the words say the same without.
    width : int
        Columns of the terminal. Columns of less weight are dropped where it is narrow.

    Returns
    -------
    str
        Lines that end in a newline; the unit of each column stands in its head.
    """
    alone = isinstance(summary_or_records, Mapping)
    shoot = read_shoot(
        [summary_or_records] if isinstance(summary_or_records, Mapping) else summary_or_records
    )
    width = max(width, 40)
    lines = (
        []
        if alone
        else [*(_styled(line, _BOLD, colour) for line in _wrapped(verdict.headline(shoot), width)), ""]
    )
    lines += _stretch_lines(shoot, colour=colour, width=width)
    lines += _body_lines(shoot, width)
    lines += _beyond_lines(shoot, width)
    lines += _look_lines(shoot, colour=colour, width=width)
    return "\n".join(lines).rstrip("\n") + "\n"


def cut(content: str, width: int) -> str:
    """Return text that takes at most this many columns of a terminal; an ellipsis stands for what is cut.

    Examples
    --------
    >>> cut("aisle-0007.dng", 8), cut("写真.tif", 5)
    ('aisle-0…', '写真…')
    """
    if columns(content) <= width:
        return content
    kept = ""
    for character in content:
        if columns(kept + character) > width - 1:
            break
        kept += character
    return kept + "…"


def columns(content: str) -> int:
    """Return how many columns of a terminal a text takes: wide characters two, combining ones none."""
    return sum(_columns_of(character) for character in content)


def _columns_of(character: str) -> int:
    if unicodedata.combining(character) or unicodedata.category(character) in {"Mn", "Me", "Cf"}:
        return 0
    return 2 if unicodedata.east_asian_width(character) in {"W", "F"} else 1


def _stretch_lines(shoot: Shoot, *, colour: bool, width: int) -> list[str]:
    if not shoot.stretches:
        return ["No stretches of light in this log."]
    moving = [bool(words.drifted(stretch)) for stretch in shoot.stretches]
    fitted = _fit(_stretch_columns(shoot), width)
    return _laid_out(fitted, marks=moving, colour=colour)


def _stretch_columns(shoot: Shoot) -> list[_Column]:
    stretches = shoot.stretches
    labels = {body.body: body.label for body in shoot.bodies}

    def column(head: str, cell: Callable[[Stretch], str], *, rank: int, right: bool = True) -> _Column:
        return _Column(head, [cell(stretch) for stretch in stretches], right, rank)

    return [
        column("stretch", lambda s: s.stretch, rank=0, right=False),
        column("body", lambda s: labels.get(s.body, s.body), rank=5, right=False),
        column("from", lambda s: words.clock(s.first_taken_at), rank=2),
        column("to", lambda s: words.clock(s.last_taken_at), rank=4),
        column("frames", lambda s: str(s.frames), rank=1),
        column("light K", lambda s: words.plain(s.cct_k and round(s.cct_k, -1)), rank=0),
        column("Duv", lambda s: words.signed(s.duv, 4, "-"), rank=1),
        column("yellow-blue", lambda s: words.signed(s.yellow_blue, 3, "-"), rank=3),
        column("green-magenta", lambda s: words.signed(s.green_magenta, 3, "-"), rank=3),
        column("spread dE2000", lambda s: words.plain(s.spread_delta_e_2000, 1), rank=2),
        column("drift mired/h", lambda s: words.signed(s.drift_mired_per_hour, 1, "-"), rank=0),
        column("95 % range", lambda s: _range(s.drift_mired_low, s.drift_mired_high, 1), rank=2),
        column("drift Duv/h", lambda s: words.signed(s.drift_duv_per_hour, 4, "-"), rank=4),
        column("95 % range", lambda s: _range(s.drift_duv_low, s.drift_duv_high, 4), rank=5),
        column("jump deg", lambda s: words.plain(s.largest_jump_deg, 1), rank=4),
        column("", words.drift_words, rank=1, right=False),
    ]


def _range(low: float | None, high: float | None, digits: int) -> str:
    if low is None or high is None:
        return words.NOTHING
    return f"{words.signed(low, digits, '-')} to {words.signed(high, digits, '-')}"


def _fit(table_columns: Sequence[_Column], width: int) -> list[_Column]:
    """Drop columns, those of the highest rank first, until the table is narrow enough."""
    kept = list(table_columns)
    while sum(_width(column) for column in kept) + len(_GAP) * (len(kept) - 1) > width:
        rank = max(column.rank for column in kept)
        if rank == 0:
            break
        kept = [column for column in kept if column.rank < rank]
    return kept


def _width(column: _Column) -> int:
    return max(columns(cell) for cell in (column.head, *column.cells))


def _laid_out(table_columns: Sequence[_Column], *, marks: Sequence[bool], colour: bool) -> list[str]:
    head = _GAP.join(_padded(column.head, column) for column in table_columns).rstrip()
    rows = zip(*(column.cells for column in table_columns), strict=True)
    body = [
        _GAP.join(_padded(cell, column) for cell, column in zip(row, table_columns, strict=True)).rstrip()
        for row in rows
    ]
    shown = [_styled(line, _LOOK, colour and mark) for line, mark in zip(body, marks, strict=True)]
    return [_styled(head, _QUIET, colour), *shown]


def _padded(cell: str, column: _Column) -> str:
    blank = " " * (_width(column) - columns(cell))
    return blank + cell if column.right else cell + blank


def _body_lines(shoot: Shoot, width: int) -> list[str]:
    if len(shoot.bodies) < 2:
        return []
    lines = [f"{body.label}  {words.body_name(body.body)}: {words.body_words(body)}" for body in shoot.bodies]
    return ["", *(part for line in lines for part in _wrapped(line, width))]


def _beyond_lines(shoot: Shoot, width: int) -> list[str]:
    if not shoot.beyond:
        return []
    names = [
        cut(f"  {words.plain(far, 1):>4} dE2000  {name}", width) for name, far in shoot.beyond[:_MOST_LOOK]
    ]
    more = [f"  and {len(shoot.beyond) - _MOST_LOOK} more"] if len(shoot.beyond) > _MOST_LOOK else []
    return ["", f"Beyond the tolerance: {words.count(len(shoot.beyond), 'frame')}", *names, *more]


def _look_lines(shoot: Shoot, *, colour: bool, width: int) -> list[str]:
    look = shoot.to_look_at
    if not look:
        return []
    head = f"Look at {words.count(len(look), 'frame')} by eye, worst doubt first:"
    lines = ["", *(_styled(line, _BOLD, colour) for line in _wrapped(head, width))]
    doubts = ["  ?" if row.doubt_deg is None else f"{row.doubt_deg:.1f}" for row in look[:_MOST_LOOK]]
    longest = max(columns(row.file) for row in look[:_MOST_LOOK])
    room = max(min(longest, width // 2), _LEAST_NAME)
    for row, doubt in zip(look, doubts, strict=False):
        name = cut(row.file, room)
        told = f"  {doubt:>4}°  {name}{' ' * (room - columns(name))}  {' '.join(words.why(row))}"
        lines.append(cut(told, width))
    if len(look) > _MOST_LOOK:
        lines.append(f"  and {len(look) - _MOST_LOOK} more")
    return lines


def _wrapped(content: str, width: int) -> list[str]:
    return [cut(line, width) for line in textwrap.wrap(content, width, subsequent_indent="   ")]


def _styled(line: str, style: str, colour: bool) -> str:
    return f"{style}{line}{_PLAIN}" if colour and line else line
