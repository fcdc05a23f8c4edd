"""The shoot from its lines: stretches and bodies as the summary states them, or counted again.

A run that was interrupted has no summary line.  Its stretches are then gathered from the frames' own
lines, plainly: medians for the light, Theil-Sen for the drift.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import fields, replace
from statistics import median
from typing import Any, Final, NamedTuple

from grader.colour.difference import grey_delta_e_2000
from grader.colour.opponent import cast_from_xy, xy_from_cast
from grader.colour.white import cct_duv_from_xy
from grader.errors import GraderError
from grader.model import XY
from grader.report.records import (
    SCHEMA,
    Body,
    FrameRow,
    Line,
    Lines,
    Shoot,
    Stretch,
    frame_rows,
    listing,
    mapping,
    number,
    point,
    sort_lines,
    text,
)

_FEWEST_FOR_DRIFT: Final = 3
_MOST_FOR_DRIFT: Final = 600
"""Theil-Sen looks at all pairs; more frames than this are thinned evenly."""


_MOST_FOR_SPREAD: Final = 200


class Drift(NamedTuple):
    """A slope per hour and its 95 % interval."""

    slope: float
    low: float
    high: float


def read_shoot(records: Iterable[Line]) -> Shoot:
    """Return what a report shows of a log.

    Parameters
    ----------
    records : iterable of mappings
        The log's lines, parsed; for one file the later line stands.
    """
    lines = sort_lines(records)
    rows = frame_rows(lines)
    stretches = tuple(
        _stretch_from(mapping(entry)) for entry in listing(lines.summary.get("stretches")) if mapping(entry)
    )
    again = not stretches and any(row.stretch for row in rows)
    return Shoot(
        run=lines.run,
        frames=rows,
        stretches=stretches_of(rows) if again else stretches,
        bodies=_bodies(rows, lines.summary),
        summary=lines.summary,
        notes=tuple(_notes(lines, rows, again=again)),
        beyond=tuple(_beyond(lines.summary)),
    )


def stretches_of(rows: Sequence[FrameRow]) -> tuple[Stretch, ...]:
    """Gather stretches from the frames' own lines, in the order in which they begin."""
    groups: dict[str, list[FrameRow]] = {}
    for row in rows:
        if row.stretch is not None:
            groups.setdefault(row.stretch, []).append(row)
    return tuple(
        _gather(name, group) for name, group in sorted(groups.items(), key=lambda item: _begin(item[1]))
    )


def theil_sen(clock_s: Sequence[float], values: Sequence[float]) -> Drift | None:
    """Return the median slope of all pairs and its 95 % interval.

    Parameters
    ----------
    clock_s : sequence of float
        Times. [s]
    values : sequence of float
        In any unit.

    Returns
    -------
    Drift or None
        In that unit per hour; None for fewer than three frames or no span of time.

    References
    ----------
    .. [1] Sen, "Estimates of the regression coefficient based on Kendall's tau", JASA 63(324), 1968,
       doi:10.1080/01621459.1968.10480934.

    Examples
    --------
    >>> theil_sen([0, 1800, 3600, 5400], [200.0, 206.0, 212.0, 218.0]).slope
    12.0
    """
    step = max(1, math.ceil(len(values) / _MOST_FOR_DRIFT))
    hours, sample = [second / 3600 for second in clock_s[::step]], values[::step]
    if len(sample) < _FEWEST_FOR_DRIFT or len(set(hours)) < 2:
        return None
    from scipy.stats import theilslopes  # noqa: PLC0415 - heavy, and only a log without a summary needs it

    found = theilslopes(sample, hours, alpha=0.95)
    drift = Drift(float(found.slope), float(found.low_slope), float(found.high_slope))
    return drift if all(map(math.isfinite, drift)) else None


def _begin(group: Sequence[FrameRow]) -> float:
    return min((row.clock_s for row in group if row.clock_s is not None), default=math.inf)


def _gather(name: str, group: list[FrameRow]) -> Stretch:
    ordered = sorted(group, key=lambda row: math.inf if row.clock_s is None else row.clock_s)
    white_xy = _median_xy([row.used_xy or row.white_xy for row in ordered])
    cct_k, duv = (None, None) if white_xy is None else cct_duv_from_xy(white_xy)
    yellow_blue, green_magenta = _cast(white_xy, ordered)
    warm, green = _drift(ordered, "mired"), _drift(ordered, "duv")
    return Stretch(
        stretch=name,
        body=ordered[0].body,
        first_file=ordered[0].file,
        last_file=ordered[-1].file,
        first_taken_at=ordered[0].taken_at,
        last_taken_at=ordered[-1].taken_at,
        frames=len(ordered),
        cct_k=cct_k,
        duv=duv,
        white_xy=white_xy,
        yellow_blue=yellow_blue,
        green_magenta=green_magenta,
        spread_delta_e_2000=_spread(ordered),
        doubt_deg=_middle(row.used_doubt_deg for row in ordered),
        drift_mired_per_hour=warm and warm.slope,
        drift_mired_low=warm and warm.low,
        drift_mired_high=warm and warm.high,
        drift_duv_per_hour=green and green.slope,
        drift_duv_low=green and green.low,
        drift_duv_high=green and green.high,
        shift_mired=_middle(row.shift_mired for row in ordered),
        shift_duv=_middle(row.shift_duv for row in ordered),
    )


