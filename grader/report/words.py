"""Numbers in plain words: what each part of a report says to someone who never saw the tool."""

from __future__ import annotations

import math
from datetime import UTC, datetime
from typing import Final

from grader.report.records import Body, FrameRow, Stretch, flag_words

MINUS: Final = "\u2212"
NOTHING: Final = "\u2013"

JUST_SEEN_MIRED: Final = 5.5
"""Least change of colour temperature that is seen side by side: Judd, "Sensibility to color-temperature change
as a function of temperature", JOSA 23(1), 1933, doi:10.1364/JOSA.23.000007 (figure from memory)."""
JUST_SEEN_DUV: Final = 0.002
"""About one 7-step MacAdam ellipse across the locus is +-0.006; a third of it is seen side by side (common practice)."""
_STRENGTHS: Final = ((1.0, "no visible"), (3.0, "a slight"), (8.0, "a clear"), (math.inf, "a strong"))
"""Upper limits in Delta E 2000 of a mid grey (common practice)."""


# ---------------------------------------------------------------- numbers


def signed(value: float | None, digits: int, minus: str = MINUS) -> str:
    """Return a number with its sign, or a dash.

    Examples
    --------
    >>> signed(0.0123, 3), signed(-0.0001, 3, "-"), signed(None, 3)
    ('+0.012', '0.000', '–')
    """
    if value is None:
        return NOTHING
    shown = f"{abs(value):.{digits}f}"
    if float(shown) == 0.0:
        return shown
    return ("+" if value > 0 else minus) + shown


def plain(value: float | None, digits: int = 0) -> str:
    """Return a number without a sign, or a dash."""
    return NOTHING if value is None else f"{value:.{digits}f}"


def kelvin(cct_k: float | None) -> str:
    """Return a colour temperature rounded to 10 K.

    Examples
    --------
    >>> kelvin(5603.7), kelvin(None)
    ('5600 K', 'no colour temperature')
    """
    return "no colour temperature" if cct_k is None else f"{round(cct_k, -1):.0f} K"


def count(number_of: int, one: str, many: str = "") -> str:
    """Return a count and its noun.

    Examples
    --------
    >>> count(1, "frame"), count(2, "body", "bodies")
    ('1 frame', '2 bodies')
    """
    return f"{number_of} {one if number_of == 1 else many or one + 's'}"


def clock(taken_at: str | None, *, seconds: bool = False) -> str:
    """Return the hour and minute of a capture time as the camera's clock showed it."""
    if not taken_at:
        return NOTHING
    try:
        moment = datetime.fromisoformat(taken_at)
    except ValueError:
        return NOTHING
    return moment.strftime("%H:%M:%S" if seconds else "%H:%M")


def date(clock_s: float | None) -> str:
    """Return the day of a capture time."""
    if clock_s is None:
        return ""
    try:
        moment = datetime.fromtimestamp(clock_s, UTC)
    except (OverflowError, OSError, ValueError):
        return ""
    return f"{moment.day} {moment.strftime('%B %Y')}"


# ---------------------------------------------------------------- casts and lights


def cast_words(yellow_blue: float | None, green_magenta: float | None, delta_e_2000: float | None) -> str:
    """Return a cast in words: how strong, and toward which colour.

    Examples
    --------
    >>> cast_words(0.08, 0.003, 12.0), cast_words(0.02, -0.03, 5.0), cast_words(None, None, None)
    ('a strong yellow cast', 'a clear green and yellow cast', 'not measured')
    """
    if yellow_blue is None or green_magenta is None:
        return "not measured"
    hues = hue_words(yellow_blue, green_magenta)
    if delta_e_2000 is None:
        return f"toward {hues}"
    strength = next(word for limit, word in _STRENGTHS if delta_e_2000 < limit)
    return "no visible cast" if delta_e_2000 < 1 else f"{strength} {hues} cast"


def frame_cast(row: FrameRow) -> str:
    """Return a frame's cast in words; of coloured light the figures say little, and no strength is told."""
    if "coloured-light" in row.flags:
        return "coloured light: outside what is measured"
    return cast_words(row.yellow_blue, row.green_magenta, row.delta_e_2000)


def hue_words(yellow_blue: float, green_magenta: float) -> str:
    """Return the colour or the two colours of a cast, the larger part first."""
    parts = [
        (abs(yellow_blue), "yellow" if yellow_blue > 0 else "blue"),
        (abs(green_magenta), "magenta" if green_magenta > 0 else "green"),
    ]
    parts.sort(reverse=True)
    (most, first), (least, second) = parts
    return f"{first} and {second}" if least > 0.4 * most else first


