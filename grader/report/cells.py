"""One row a frame for spreadsheets and scripts (RFC 4180), safe to open: no cell can be run as a formula."""

from __future__ import annotations

import csv
import io
import os
from collections.abc import Callable, Iterable
from typing import Final

from grader.atomic import write_atomic
from grader.report.charts import OPPONENT_NAMES
from grader.report.records import FrameRow, Line, flag_words, listing, mapping, number
from grader.report.recount import read_shoot

Cell = str | float | int | None

_RUN_BY_SPREADSHEETS: Final = ("=", "+", "-", "@", "\t", "\r", "\n", "\uff1d", "\uff0b", "\uff0d", "\uff20")
"""First characters that make a cell a formula (OWASP, "CSV Injection"); the last four are the wide forms."""

_COLUMNS: Final[tuple[tuple[str, Callable[[FrameRow], Cell]], ...]] = (
    ("file", lambda row: row.file),
    ("body", lambda row: row.body),
    ("body label", lambda row: row.label),
    ("taken at [ISO 8601]", lambda row: row.taken_at),
    ("status", lambda row: row.status),
    ("stretch", lambda row: row.stretch),
    ("yellow-blue [{opponent}]", lambda row: row.yellow_blue),
    ("green-magenta [{opponent}]", lambda row: row.green_magenta),
    ("white x [CIE 1931]", lambda row: row.white_xy and row.white_xy[0]),
    ("white y [CIE 1931]", lambda row: row.white_xy and row.white_xy[1]),
    ("CCT [K]", lambda row: row.cct_k),
    ("Duv [CIE 1960 uv]", lambda row: row.duv),
    ("mired [1e6/K]", lambda row: row.mired),
    ("cast [Delta E 2000]", lambda row: row.delta_e_2000),
    ("doubt [degrees]", lambda row: row.doubt_deg),
    ("light used x [CIE 1931]", lambda row: row.used_xy and row.used_xy[0]),
    ("light used y [CIE 1931]", lambda row: row.used_xy and row.used_xy[1]),
    ("correction [mired]", lambda row: row.shift_mired),
    ("correction [Duv]", lambda row: row.shift_duv),
    ("left yellow-blue [{opponent}]", lambda row: row.residual_yellow_blue),
    ("left green-magenta [{opponent}]", lambda row: row.residual_green_magenta),
    ("left [Delta E 2000]", lambda row: row.residual_delta_e_2000),
    ("look by eye [1 = yes]", lambda row: int(row.needs_eye)),
    ("flags", lambda row: " ".join(row.flags)),
    ("flags in words", lambda row: "; ".join(flag_words(flag) for flag in row.flags)),
    ("reason", lambda row: row.reason),
    ("error", lambda row: row.error),
    ("what to do", lambda row: row.hint),
    ("output file", lambda row: row.output_file),
    ("clipped [fraction]", lambda row: number(mapping(row.record.get("output")).get("clipped_fraction"))),
    (
        "out of gamut [fraction]",
        lambda row: number(mapping(row.record.get("output")).get("out_of_gamut_fraction")),
    ),
    ("notes", lambda row: "; ".join(str(note) for note in listing(row.record.get("notes")))),
)


def write_csv(records: Iterable[Line], target: str | os.PathLike[str]) -> None:
    """Write one row a frame, with the units in the header; UTF-8, an existing file is replaced.

    Numbers stand as the log has them and nothing stands where the log has none.  A text that a spreadsheet
    would run as a formula gets a leading apostrophe.

    Parameters
    ----------
    records : iterable of mappings
        The log's lines, parsed; for one file the later line stands.
    target : path-like
        The file to write.

    Raises
    ------
    WriteFailed
        The file cannot be written.
    """
    write_atomic(target, csv_text(records).encode("utf-8", "replace"), overwrite=True)


def csv_text(records: Iterable[Line]) -> str:
    """Return what `write_csv` writes."""
    shoot = read_shoot(records)
    buffer = io.StringIO(newline="")
    writer = csv.writer(buffer)
    writer.writerow(name.format(opponent=OPPONENT_NAMES[shoot.opponent]) for name, _ in _COLUMNS)
    for row in shoot.frames:
        writer.writerow(safe_cell(value(row)) for _, value in _COLUMNS)
    return buffer.getvalue()


def safe_cell(value: Cell) -> Cell:
    """Return a cell that no spreadsheet runs: a text that looks like a formula gets an apostrophe.

    Examples
    --------
    >>> safe_cell("=1+1"), safe_cell(-0.5), safe_cell(None)
    ("'=1+1", -0.5, '')
    """
    if value is None:
        return ""
    if isinstance(value, str) and value.lstrip(" ").startswith(_RUN_BY_SPREADSHEETS):
        return "'" + value
    return value
