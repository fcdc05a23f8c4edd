"""From log lines to the values that a report shows: tolerant, because a log may be old, torn or odd.

Nothing in a line is trusted to be there or to be of its type; what cannot be used is None.
"""

from __future__ import annotations

import math
import unicodedata
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import Any, Final

from grader.model import EYE_FLAGS, FLAGS, XY

Line = Mapping[str, Any]

SCHEMA: Final = "grader-log/1"


@dataclass(frozen=True, slots=True)
class FrameRow:
    """One frame as its last line in the log has it; None where the log says nothing."""

    file: str
    record: Line = field(repr=False)
    body: str = ""
    label: str = "A"
    taken_at: str | None = None
    clock_s: float | None = None
    """The local capture time on the shoot's clock. [s since 1970]"""
    status: str = ""
    stretch: str | None = None
    yellow_blue: float | None = None
    green_magenta: float | None = None
    white_xy: XY | None = None
    cct_k: float | None = None
    duv: float | None = None
    mired: float | None = None
    delta_e_2000: float | None = None
    doubt_deg: float | None = None
    used_xy: XY | None = None
    used_doubt_deg: float | None = None
    shift_mired: float | None = None
    shift_duv: float | None = None
    residual_yellow_blue: float | None = None
    residual_green_magenta: float | None = None
    residual_delta_e_2000: float | None = None
    flags: tuple[str, ...] = ()
    reason: str = ""
    error: str = ""
    hint: str = ""
    output_file: str = ""

    @property
    def needs_eye(self) -> bool:
        """Whether this frame is to be looked at by eye."""
        return self.status != "failed" and not EYE_FLAGS.isdisjoint(self.flags)


@dataclass(frozen=True, slots=True)
class Stretch:
    """One stretch of light, keys as in the summary line."""

    stretch: str
    body: str = ""
    referred: str = ""
    first_file: str = ""
    last_file: str = ""
    first_taken_at: str | None = None
    last_taken_at: str | None = None
    frames: int = 0
    cct_k: float | None = None
    duv: float | None = None
    white_xy: XY | None = None
    yellow_blue: float | None = None
    green_magenta: float | None = None
    spread_delta_e_2000: float | None = None
    drift_mired_per_hour: float | None = None
    drift_mired_low: float | None = None
    drift_mired_high: float | None = None
    drift_duv_per_hour: float | None = None
    drift_duv_low: float | None = None
    drift_duv_high: float | None = None
    largest_jump_deg: float | None = None
    shift_mired: float | None = None
    shift_duv: float | None = None
    doubt_deg: float | None = None


@dataclass(frozen=True, slots=True)
class Body:
    """One camera body and where it stands against the one it is compared with."""

    body: str
    label: str
    frames: int = 0
    offset_to: str | None = None
    """Label of the body that it is compared with."""
    is_reference: bool = False
    """Other bodies are compared with it."""
    yellow_blue: float | None = None
    green_magenta: float | None = None
    offset_deg: float | None = None
    doubt_deg: float | None = None
    applied: bool | None = None
    shared_stretches: int | None = None


@dataclass(frozen=True, slots=True)
class Shoot:
    """Everything a report shows: the run, its frames in the log's order, stretches and bodies."""

    run: Line
    frames: tuple[FrameRow, ...]
    stretches: tuple[Stretch, ...]
    bodies: tuple[Body, ...]
    summary: Line
    notes: tuple[str, ...] = ()
    """What the reader must know about the log itself, in plain words."""
    beyond: tuple[tuple[str, float | None], ...] = ()
    """Files whose light lies further off than the tolerance that was asked for, and how far (Delta E 2000)."""

    def count(self, status: str) -> int:
        """Return how many frames ended with this status."""
        return sum(row.status == status for row in self.frames)

    @property
    def to_look_at(self) -> list[FrameRow]:
        """Frames to look at by eye, worst doubt first; one without a doubt could not be measured at all."""
        rows = [row for row in self.frames if row.needs_eye]
        return sorted(rows, key=lambda row: -math.inf if row.doubt_deg is None else -row.doubt_deg)

    @property
    def opponent(self) -> str:
        """Name of the opponent space in which casts are told."""
        for row in self.frames:
            name = mapping(row.record.get("cast")).get("opponent")
            if isinstance(name, str):
                return name
        name = mapping(mapping(self.run.get("preset")).get("settings")).get("opponent")
        return name if name in {"oklab", "ciecam16", "cielab"} else "oklab"


@dataclass(slots=True)
class Lines:
    """Log lines sorted by kind; for one file the later line stands."""

    run: Line = field(default_factory=dict)
    summary: Line = field(default_factory=dict)
    frames: dict[str, Line] = field(default_factory=dict)
    unusable: int = 0


def sort_lines(records: Iterable[Line]) -> Lines:
    """Return the lines of a log by kind, and the count of those that are no such line."""
    lines = Lines()
    for record in records:
        kind = record.get("kind") if isinstance(record, Mapping) else None
        if kind == "run":
            lines.run = record
        elif kind == "summary":
            lines.summary = record
        elif kind == "frame" and isinstance(record.get("file"), str):
            lines.frames[record["file"]] = record
        else:
            lines.unusable += 1
    return lines


def frame_rows(lines: Lines) -> tuple[FrameRow, ...]:
    """Return one row a frame, in the log's order."""
    records = list(lines.frames.values())
    labels = {"": "", **body_labels(filter(_came_through, records), lines.summary)}
    labels |= dict.fromkeys({text(record.get("body")) for record in records} - set(labels), "")
    moments = [moment for record in records if (moment := _moment(record.get("taken_at"))) is not None]
    aware = bool(moments) and all(moment.tzinfo is not None for moment in moments)
    offset = moments[0].utcoffset() if aware else None
    offset_s = 0.0 if offset is None else offset.total_seconds()
    return tuple(
        _row(record, labels[text(record.get("body"))], aware=aware, offset_s=offset_s) for record in records
    )