def shift_words(shift_mired: float | None, shift_duv: float | None) -> str:
    """Return a correction in words: what was added to cancel the cast.

    Examples
    --------
    >>> shift_words(-120.0, -0.004), shift_words(0.2, 0.0), shift_words(None, None)
    ('cooled by 120 mired, magenta added (0.0040 Duv)', 'left as it is', '–')
    """
    if shift_mired is None and shift_duv is None:
        return NOTHING
    parts = []
    if shift_mired is not None and abs(shift_mired) >= 0.5:
        parts.append(f"{'cooled' if shift_mired < 0 else 'warmed'} by {abs(shift_mired):.0f} mired")
    if shift_duv is not None and abs(shift_duv) >= 0.00005:
        parts.append(f"{'magenta' if shift_duv < 0 else 'green'} added ({abs(shift_duv):.4f} Duv)")
    return ", ".join(parts) or "left as it is"


def why(row: FrameRow) -> list[str]:
    """Return the reasons to look at a frame, one sentence each."""
    sentences = [_sentence(flag_words(flag)) for flag in row.flags]
    if row.error:
        sentences.insert(0, _sentence(row.error))
    if row.hint:
        sentences.append(_sentence(row.hint))
    return sentences


def drift_words(stretch: Stretch) -> str:
    """Return in words what the light did during a stretch."""
    moved, hours = drifted(stretch), span_hours(stretch)
    if moved is None or hours is None:
        return "too short to tell"
    if moved:
        return "got " + " and ".join(moved)
    return "steady" if _held(stretch, hours) else "nothing beyond chance"


def drifted(stretch: Stretch) -> list[str] | None:
    """Return the ways in which a stretch's light moved visibly and beyond chance; None where nobody can tell."""
    hours = span_hours(stretch)
    if hours is None or stretch.drift_mired_per_hour is None or stretch.drift_mired_low is None:
        return None
    moved = []
    for slope, low, high, least, (up, down) in _axes(stretch):
        if _beyond_chance(low, high) and abs(slope or 0.0) * hours >= least:
            moved.append(up if (slope or 0.0) > 0 else down)
    return moved


def _held(stretch: Stretch, hours: float) -> bool:
    """Return whether even the ends of the intervals, or a slope beyond chance, are too little to be seen."""
    for slope, low, high, least, _ in _axes(stretch):
        ends = (slope,) if _beyond_chance(low, high) else (low, high)
        if any(abs(end or 0.0) * hours >= least for end in ends):
            return False
    return True


_Axis = tuple[float | None, float | None, float | None, float, tuple[str, str]]


def _axes(stretch: Stretch) -> tuple[_Axis, _Axis]:
    """Return slope, interval, least visible movement and the words for up and down, along both scales."""
    s = stretch
    warm = (
        s.drift_mired_per_hour,
        s.drift_mired_low,
        s.drift_mired_high,
        JUST_SEEN_MIRED,
        ("warmer", "cooler"),
    )
    green = (
        s.drift_duv_per_hour,
        s.drift_duv_low,
        s.drift_duv_high,
        JUST_SEEN_DUV,
        ("greener", "more magenta"),
    )
    return warm, green


def _beyond_chance(low: float | None, high: float | None) -> bool:
    return low is not None and high is not None and (low > 0 or high < 0)


def span_hours(stretch: Stretch) -> float | None:
    """Return how long a stretch lasted; None without two different times."""
    try:
        first = datetime.fromisoformat(stretch.first_taken_at or "")
        last = datetime.fromisoformat(stretch.last_taken_at or "")
        hours = (last - first).total_seconds() / 3600
    except (ValueError, TypeError):
        return None
    return hours if hours > 0 else None


def drift_figures(stretch: Stretch, minus: str = MINUS) -> str:
    """Return a stretch's drift in mired per hour with its interval."""
    if stretch.drift_mired_per_hour is None:
        return NOTHING
    shown = f"{signed(stretch.drift_mired_per_hour, 1, minus)} mired/h"
    if stretch.drift_mired_low is None or stretch.drift_mired_high is None:
        return shown
    low, high = (signed(value, 1, minus) for value in (stretch.drift_mired_low, stretch.drift_mired_high))
    return f"{shown} ({low} to {high})"


def body_name(body: str) -> str:
    """Return a body's name, or that the files do not say."""
    return body or "a body that the files do not name"


def body_words(body: Body) -> str:
    """Return in words where a body stands against the one it is compared with."""
    if body.offset_to is None or body.yellow_blue is None:
        return "the others are compared with it" if body.is_reference else "nothing to compare with"
    if body.shared_stretches == 0:
        return f"never shared a light with {body.offset_to}, so nobody can tell"
    hues = hue_words(body.yellow_blue, body.green_magenta or 0.0)
    seen = f"shows the same light more {hues} than {body.offset_to}"
    return f"{seen}; matched" if body.applied else f"{seen}, within what chance explains; left as it is"


def _sentence(words: str) -> str:
    return words[:1].upper() + words[1:] + ("" if words.endswith((".", "!", "?")) else ".")
