"""What each frame of a shoot is to the plan: pooled, fixed by hand, under coloured light, or a guest."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import PurePath
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast.shoot_order import Lane, capture_order
from grader.errors import PresetError
from grader.model import Cast, Fixed, Recipe, Referred

Array = NDArray[np.float64]
Indices = NDArray[np.intp]

_COLOURED_RUN: Final = 3
"""So many coloured frames in a row are a coloured light; fewer may be a coloured subject. (judgement)"""


@dataclass(frozen=True, slots=True)
class FixedStretch:
    """A stretch that a person fixed: its frames by file name, and what to do with them if not as all others."""

    first: str
    last: str
    settings: Recipe | Fixed | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Part:
    """Frames of one lane, in capture order, that the plan treats alike.

    ``kind``: ``pooled`` is searched for switches, ``manual`` is one stretch because a person said so (number
    ``row`` of theirs), ``coloured`` is one stretch that is not pooled.
    """

    kind: str
    body: str
    referred: Referred
    flash: bool
    rows: Indices
    times_s: Array
    row: int = -1


def parts_of(
    casts: Sequence[Cast], lanes: Sequence[Lane], times_s: Array, manual: Sequence[FixedStretch]
) -> list[Part]:
    """Return the parts of a shoot; frames that belong to none are guests (see `hosts`).

    Parameters
    ----------
    casts : sequence of Cast
    lanes : sequence of Lane
    times_s : (n,) float64
    manual : sequence of FixedStretch

    Returns
    -------
    list of Part

    Raises
    ------
    PresetError
        A fixed stretch names no frame, ends before it begins, or overlaps another.
    """
    row_of = _manual_rows(casts, times_s, manual)
    parts = _manual_parts(casts, row_of, times_s)
    for lane in lanes:
        free = [int(place) for place in lane.members if row_of[place] < 0]
        stage = _coloured_runs(casts, free)
        for run in stage:
            parts.append(_part("coloured", lane, run, times_s))
        taken = {place for run in stage for place in run}
        pooled = [place for place in free if place not in taken and _votes(casts[place])]
        if pooled:
            parts.append(_part("pooled", lane, pooled, times_s))
    return parts


def place_named(name: str, casts: Sequence[Cast]) -> int:
    """Return the place of the frame that a user names: by its path, or by a file name that only one has.

    Raises
    ------
    PresetError
        No frame, or more than one, has that name.
    """
    found = [place for place, cast in enumerate(casts) if cast.header.file == name]
    if not found:
        short = PurePath(name).name
        found = [place for place, cast in enumerate(casts) if PurePath(cast.header.file or "").name == short]
    if len(found) != 1 or not name:
        how_many = "no frame" if not found else "more than one frame"
        raise PresetError(
            f"{name!r} names {how_many} of this shoot", hint="give the file's path as it was measured"
        )
    return found[0]


def hosts(
    casts: Sequence[Cast], lanes: Sequence[Lane], owner: Mapping[int, int], reach_s: float
) -> dict[int, int]:
    """Return for each guest the frame of its lane whose light it shares: the one before, else the one after.

    Guests are frames in which nothing was measured, and single frames that look coloured.

    Parameters
    ----------
    casts : sequence of Cast
    lanes : sequence of Lane
    owner : mapping of int to int
        Stretch of each frame that has one.
    reach_s : float
        A host is no farther away than this. [s]

    Returns
    -------
    dict of int to int
        Place of the guest to place of the host; guests without a host are left out.
    """
    found: dict[int, int] = {}
    for lane in lanes:
        members = [int(place) for place in lane.members]
        clock = dict(zip(members, lane.times_s.tolist(), strict=True))
        for order in (members, members[::-1]):
            host: int | None = None
            for place in order:
                if place in owner:
                    host = place
                elif (
                    host is not None and place not in found and not abs(clock[place] - clock[host]) > reach_s
                ):
                    found[place] = host
    return found


def _votes(cast: Cast) -> bool:
    return cast.white_xy is not None and "coloured-light" not in cast.flags


def _coloured_runs(casts: Sequence[Cast], members: Sequence[int]) -> list[list[int]]:
    """Return the runs of coloured frames; frames without a measurement do not interrupt a run."""
    runs: list[list[int]] = [[]]
    for place in members:
        if "coloured-light" in casts[place].flags:
            runs[-1].append(place)
        elif casts[place].white_xy is not None and runs[-1]:
            runs.append([])
    alone = sum(map(len, runs)) == sum(casts[place].white_xy is not None for place in members)
    return [run for run in runs if len(run) >= _COLOURED_RUN or (run and alone)]


def _manual_rows(casts: Sequence[Cast], times_s: Array, manual: Sequence[FixedStretch]) -> NDArray[np.intp]:
    """Return which fixed stretch each frame belongs to, -1 for none."""
    row_of = np.full(len(casts), -1, np.intp)
    order = capture_order(casts, times_s)
    for number, row in enumerate(manual):
        first, last = place_named(row.first, casts), place_named(row.last, casts)
        body = casts[first].header.body
        own = [place for place in order if casts[place].header.body == body]
        if last not in own or own.index(last) < own.index(first):
            raise PresetError(
                f"the stretch from {row.first} to {row.last} ends before it begins, or on another body",
                hint="name the first and the last frame of one body, in capture order",
            )
        inside = own[own.index(first) : own.index(last) + 1]
        moments = {_moment(casts[place], times_s[place]) for place in inside}
        inside += [
            place for place in own if place not in inside and _moment(casts[place], times_s[place]) in moments
        ]
        if (row_of[inside] >= 0).any():
            raise PresetError(f"the stretch from {row.first} to {row.last} overlaps another")
        row_of[inside] = number
    return row_of


def _moment(cast: Cast, time_s: float) -> tuple[float, str]:
    """Return what a raw file and the picture beside it have in common; frames without both are their own moment."""
    file = cast.header.file
    return (time_s, PurePath(file).stem) if file and np.isfinite(time_s) else (float("nan"), "")


def _manual_parts(casts: Sequence[Cast], row_of: NDArray[np.intp], times_s: Array) -> list[Part]:
    groups: dict[tuple[int, Referred], list[int]] = {}
    for place in capture_order(casts, times_s):
        if row_of[place] >= 0:
            groups.setdefault((int(row_of[place]), casts[place].header.referred), []).append(place)
    parts = []
    for (row, referred), members in sorted(groups.items()):
        pooled = [place for place in members if _votes(casts[place])]
        kind = "manual" if pooled else "coloured"
        places = np.array(
            pooled or [place for place in members if casts[place].white_xy is not None], np.intp
        )
        if len(places):
            body = casts[places[0]].header.body
            parts.append(
                Part(kind, body, referred, flash=False, rows=places, times_s=times_s[places], row=row)
            )
    return parts


def _part(kind: str, lane: Lane, rows: Sequence[int], times_s: Array) -> Part:
    places = np.array(rows, np.intp)
    return Part(kind, lane.body, lane.referred, lane.flash, places, times_s[places])