def _came_through(record: Line) -> bool:
    return record.get("status") != "failed" or bool(text(record.get("body")))


def body_labels(records: Iterable[Line], summary: Line) -> dict[str, str]:
    """Return a short label for each body: the summary's, else A, B, ... by earliest frame."""
    known = [mapping(entry) for entry in listing(summary.get("bodies"))]
    labels = {
        text(entry.get("body")): text(entry.get("label")) for entry in known if text(entry.get("label"))
    }
    free = (_letters(n) for n in range(1_000_000))
    for body in _by_first_frame(records):
        if body not in labels:
            labels[body] = next(letters for letters in free if letters not in labels.values())
    return labels


def _by_first_frame(records: Iterable[Line]) -> list[str]:
    """Return the bodies in order of their earliest frames; those without times last, as the log has them."""
    first: dict[str, float] = {}
    for record in records:
        body, clock_s = text(record.get("body")), _clock_s(record.get("taken_at"), aware=False, offset_s=0.0)
        first[body] = min(first.get(body, math.inf), math.inf if clock_s is None else clock_s)
    return sorted(first, key=lambda body: first[body])


def flag_words(flag: str) -> str:
    """Return the words of a flag; a code that this version does not know stands for itself."""
    return FLAGS.get(flag, flag)


# ---------------------------------------------------------------- values that may be anything


def number(value: Any) -> float | None:
    """Return a finite number, else None."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        return None
    try:
        found = float(value)
    except OverflowError:
        return None
    return found if math.isfinite(found) else None


def text(value: Any) -> str:
    r"""Return a string that is safe to show: control and direction-changing characters as escapes.

    Examples
    --------
    >>> text("hall\x1b[31m\u202e.jpg"), text(None)
    ('hall\\x1b[31m\\u202e.jpg', '')
    """
    if not isinstance(value, str):
        return ""
    if value.isascii() and value.isprintable():
        return value
    return "".join(_shown(character) for character in value)


def mapping(value: Any) -> Line:
    """Return the mapping, or an empty one."""
    return value if isinstance(value, Mapping) else {}


def listing(value: Any) -> list[Any]:
    """Return the list, or an empty one."""
    return list(value) if isinstance(value, list | tuple) else []


def point(value: Any) -> XY | None:
    """Return a chromaticity that some light can have, else None."""
    pair = [number(part) for part in listing(value)]
    if len(pair) != 2 or pair[0] is None or pair[1] is None:
        return None
    x, y = pair[0], pair[1]
    return (x, y) if x > 0 and y > 0 and x + y < 1 else None


def _shown(character: str) -> str:
    unsafe = unicodedata.category(character) in {"Cc", "Cs", "Zl", "Zp"}
    return (
        ascii(character)[1:-1] if unsafe or unicodedata.bidirectional(character) in _DIRECTIONS else character
    )


_DIRECTIONS: Final = {"LRE", "RLE", "LRO", "RLO", "PDF", "LRI", "RLI", "FSI", "PDI"}


def _letters(index: int) -> str:
    """Return A, B, ... Z, AA, AB, ..."""
    head, last = divmod(index, 26)
    return (_letters(head - 1) if head else "") + chr(ord("A") + last)


def _moment(value: Any) -> datetime | None:
    if not isinstance(value, str):
        return None
    try:
        return datetime.fromisoformat(value)
    except ValueError:
        return None


def _clock_s(value: Any, *, aware: bool, offset_s: float) -> float | None:
    moment = _moment(value)
    if moment is None:
        return None
    try:
        if aware:
            return moment.timestamp() + offset_s
        return moment.replace(tzinfo=UTC).timestamp()
    except (OverflowError, ValueError):
        return None


def _row(record: Line, label: str, *, aware: bool, offset_s: float) -> FrameRow:
    cast, correction = mapping(record.get("cast")), mapping(record.get("correction"))
    residual, error = mapping(record.get("residual")), mapping(record.get("error"))
    cct_k, mired = number(cast.get("cct_k")), number(cast.get("mired"))
    return FrameRow(
        file=text(record.get("file")),
        record=record,
        body=text(record.get("body")),
        label=label,
        taken_at=text(record.get("taken_at")) or None,
        clock_s=_clock_s(record.get("taken_at"), aware=aware, offset_s=offset_s),
        status=text(record.get("status")),
        stretch=text(record.get("stretch")) or None,
        yellow_blue=number(cast.get("yellow_blue")),
        green_magenta=number(cast.get("green_magenta")),
        white_xy=point(cast.get("white_xy")),
        cct_k=cct_k,
        duv=number(cast.get("duv")),
        mired=1e6 / cct_k if mired is None and cct_k else mired,
        delta_e_2000=number(cast.get("delta_e_2000")),
        doubt_deg=number(cast.get("doubt_deg")),
        used_xy=point(correction.get("from_xy")),
        used_doubt_deg=number(correction.get("doubt_deg")),
        shift_mired=number(correction.get("shift_mired")),
        shift_duv=number(correction.get("shift_duv")),
        residual_yellow_blue=number(residual.get("yellow_blue")),
        residual_green_magenta=number(residual.get("green_magenta")),
        residual_delta_e_2000=number(residual.get("delta_e_2000")),
        flags=tuple(dict.fromkeys(filter(None, map(text, listing(record.get("flags")))))),
        reason=text(correction.get("reason")),
        error=text(error.get("message")),
        hint=text(error.get("hint")),
        output_file=text(mapping(record.get("output")).get("file")),
    )
