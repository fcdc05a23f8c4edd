"""What the charts of the page draw, as plain columns; the page's script turns them into marks."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from itertools import pairwise
from typing import Any, Final

import numpy as np

from grader.colour.opponent import cast_from_xy, xy_from_cast
from grader.colour.spaces import space_by_name
from grader.colour.transfer import encode
from grader.colour.white import D65_XY, linear_from_xy, planckian_xy, xy_from_cct_duv
from grader.errors import GraderError
from grader.model import XY
from grader.report import words
from grader.report.records import FrameRow, Shoot, Stretch

OPPONENT_NAMES: Final = {"oklab": "Oklab", "ciecam16": "CIECAM16-UCS", "cielab": "CIELAB"}
_TICKS_K: Final = (2000, 2500, 3000, 4000, 5000, 6500, 10000)
_BAND_MIRED: Final = (85.0, 555.0)
"""From deep blue sky to candle light (common practice)."""
_BAND_DUV: Final = 0.02
"""Lamps and daylight lie within about this distance of the locus (common practice)."""
_BINS: Final = 24
_BINNED: Final = 0.99
"""Share of the casts that the histogram spans; the last bin holds what lies beyond."""
_LONG_PAUSE_S: Final = 6 * 3600.0


def chart_data(shoot: Shoot, rows: Sequence[FrameRow]) -> dict[str, Any]:
    """Return everything that the page's charts and its frame viewer need.

    Parameters
    ----------
    shoot : Shoot
        The whole shoot.
    rows : sequence of FrameRow
        The frames that are drawn one by one, in the order in which a reader steps through them.
    """
    timed, places = by_time(shoot.frames), _places(shoot.frames)
    return {
        "opponent": OPPONENT_NAMES[shoot.opponent],
        "timed": timed,
        "bodies": [{"label": body.label, "name": words.body_name(body.body)} for body in shoot.bodies],
        "frames": _columns(shoot, rows, places),
        "stretches": _spans(shoot, places),
        "pauses": pauses(shoot.frames) if timed else [],
        "histogram": histogram(shoot),
        **plane(shoot.opponent),
    }


def by_time(rows: Sequence[FrameRow]) -> bool:
    """Return whether the course is drawn over time: at least half of the frames have one, and they differ."""
    moments = [row.clock_s for row in rows if row.clock_s is not None]
    return 2 * len(moments) >= len(rows) and len(set(moments)) > 1


def in_order(rows: Sequence[FrameRow]) -> list[FrameRow]:
    """Return frames in order of time, those without one last; in the log's order where times say nothing."""
    if not by_time(rows):
        return list(rows)
    return sorted(rows, key=lambda row: math.inf if row.clock_s is None else row.clock_s)


def pauses(rows: Sequence[FrameRow]) -> list[list[int]]:
    """Return long pauses of the shoot as (begin, length) in ms, to be cut out of the time axis."""
    moments = sorted(row.clock_s for row in rows if row.clock_s is not None)
    if not moments:
        return []
    span = moments[-1] - moments[0]
    long = [
        (first, later) for first, later in pairwise(moments) if later - first > max(_LONG_PAUSE_S, 0.2 * span)
    ]
    edge = 0.1 * min((later - first for first, later in long), default=0.0)
    return [[round(1e3 * (first + edge)), round(1e3 * (later - first - 2 * edge))] for first, later in long]


def plane(opponent: str) -> dict[str, Any]:
    """Return the Planckian locus, the band of plausible lights and its isotherms, in the opponent plane."""
    mired = np.linspace(*_BAND_MIRED, 60)
    kelvin = 1e6 / mired
    green, magenta = (np.asarray(xy_from_cct_duv(kelvin, duv)) for duv in (_BAND_DUV, -_BAND_DUV))
    across = (_BAND_DUV, -_BAND_DUV)
    return {
        "locus": _axes(_casts(opponent, planckian_xy(kelvin))),
        "plausible": _axes(_casts(opponent, [*green, *magenta[::-1]])),
        "isotherms": [
            _axes(_casts(opponent, xy_from_cct_duv([tick, tick], across))) | {"text": f"{tick} K"}
            for tick in _TICKS_K
        ],
    }