def _drift(rows: Sequence[FrameRow], quantity: str) -> Drift | None:
    pairs = [(row.clock_s, value) for row in rows if (value := getattr(row, quantity)) is not None]
    known = [(clock_s, value) for clock_s, value in pairs if clock_s is not None]
    return theil_sen([clock_s for clock_s, _ in known], [value for _, value in known])


def _spread(rows: Sequence[FrameRow]) -> float | None:
    """Return the median difference of a mid grey between the frames' own lights and their median light."""
    casts = [
        (r.yellow_blue, r.green_magenta)
        for r in rows
        if r.yellow_blue is not None and r.green_magenta is not None
    ]
    casts = casts[:: max(1, math.ceil(len(casts) / _MOST_FOR_SPREAD))]
    if len(casts) < 2:
        return None
    middle = [median(part) for part in zip(*casts, strict=True)]
    opponent = Shoot({}, tuple(rows), (), (), {}).opponent
    try:
        steps = [xy_from_cast(cast[0] - middle[0], cast[1] - middle[1], opponent) for cast in casts]
    except GraderError:  # too far apart for any light
        return None
    return median(grey_delta_e_2000(xy) for xy in steps)


def _cast(white_xy: XY | None, rows: Sequence[FrameRow]) -> tuple[float | None, float | None]:
    if white_xy is not None:
        opponent = Shoot({}, tuple(rows), (), (), {}).opponent
        try:
            yellow_blue, green_magenta = cast_from_xy(white_xy, opponent)
        except GraderError:
            pass
        else:
            return float(yellow_blue), float(green_magenta)
    return _middle(row.yellow_blue for row in rows), _middle(row.green_magenta for row in rows)


def _median_xy(points: Iterable[XY | None]) -> XY | None:
    known = [xy for xy in points if xy is not None]
    return (median(x for x, _ in known), median(y for _, y in known)) if known else None


def _middle(values: Iterable[float | None]) -> float | None:
    known = [value for value in values if value is not None]
    return median(known) if known else None


def _stretch_from(entry: Line) -> Stretch:
    values: dict[str, Any] = {}
    for part in fields(Stretch):
        found = entry.get(part.name)
        if part.name == "white_xy":
            values[part.name] = point(found)
        elif part.name == "frames":
            values[part.name] = int(number(found) or 0)
        elif part.type.startswith("str"):
            values[part.name] = text(found) or (None if "None" in part.type else "")
        else:
            values[part.name] = number(found)
    return Stretch(**values)


def _bodies(rows: Sequence[FrameRow], summary: Line) -> tuple[Body, ...]:
    known = {
        text(entry.get("body")): entry for entry in map(mapping, listing(summary.get("bodies"))) if entry
    }
    counts = Counter(row.body for row in rows)
    labels = {body: text(entry.get("label")) for body, entry in known.items() if text(entry.get("label"))}
    labels |= {row.body: row.label for row in rows if row.label}
    others = {body: text(known.get(body, {}).get("offset_to")) for body in labels}
    against = {body: labels.get(other, other) for body, other in others.items()}  # a name, or a label already
    bodies = [
        _body(known.get(body, {}), body=body, label=label, frames=counts[body], offset_to=against[body])
        for body, label in labels.items()
    ]
    named = {body.offset_to for body in bodies if body.offset_to != body.label}
    told = [replace(body, is_reference=body.label in named) for body in bodies]
    return tuple(sorted(told, key=lambda body: (len(body.label), body.label)))


def _body(entry: Line, *, body: str, label: str, frames: int, offset_to: str) -> Body:
    shared = number(entry.get("shared_stretches"))
    applied = entry.get("applied")
    return Body(
        body=body,
        label=label,
        frames=frames,
        offset_to=offset_to if offset_to != label and offset_to else None,
        yellow_blue=number(entry.get("yellow_blue")),
        green_magenta=number(entry.get("green_magenta")),
        offset_deg=number(entry.get("offset_deg")),
        doubt_deg=number(entry.get("doubt_deg")),
        applied=applied if isinstance(applied, bool) else None,
        shared_stretches=None if shared is None else int(shared),
    )


def _beyond(summary: Line) -> Iterable[tuple[str, float | None]]:
    for entry in listing(summary.get("beyond_tolerance")):
        name = text(entry) or text(mapping(entry).get("file"))
        if name:
            yield name, number(mapping(entry).get("delta_e_2000"))


def _notes(lines: Lines, rows: Sequence[FrameRow], *, again: bool) -> Iterable[str]:
    schema = lines.run.get("schema")
    if not lines.run:
        yield "The log's first line is missing: what was run, and with which preset, is not known."
    elif schema != SCHEMA:
        yield f"The log says it is of format {text(schema) or 'unknown'}, not {SCHEMA}: some values may be missing."
    if not lines.summary:
        yield "The log has no closing line: the run ended early, or is still going on."
    elif lines.summary.get("interrupted") is True:
        yield "The run was interrupted: some frames may not be done yet."
    if again:
        yield "Stretches and drift were counted again for this report, from each frame's own line."
    if lines.unusable:
        yield f"{lines.unusable} lines of the log could not be used."
    total = number(lines.summary.get("frames"))
    if total is not None and int(total) != len(rows):
        yield f"The closing line speaks of {int(total)} frames, but the log has lines of {len(rows)}."
