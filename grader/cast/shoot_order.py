"""The order of a shoot: capture times, bodies, and the lanes in which frames can share a light."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import PurePath
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.errors import PresetError
from grader.model import Cast, Header, Referred

Array = NDArray[np.float64]
Indices = NDArray[np.intp]

BREAK_S: Final = 7200.0
"""Frames farther apart than this never share a stretch, so that nothing here depends on them. (judgement)"""
_SWITCH_ODDS: Final = 0.01
"""A light lasts for about a hundred frames. (judgement; half or twice of it changes little)"""
_PAUSE_S: Final = 900.0
"""A pause of this length is as good a reason for another light as a move to another room. (judgement)"""
_EXPOSURE_STOPS: Final = 2.0
"""A step of the camera settings that changing subjects under one light seldom ask for. (common practice)"""
_EXPOSURE_ODDS: Final = 5.0


@dataclass(frozen=True, slots=True, eq=False)
class Lane:
    """The frames that may be pooled with each other, in capture order.

    Frames of one body, all scene-referred or all display-referred, all with or all without flash.
    ``members`` (n,) are places in the list of casts, ``times_s`` (n,) their capture times, NaN where unknown.
    """

    body: str
    referred: Referred
    flash: bool
    members: Indices
    times_s: Array

    @property
    def timed(self) -> bool:
        """Return whether every frame has a capture time."""
        return bool(np.isfinite(self.times_s).all())


def lanes_of(casts: Sequence[Cast], times_s: Array) -> list[Lane]:
    """Return the lanes of a shoot, their frames in capture order.

    Frames of the same time follow their file names.  A frame without a time keeps its place behind the
    frame of the same body that precedes it in the list.

    Parameters
    ----------
    casts : sequence of Cast
    times_s : (n,) float64
        From `capture_times_s`.

    Returns
    -------
    list of Lane
        By body, referral and flash.
    """
    groups: dict[tuple[str, Referred, bool], list[int]] = {}
    for place in capture_order(casts, times_s):
        header = casts[place].header
        groups.setdefault((header.body, header.referred, header.flash is True), []).append(place)
    return [
        Lane(*key, members=np.array(groups[key], np.intp), times_s=times_s[groups[key]])
        for key in sorted(groups)
    ]


def capture_times_s(casts: Sequence[Cast], clocks: Mapping[str, float] | None = None) -> Array:
    """Return capture times in seconds of one common clock, NaN where a frame has none.

    Offsets from UTC are used when every timed frame has one; otherwise all times are taken as local.

    Parameters
    ----------
    casts : sequence of Cast
    clocks : mapping of str to float, optional
        Seconds to add to the clock of a body (see `body_named`). [s]

    Returns
    -------
    (n,) float64

    Raises
    ------
    PresetError
        No body, or more than one, has that name.
    """
    stamps = [_parsed(cast.header.taken_at) for cast in casts]
    absolute = all(stamp.tzinfo is not None for stamp in stamps if stamp is not None)
    add = {body_named(name, casts): seconds for name, seconds in (clocks or {}).items()}
    epoch = datetime(2000, 1, 1)
    times = np.full(len(casts), np.nan)
    for place, stamp in enumerate(stamps):
        if stamp is None:
            continue
        offset = stamp.utcoffset() if absolute else None
        since = (stamp.replace(tzinfo=None) - epoch).total_seconds()
        if offset is not None:
            since -= offset.total_seconds()
        times[place] = since + add.get(casts[place].header.body, 0.0)
    return times


def body_letters(casts: Sequence[Cast], times_s: Array) -> dict[str, str]:
    """Return the letter of each body: A is the one that appears first."""
    bodies = list(dict.fromkeys(casts[place].header.body for place in capture_order(casts, times_s)))
    return {body: _letters(count) for count, body in enumerate(bodies)}


def body_named(name: str, casts: Sequence[Cast]) -> str:
    """Return the body that a user means: its full name, or a part of it that only one body has.

    Raises
    ------
    PresetError
        No body, or more than one, has that name.
    """
    bodies = {cast.header.body for cast in casts}
    if name in bodies:
        return name
    found = sorted(body for body in bodies if name and name.lower() in body.lower())
    if len(found) == 1:
        return found[0]
    known = ", ".join(repr(body) for body in sorted(bodies))
    raise PresetError(
        f"{name!r} names {'no body' if not found else 'more than one body'}",
        hint=f"the bodies here are {known}",
    )


def switch_odds(rows: Indices, times_s: Array, casts: Sequence[Cast]) -> Array:
    """Return how likely the light is to be another one than at the frame before.

    A pause makes it likelier, and so does a jump of a body's exposure settings.

    Parameters
    ----------
    rows : (n,) intp
        Places in ``casts``, in capture order, of one body or several.
    times_s : (n,) float64
        NaN where unknown. [s]
    casts : sequence of Cast

    Returns
    -------
    (n,) float64
        0 for the first.
    """
    odds = np.zeros(len(rows))
    settings: dict[str, float] = {}
    for at, row in enumerate(rows):
        header = casts[row].header
        stops = _exposure_stops(header)
        jump = abs(stops - settings.get(header.body, math.nan)) >= _EXPOSURE_STOPS
        settings[header.body] = stops
        if at:
            gap = float(times_s[at] - times_s[at - 1])
            stay = (1.0 - _SWITCH_ODDS) * (math.exp(-max(gap, 0.0) / _PAUSE_S) if math.isfinite(gap) else 1.0)
            ratio = (1.0 - stay) / stay * (_EXPOSURE_ODDS if jump else 1.0)
            odds[at] = ratio / (1.0 + ratio)
    return odds


def natural_key(name: str | None) -> tuple[tuple[int, str], ...]:
    """Return a key that sorts file names as people do: IMG_9 before IMG_10.

    Examples
    --------
    >>> sorted(["b10", "b9", "a"], key=natural_key)
    ['a', 'b9', 'b10']
    """
    parts = re.split(r"(\d+)", PurePath(name or "").name.lower())
    return tuple((int(part), "") if part.isdecimal() else (-1, part) for part in parts)


def capture_order(casts: Sequence[Cast], times_s: Array) -> list[int]:
    """Return all places sorted by time; timeless frames stay behind their predecessor of the same body."""
    last: dict[str, float] = {}
    timeless: dict[str, int] = {}
    keys = []
    for place, cast in enumerate(casts):
        header, time = cast.header, float(times_s[place])
        if math.isfinite(time):
            last[header.body], timeless[header.body] = time, 0
            keys.append((time, 0, natural_key(header.file), header.file or "", _content(cast), place))
        else:
            timeless[header.body] = timeless.get(header.body, 0) + 1
            keys.append((last.get(header.body, -math.inf), place + 1, (), "", b"", place))
    return [key[-1] for key in sorted(keys)]


def _content(cast: Cast) -> bytes:
    return b"" if cast.evidence is None else cast.evidence.log_likelihood.tobytes()


def _parsed(taken_at: str | None) -> datetime | None:
    if not taken_at:
        return None
    try:
        return datetime.fromisoformat(taken_at)
    except ValueError:
        return None


def _exposure_stops(header: Header) -> float:
    """Return the settings as exposure value at ISO 100, NaN where one is unknown."""
    facts = (header.exposure_time_s, header.f_number, header.iso)
    if any(fact is None or fact <= 0 for fact in facts):
        return math.nan
    seconds, f_number, iso = (float(fact) for fact in facts if fact is not None)
    return math.log2(f_number**2 / seconds * 100.0 / iso)


def _letters(count: int) -> str:
    """Return A ... Z, AA, AB, ... (as spreadsheets count)."""
    text = ""
    count += 1
    while count:
        count, rest = divmod(count - 1, 26)
        text = chr(ord("A") + rest) + text
    return text