def histogram(shoot: Shoot) -> dict[str, Any]:
    """Return how many frames had, and have, which cast (Delta E 2000 of a mid grey)."""
    before = [row.delta_e_2000 for row in shoot.frames if row.delta_e_2000 is not None]
    after = [row.residual_delta_e_2000 for row in shoot.frames if row.residual_delta_e_2000 is not None]
    most = float(np.quantile([*before, *after], _BINNED)) if before or after else 0.0
    width = next((w for w in (0.25, 0.5, 1.0, 2.0, 5.0) if most / w < _BINS), 10.0)
    edges = np.arange(0.0, min(most, 10.0 * _BINS) + width, width)
    counts = [np.histogram(np.minimum(values, edges[-1]), edges)[0].tolist() for values in (before, after)]
    return {"width": width, "starts": edges[:-1].tolist(), "before": counts[0], "after": counts[1]}


def light_hex(xy: XY | None) -> str:
    """Return a light's colour at full brightness for the screen, as ``#rrggbb``.

    Examples
    --------
    >>> light_hex((0.3127, 0.3290)), light_hex(None)
    ('#ffffff', '#808080')
    """
    if xy is None:
        return "#808080"
    srgb = space_by_name("sRGB")
    linear = np.linalg.solve(srgb.rec2020_from_linear, linear_from_xy(xy))
    encoded = encode(srgb.curves[0], np.clip(linear / linear.max(), 0.0, 1.0))
    return "#" + "".join(f"{round(255 * float(value)):02x}" for value in encoded)


def per_degree(xy: XY, opponent: str) -> tuple[float, float]:
    """Return how far one degree of recovery angle reaches from a light along (yellow-blue, green-magenta)."""
    centre = np.asarray(linear_from_xy(xy))
    yellow_blue, green_magenta = (float(value) for value in cast_from_xy(xy, opponent))
    step = 1e-3 * (1.0 if opponent == "oklab" else 100.0)
    moved = ((yellow_blue + step, green_magenta), (yellow_blue, green_magenta + step))
    angles = [_angle_deg(centre, linear_from_xy(xy_from_cast(*cast, opponent))) for cast in moved]
    return step / angles[0], step / angles[1]


def _columns(shoot: Shoot, rows: Sequence[FrameRow], places: Mapping[str, int | None]) -> dict[str, Any]:
    place = {body.label: index for index, body in enumerate(shoot.bodies)}
    stretches = {stretch.stretch: index for index, stretch in enumerate(shoot.stretches)}
    used = [_used(row, shoot.opponent) for row in rows]
    widths = _widths(shoot)
    halves = [_half_widths(row, widths) for row in rows]
    return {
        "x": [places[row.file] for row in rows],
        "body": [place[row.label] for row in rows],
        "stretch": [stretches.get(row.stretch or "", -1) for row in rows],
        "yb": _rounded(row.yellow_blue for row in rows),
        "gm": _rounded(row.green_magenta for row in rows),
        "usedYb": _rounded(cast[0] for cast in used),
        "usedGm": _rounded(cast[1] for cast in used),
        "halfYb": _rounded(half[0] for half in halves),
        "halfGm": _rounded(half[1] for half in halves),
        "leftYb": _rounded(row.residual_yellow_blue for row in rows),
        "leftGm": _rounded(row.residual_green_magenta for row in rows),
        "cct": _rounded((row.cct_k for row in rows), 0),
        "duv": _rounded(row.duv for row in rows),
        "de": _rounded((row.delta_e_2000 for row in rows), 2),
        "leftDe": _rounded((row.residual_delta_e_2000 for row in rows), 2),
        "doubt": _rounded((row.doubt_deg for row in rows), 2),
        "eye": [int(row.needs_eye) for row in rows],
        **_texts(rows),
    }


