"""What a planned shoot amounts to: its stretches with light and drift, its bodies, frames beyond a tolerance."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader.cast import drift, plane, shoot_order
from grader.cast.drift import Slope
from grader.cast.shoot import compare_bodies
from grader.cast.shoot_lights import Match
from grader.colour.difference import grey_delta_e_2000
from grader.colour.opponent import cast_from_xy
from grader.colour.white import cct_duv_from_xy, xy_from_linear
from grader.model import XY, Cast, Correction, Fixed, Opponent, Recipe

Array = NDArray[np.float64]

_ALIKE: Final = 0.005
"""Frames that scatter by less, 0.75 degrees, show the same things, and each is a witness by itself. (judgement)"""
_SIGNIFICANT: Final = 3.5
"""A frame farther from its stretch than so many standard deviations of the frames' scatter has moved by more than
scatter. (Iglewicz & Hoaglin, "How to detect and handle outliers", 1993)"""


@dataclass(frozen=True, slots=True)
class StretchSummary:
    """One stretch of one body; the keys are those of the log's summary line.

    The light is the median of the lights used.  ``spread_delta_e_2000`` is the median difference of a mid grey
    between the frames' own lights and their median: what one frame alone can show here.  Drift is by
    Theil-Sen over the frames' own evidence, with its 95 % interval; None where times are missing.
    """

    stretch: str
    body: str
    referred: str
    first_file: str
    last_file: str
    first_taken_at: str | None
    last_taken_at: str | None
    frames: int
    cct_k: float | None
    duv: float
    white_xy: XY
    yellow_blue: float
    green_magenta: float
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
class BodySummary:
    """One body, and where its lights lie against those of another body at the same time."""

    body: str
    label: str
    frames: int
    offset_to: str | None = None
    yellow_blue: float | None = None
    green_magenta: float | None = None
    offset_deg: float | None = None
    doubt_deg: float | None = None
    applied: bool | None = None
    shared_stretches: int | None = None


@dataclass(frozen=True, slots=True)
class Beyond:
    """A frame whose light lies farther from its reference than the tolerance."""

    file: str
    stretch: str
    delta_e_2000: float


@dataclass(frozen=True, slots=True)
class ShootSummary:
    """A shoot in numbers."""

    stretches: tuple[StretchSummary, ...]
    bodies: tuple[BodySummary, ...]
    beyond_tolerance: tuple[Beyond, ...]


def summarise(
    casts: Sequence[Cast],
    corrections: Sequence[Correction],
    recipe: Recipe | None = None,
    *,
    matches: Sequence[Match] = (),
    clocks: Mapping[str, float] | None = None,
    against: Cast | XY | None = None,
) -> ShootSummary:
    """Return what a planned shoot amounts to.

    Parameters
    ----------
    casts : sequence of Cast
    corrections : sequence of Correction
        Of the same frames, from `plan`.
    recipe : Recipe, optional
        Its opponent space, and its tolerance on Delta E 2000.
    matches : sequence of Match, optional
        How bodies compare, from `plan_shoot` or `compare_bodies`.
    clocks : mapping of str to float, optional
        As for `plan`. [s]
    against : Cast or XY, optional
        Light that every frame is held against, known or as a measured frame shows it; by default that of its
        stretch.  A measured frame is compared like with like: evidence with evidence, before any pooling.

    Returns
    -------
    ShootSummary
        Stretches and bodies in the order in which they begin.
    """
    recipe = Recipe() if recipe is None else recipe
    times_s = shoot_order.capture_times_s(casts, clocks)
    order = shoot_order.capture_order(casts, times_s)
    groups: dict[str, list[int]] = {}
    for place in order:
        name = corrections[place].stretch
        if name is not None and corrections[place].from_xy is not None:
            groups.setdefault(name, []).append(place)
    stretches, beyond = [], []
    for name, members in groups.items():
        group = _Group(name, [casts[k] for k in members], [corrections[k] for k in members], times_s[members])
        stretches.append(_stretch(group, recipe.opponent))
        if recipe.tolerance_delta_e_2000 is not None:
            beyond += _beyond(group, recipe.tolerance_delta_e_2000, against)
    bodies = _bodies(casts, shoot_order.body_letters(casts, times_s), matches, recipe.opponent)
    return ShootSummary(tuple(stretches), tuple(bodies), tuple(beyond))


def shoot_summary(
    casts: Mapping[str, Cast],
    corrections: Mapping[str, Correction],
    settings: Recipe | Fixed | None = None,
    *,
    clocks: Mapping[str, float] | None = None,
    against: Cast | XY | None = None,
) -> dict[str, Any]:
    """Return the summary of a shoot as plain values for the log's summary line.

    Parameters
    ----------
    casts, corrections : mapping of str to Cast, Correction
        By file; frames without both are left out.
    settings : Recipe or Fixed, optional
    clocks, against
        As for `summarise`.

    Returns
    -------
    dict
        ``stretches``, ``bodies``, ``beyond_tolerance``: lists of dicts.
    """
    recipe = settings if isinstance(settings, Recipe) else Recipe()
    files = [file for file in casts if file in corrections]
    found, planned = [casts[file] for file in files], [corrections[file] for file in files]
    several = len({cast.header.body for cast in found}) > 1
    matches = (
        compare_bodies(found, clocks=clocks) if several and recipe.match_bodies and recipe.pooling else ()
    )
    summary = summarise(found, planned, recipe, matches=matches, clocks=clocks, against=against)
    return {key: list(rows) for key, rows in asdict(summary).items()}


def stretch_table_rows(summary: ShootSummary) -> list[dict[str, Any]]:
    """Return a row of plain values for each stretch: a table, a spreadsheet."""
    return [asdict(stretch) for stretch in summary.stretches]


@dataclass(frozen=True, slots=True, eq=False)
class _Group:
    """The frames of one stretch, in capture order."""

    name: str
    casts: Sequence[Cast]
    corrections: Sequence[Correction]
    times_s: Array

    def used(self) -> Array:
        """Return the places of the lights that were used, (n, 2)."""
        return plane.ab_from_xy(np.array([correction.from_xy for correction in self.corrections]))

    def even(self) -> NDArray[np.bool_]:
        """Return which frames speak for the stretch: measured, and not odd."""
        measured = np.array([cast.white_xy is not None for cast in self.casts])
        return np.asarray(measured & ["odd-frame" not in one.flags for one in self.corrections])


def _stretch(group: _Group, opponent: Opponent) -> StretchSummary:
    even = group.even()
    used = group.used()
    white_xy = _xy(np.median(used[even] if even.any() else used, axis=0))
    cct_k, duv = cct_duv_from_xy(white_xy)
    yellow_blue, green_magenta = cast_from_xy(white_xy, opponent)
    speaking = [cast for cast, is_even in zip(group.casts, even, strict=True) if is_even]
    facts: dict[str, Any] = {}
    if speaking:
        places, mired, duvs = drift.light_series(speaking)
        facts["largest_jump_deg"] = drift.largest_jump_deg(places)
        facts |= _slope("drift_mired", drift.slope_of(group.times_s[even], mired))
        facts |= _slope("drift_duv", drift.slope_of(group.times_s[even], duvs))
    first, last = group.casts[0].header, group.casts[-1].header
    return StretchSummary(
        stretch=group.name,
        body=first.body,
        referred=first.referred,
        first_file=first.file or "",
        last_file=last.file or "",
        first_taken_at=first.taken_at,
        last_taken_at=last.taken_at,
        frames=len(group.casts),
        cct_k=cct_k,
        duv=duv,
        white_xy=white_xy,
        yellow_blue=yellow_blue,
        green_magenta=green_magenta,
        spread_delta_e_2000=_spread(speaking),
        shift_mired=_middle([correction.shift_mired for correction in group.corrections]),
        shift_duv=_middle([correction.shift_duv for correction in group.corrections]),
        doubt_deg=_middle([correction.doubt_deg for correction in group.corrections]),
        **facts,
    )


def _slope(name: str, slope: Slope | None) -> dict[str, float | None]:
    if slope is None:
        return {}
    return {f"{name}_per_hour": slope.per_hour, f"{name}_low": slope.low, f"{name}_high": slope.high}


def _spread(casts: Sequence[Cast]) -> float | None:
    if len(casts) < 2:
        return None
    own = plane.ab_from_xy(np.array([cast.white_xy for cast in casts]))
    return float(np.median(_grey_differences(own - np.median(own, axis=0))))


def _beyond(group: _Group, tolerance: float, against: Cast | XY | None) -> list[Beyond]:
    """Return the frames of a stretch that lie beyond the tolerance.

    A frame is held to the light used for it.  Where all frames show the same things, as on a copy stand, it is
    also held to its own evidence, if that has moved by more than the frames scatter.
    """
    used, even = group.used(), group.even()
    centre = np.median(used[even] if even.any() else used, axis=0)
    measured = np.array([cast.white_xy is not None for cast in group.casts])
    own = drift.light_series(np.array(group.casts, dtype=object)[measured])[0] if measured.any() else used[:0]
    reference = _reference(centre, own, against)
    far = _grey_differences(used - reference)
    if measured.any():
        moved, scatter = own - np.median(own, axis=0), drift.scatter(own)
        witnesses = scatter < _ALIKE and np.linalg.norm(moved, axis=1) > _SIGNIFICANT * scatter
        by_itself = np.where(witnesses, _grey_differences(moved + centre - reference), 0.0)
        far[measured] = np.maximum(far[measured], by_itself)
    return [
        Beyond(cast.header.file or "", group.name, float(difference))
        for cast, difference in zip(group.casts, far, strict=True)
        if difference > tolerance
    ]


def _reference(centre: Array, own: Array, against: Cast | XY | None) -> Array:
    """Return the place that a stretch is held against, in the terms of the lights used in it."""
    if against is None:
        return centre
    if not isinstance(against, Cast):
        return np.asarray(plane.ab_from_xy(np.array(against)))
    shown = drift.light_series([against])[0][0]
    return np.asarray(centre + shown - np.median(own, axis=0)) if len(own) else np.asarray(shown)


def _bodies(
    casts: Sequence[Cast], letters: Mapping[str, str], matches: Sequence[Match], opponent: Opponent
) -> list[BodySummary]:
    by_second = {match.second: match for match in reversed(matches)}
    found = []
    for body, label in letters.items():
        frames = sum(cast.header.body == body for cast in casts)
        match = by_second.get(body)
        if match is None:
            found.append(BodySummary(body, label, frames))
            continue
        yellow_blue, green_magenta = cast_from_xy(_xy(match.step.ab), opponent)
        found.append(
            BodySummary(
                body,
                label,
                frames,
                offset_to=match.first,
                yellow_blue=yellow_blue,
                green_magenta=green_magenta,
                offset_deg=match.degrees,
                doubt_deg=match.doubt_deg,
                applied=match.applied,
                shared_stretches=int((match.step.shared >= 0.5).sum()),
            )
        )
    return found


def _grey_differences(steps: Array) -> Array:
    """Return Delta E 2000 of a mid grey for each step in the plane, (n,) from (n, 2)."""
    return np.array([grey_delta_e_2000(_xy(step)) for step in steps])


def _xy(place: Array) -> XY:
    x, y = xy_from_linear(plane.linear_from_ab(place))
    return float(x), float(y)


def _middle(values: Sequence[float | None]) -> float | None:
    known = [value for value in values if value is not None and math.isfinite(value)]
    return float(np.median(known)) if known else None