def _texts(rows: Sequence[FrameRow]) -> dict[str, Any]:
    """Return the words of frames; sentences that recur stand once in a table."""
    table: dict[str, int] = {}

    def index_of(sentence: str) -> int:
        return table.setdefault(sentence, len(table))

    columns = {
        "words": [index_of(words.frame_cast(r)) for r in rows],
        "shift": [index_of(words.shift_words(r.shift_mired, r.shift_duv)) for r in rows],
        "reason": [index_of(r.reason) for r in rows],
        "status": [index_of(r.status) for r in rows],
        "why": [[index_of(sentence) for sentence in words.why(r)] for r in rows],
        "when": [r.taken_at or "" for r in rows],
    }
    return {**columns, "texts": list(table)}


def _places(rows: Sequence[FrameRow]) -> dict[str, int | None]:
    """Return each frame's place along the course: its time [ms], or its number where times say nothing."""
    if by_time(rows):
        return {row.file: None if row.clock_s is None else round(1e3 * row.clock_s) for row in rows}
    return {row.file: number for number, row in enumerate(rows, 1)}


def _spans(shoot: Shoot, places: Mapping[str, int | None]) -> list[dict[str, Any]]:
    ends: dict[str, list[int]] = {}
    for row in shoot.frames:
        place = places[row.file]
        if row.stretch is not None and place is not None:
            ends.setdefault(row.stretch, []).append(place)
    return [_span(shoot, stretch, ends.get(stretch.stretch, [])) for stretch in shoot.stretches]


def _span(shoot: Shoot, stretch: Stretch, places: Sequence[int]) -> dict[str, Any]:
    bodies = [body.body for body in shoot.bodies]
    return {
        "name": stretch.stretch,
        "body": bodies.index(stretch.body) if stretch.body in bodies else 0,
        "ends": [min(places), max(places)] if places else None,
        "light": words.kelvin(stretch.cct_k) if stretch.cct_k else "coloured",
        "hex": light_hex(stretch.white_xy),
        "yb": _short(stretch.yellow_blue, 5),
        "gm": _short(stretch.green_magenta, 5),
        "frames": stretch.frames,
    }


def _used(row: FrameRow, opponent: str) -> tuple[float | None, float | None]:
    if row.used_xy is None:
        return row.yellow_blue, row.green_magenta
    yellow_blue, green_magenta = cast_from_xy(row.used_xy, opponent)
    return float(yellow_blue), float(green_magenta)


def _widths(shoot: Shoot) -> dict[str | None, tuple[float, float]]:
    neutral = per_degree(D65_XY, shoot.opponent)
    widths: dict[str | None, tuple[float, float]] = {None: neutral}
    for stretch in shoot.stretches:
        try:
            widths[stretch.stretch] = per_degree(stretch.white_xy or D65_XY, shoot.opponent)
        except GraderError:  # a light that the opponent space cannot hold
            widths[stretch.stretch] = neutral
    return widths


def _half_widths(
    row: FrameRow, widths: dict[str | None, tuple[float, float]]
) -> tuple[float | None, float | None]:
    doubt_deg = row.doubt_deg if row.used_doubt_deg is None else row.used_doubt_deg
    if doubt_deg is None:
        return None, None
    along, across = widths.get(row.stretch, widths[None])
    return doubt_deg * along, doubt_deg * across


def _angle_deg(first: Any, second: Any) -> float:
    first, second = np.asarray(first), np.asarray(second)
    return math.degrees(math.atan2(float(np.linalg.norm(np.cross(first, second))), float(first @ second)))


def _casts(opponent: str, whites: Iterable[Any]) -> list[tuple[float, float]]:
    casts = [cast_from_xy(tuple(xy), opponent) for xy in whites]
    return [(float(yellow_blue), float(green_magenta)) for yellow_blue, green_magenta in casts]


def _axes(casts: Sequence[tuple[float, float]]) -> dict[str, Any]:
    return {"yb": _rounded(cast[0] for cast in casts), "gm": _rounded(cast[1] for cast in casts)}


def _rounded(values: Iterable[float | None], digits: int = 5) -> list[float | None]:
    return [_short(value, digits) for value in values]


def _short(value: float | None, digits: int) -> float | int | None:
    if value is None or not math.isfinite(value):
        return None
    return round(value, digits) if digits else round(value)
