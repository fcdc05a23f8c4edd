"""The plan: from the casts of a whole shoot to one correction for each frame.

Capture order gives lanes (`shoot_order`), lanes give parts (`shoot_parts`), parts give stretches and their
lights (`shoot_lights`, `stretches`, `bodies`), known lights hold them (`pins`), an automatic balance moves
finished frames around them (`shoot_balance`), each frame is weighed against its stretch (`shoot_odd`), and its
light becomes a correction (`correction`).
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast import plane, shoot_course, shoot_order, vote
from grader.cast.correction import correction_for, fixed_correction
from grader.cast.doubt import believed_light
from grader.cast.pins import apply_pins
from grader.cast.shoot_balance import balanced_anew
from grader.cast.shoot_course import Maps
from grader.cast.shoot_lights import Match, Stretch, find_lights, find_matches
from grader.cast.shoot_odd import oddness
from grader.cast.shoot_order import Lane
from grader.cast.shoot_parts import FixedStretch, hosts, parts_of, place_named
from grader.colour.white import xy_from_linear
from grader.model import XY, Cast, Correction, Fixed, Recipe

Array = NDArray[np.float64]

_LEAST_DOUBT_DEG: Final = 0.7
"""What pooling cannot take away: the bias of a body and of what is usually photographed. (from simulated shoots)"""
_OWN_DOUBT_SHARE: Final = 0.9
_CARD_DOUBT_DEG: Final = 0.3
"""Doubt of a light that a grey card shows: unevenness of card and light. (judgement)"""
_UNBIASED_DOUBT_DEG: Final = 0.5


@dataclass(frozen=True, slots=True, eq=False)
class Plan:
    """A planned shoot: a correction for each frame in the order given, the stretches, how the bodies compare."""

    corrections: tuple[Correction, ...]
    stretches: tuple[Stretch, ...]
    matches: tuple[Match, ...]


def plan(
    casts: Sequence[Cast],
    recipe: Recipe | None = None,
    *,
    stretches: Sequence[Sequence[object] | FixedStretch] | None = None,
    pins: Mapping[str | int, XY] | None = None,
    clocks: Mapping[str, float] | None = None,
) -> list[Correction]:
    """Return one correction for each frame of a shoot, in the order given.

    Frames of one body under one light are one measurement: their votes are pooled, switches and slow drift of
    the light are found, bodies that work at the same time share their lights.  A frame that contradicts
    its stretch keeps its own light if its evidence is strong, else it is flagged.  The plan is a pure function of
    its arguments; the order of the casts matters only where capture times are missing.

    Parameters
    ----------
    casts : sequence of Cast
        From `measure`, or read back from a log.
    recipe : Recipe, optional
    stretches : sequence of rows, optional
        Stretches fixed by hand: (first file, last file), and perhaps a Recipe or Fixed for those frames.
    pins : mapping of str or int to XY, optional
        Known lights, from grey cards, by file name or place in ``casts``, at the camera's daylight setting.
    clocks : mapping of str to float, optional
        Seconds to add to the clock of a body, by its name or a part of it. [s]

    Returns
    -------
    list of Correction
        ``reason`` says which light was taken and why.

    Raises
    ------
    PresetError
        A row, a pin or a clock names nothing, or the recipe cannot be used.

    Examples
    --------
    >>> from grader.model import Cast, Header
    >>> window = Cast(Header(file="a.tif"), white_xy=(0.3457, 0.3585), doubt_deg=2.0)
    >>> plan([window])[0].reason
    'its own measurement: alone in its stretch'
    """
    return list(plan_shoot(casts, recipe, stretches=stretches, pins=pins, clocks=clocks).corrections)


def plan_shoot(
    casts: Sequence[Cast],
    recipe: Recipe | None = None,
    *,
    stretches: Sequence[Sequence[object] | FixedStretch] | None = None,
    pins: Mapping[str | int, XY] | None = None,
    clocks: Mapping[str, float] | None = None,
) -> Plan:
    """Return the plan of a shoot with all that led to it; arguments as for `plan`."""
    recipe = Recipe() if recipe is None else recipe
    manual = [_fixed_stretch(row) for row in stretches or ()]
    known = {
        name if isinstance(name, int) else place_named(name, casts): xy for name, xy in (pins or {}).items()
    }
    times_s = shoot_order.capture_times_s(casts, clocks)
    if not recipe.pooling:
        return Plan(tuple(_alone(cast, recipe, known.get(at)) for at, cast in enumerate(casts)), (), ())
    lanes = shoot_order.lanes_of(casts, times_s)
    maps = shoot_course.log_robust(shoot_course.frame_maps(casts))
    parts = parts_of(casts, lanes, times_s, manual)
    found, matches = find_lights(casts, maps, parts, match_bodies=recipe.match_bodies)
    owner = {int(row): number for number, stretch in enumerate(found) for row in stretch.rows}
    guests = hosts(casts, lanes, owner, shoot_order.BREAK_S)
    held = apply_pins(casts, found, {guests.get(at, at): xy for at, xy in known.items()})
    numbers = owner | {guest: owner[host] for guest, host in guests.items()}
    lights, moved_deg = _frame_lights(casts, maps, held)
    shoot = _Shoot(
        casts=casts,
        recipe=recipe,
        maps=maps,
        stretches=held,
        numbers=numbers,
        names=stretch_names(casts, times_s, lanes, numbers),
        known=known,
        settings=[row.settings for row in manual],
        facts=[(stretch_doubt_deg(casts, one), _in_words(casts, one)) for one in held],
        moved_deg=moved_deg,
    )
    lights |= {guest: lights[host] for guest, host in guests.items() if host in lights}
    corrections = tuple(_timed(_correct(shoot, at, lights.get(at)), time) for at, time in enumerate(times_s))
    return Plan(corrections, tuple(held), tuple(matches))


def _timed(correction: Correction, time_s: float) -> Correction:
    """Return the correction, flagged where the frame's place in the shoot is not known from its time."""
    return correction if math.isfinite(time_s) else replace(correction, flags=(*correction.flags, "no-time"))


def _frame_lights(
    casts: Sequence[Cast], maps: Maps, found: Sequence[Stretch]
) -> tuple[dict[int, Array], dict[int, float]]:
    """Return the light of each frame that is pooled, by its place in the list of casts.

    The second are the doubts of frames that their camera balanced one by one. [degrees]
    """
    pooled = [stretch for stretch in found if stretch.light is not None]
    lights = {int(row): place for s in pooled for row, place in zip(s.rows, s.places, strict=True)}
    moved_deg: dict[int, float] = {}
    for stretch in pooled:
        if stretch.referred != "display" or stretch.pinned:
            continue
        bodies = np.array([casts[row].header.body for row in stretch.rows])
        for body in np.unique(bodies):
            own = bodies == body
            balance = balanced_anew(maps[stretch.rows[own]], stretch.places[own])
            if balance is not None:
                rows = [int(row) for row in stretch.rows[own]]
                lights |= dict(zip(rows, balance.places, strict=True))
                moved_deg |= dict.fromkeys(rows, balance.doubt_deg)
    return lights, moved_deg


def compare_bodies(casts: Sequence[Cast], *, clocks: Mapping[str, float] | None = None) -> tuple[Match, ...]:
    """Return how the bodies of a shoot compare, without planning it; `plan_shoot` has the same in ``matches``."""
    times_s = shoot_order.capture_times_s(casts, clocks)
    maps = shoot_course.log_robust(shoot_course.frame_maps(casts))
    parts = parts_of(casts, shoot_order.lanes_of(casts, times_s), times_s, ())
    return tuple(find_matches(casts, maps, parts))


@dataclass(frozen=True, slots=True, eq=False)
class _Shoot:
    """What the last step needs: which stretch each frame is in, its name, and what a person said."""

    casts: Sequence[Cast]
    recipe: Recipe
    maps: Maps
    stretches: Sequence[Stretch]
    numbers: Mapping[int, int]
    names: Mapping[int, str]
    known: Mapping[int, XY]
    settings: Sequence[Recipe | Fixed | None]
    facts: Sequence[tuple[float, str]]
    """Doubt of each stretch's light [degrees], and what it is, in words."""
    moved_deg: Mapping[int, float]
    """Doubt of the frames that were balanced one by one. [degrees]"""


def stretch_names(
    casts: Sequence[Cast], times_s: Array, lanes: Sequence[Lane], numbers: Mapping[int, int]
) -> dict[int, str]:
    """Return the name of each frame's stretch: its body's letter and a count, as A1.

    A light that two bodies share has a name on either; developed files of a body that also has raw files
    count by themselves, as A1d.
    """
    letters = shoot_order.body_letters(casts, times_s)
    lane_of = {int(place): number for number, lane in enumerate(lanes) for place in lane.members}
    both = {lane.body for lane in lanes if lane.referred == "scene"} & {
        lane.body for lane in lanes if lane.referred == "display"
    }
    names: dict[int, str] = {}
    current: dict[int, tuple[int, str]] = {}
    counts: dict[str, int] = {}
    for place in shoot_order.capture_order(casts, times_s):
        if place not in numbers:
            continue
        lane, header = lane_of[place], casts[place].header
        if current.get(lane, (-1, ""))[0] != numbers[place]:
            mark = "d" if header.body in both and header.referred == "display" else ""
            key = letters[header.body] + mark
            counts[key] = counts.get(key, 0) + 1
            current[lane] = (numbers[place], f"{letters[header.body]}{counts[key]}{mark}")
        names[place] = current[lane][1]
    return names


def _correct(shoot: _Shoot, at: int, pooled: Array | None) -> Correction:
    """Return the correction of one frame; ``pooled`` is the light of its stretch at this frame."""
    cast, name = shoot.casts[at], shoot.names.get(at)
    if at not in shoot.numbers:
        return replace(_alone(cast, shoot.recipe, shoot.known.get(at)), stretch=name)
    stretch = shoot.stretches[shoot.numbers[at]]
    settings = shoot.settings[stretch.row] if stretch.row >= 0 else None
    if isinstance(settings, Fixed):
        fixed = fixed_correction(settings, cast.header)
        return replace(fixed, stretch=name, reason=f"fixed by the preset of stretch {name}")
    recipe = shoot.recipe if settings is None else settings
    left = "coloured-light" in cast.flags and recipe.coloured_light == "leave" and not stretch.pinned
    if at in shoot.known or pooled is None or left:
        return replace(_alone(cast, recipe, shoot.known.get(at)), stretch=name)
    if len(stretch.rows) == 1 and cast.white_xy is not None and not (stretch.pinned or stretch.unbiased):
        return replace(_alone(cast, recipe, None, "alone in its stretch"), stretch=name)
    return _pooled(shoot, at, stretch, pooled, recipe)


def _pooled(shoot: _Shoot, at: int, stretch: Stretch, place: Array, recipe: Recipe) -> Correction:
    """Return the correction by the light of the stretch, pulled toward the frame's own vote where it is odd."""
    cast, name = shoot.casts[at], shoot.names[at]
    doubt_deg, facts = shoot.facts[shoot.numbers[at]]
    reason = f"light of stretch {name} ({facts})"
    if at in shoot.moved_deg:
        doubt_deg = math.hypot(doubt_deg, shoot.moved_deg[at])
        reason += ", moved toward its own measurement: these frames were balanced one by one"
    flags: tuple[str, ...] = ()
    if cast.white_xy is None:
        reason, flags = f"nothing measured in this frame; {reason}", ("light-of-stretch",)
    else:
        own = plane.ab_from_xy(np.array(cast.white_xy))
        odd = oddness(shoot.maps[at], vote.log_prior(stretch.referred), cast, place)
        flags = ("odd-frame",) if odd.odd else ()
        if odd.pull > 0.0:
            place = (1.0 - odd.pull) * place + odd.pull * own
            doubt_deg = (1.0 - odd.pull) * doubt_deg + odd.pull * (cast.doubt_deg or doubt_deg)
            reason = f"pulled {odd.pull:.0%} toward its own vote, {odd.degrees:.1f} degrees from the {reason}"
        elif odd.odd:
            reason = f"{reason}; its own vote, {odd.degrees:.1f} degrees away, is not trusted"
    light = plane.linear_from_ab(place)
    if not stretch.pinned and doubt_deg > 0.0:
        light = believed_light(light, doubt_deg, stretch.referred)
    x, y = xy_from_linear(light)
    return correction_for(
        (float(x), float(y)),
        cast.header,
        recipe,
        reason=reason,
        stretch=name,
        doubt_deg=doubt_deg,
        flags=flags,
    )


def _alone(cast: Cast, recipe: Recipe, card: XY | None, why: str = "") -> Correction:
    """Return the correction of a frame by itself: by a grey card in it, or by its own measurement."""
    if card is not None:
        return correction_for(
            card, cast.header, recipe, reason="grey card in this frame", doubt_deg=_CARD_DOUBT_DEG
        )
    if cast.white_xy is None:
        return correction_for(None, cast.header, recipe, flags=("nothing-measured",))
    flags = tuple(flag for flag in cast.flags if flag == "coloured-light")
    coloured = bool(flags) and recipe.coloured_light == "leave"
    reason = (
        "coloured light is left as it is" if coloured else "its own measurement" + (f": {why}" if why else "")
    )
    return correction_for(
        cast.white_xy, cast.header, recipe, reason=reason, doubt_deg=cast.doubt_deg, flags=flags
    )


def stretch_doubt_deg(casts: Sequence[Cast], stretch: Stretch) -> float:
    """Return the expected error of the light of a stretch, in degrees of recovery angle."""
    if stretch.pinned:
        return _CARD_DOUBT_DEG
    doubts = [casts[row].doubt_deg for row in stretch.rows]
    single = float(np.mean([3.0 if doubt is None else doubt for doubt in doubts]))
    least = _UNBIASED_DOUBT_DEG if stretch.unbiased else _LEAST_DOUBT_DEG
    return float(np.hypot(least, _OWN_DOUBT_SHARE * single / np.sqrt(len(stretch.rows))))


def _in_words(casts: Sequence[Cast], stretch: Stretch) -> str:
    """Return what the light of a stretch comes from, for the log."""
    count = len(stretch.rows)
    facts = ["1 frame" if count == 1 else f"{count} frames"]
    several = len({casts[row].header.body for row in stretch.rows})
    if several > 1:
        facts.append(f"{several} bodies")
    if stretch.light is not None and stretch.light.model != "steady":
        facts.append({"drift": "drifting", "wander": "wandering"}[stretch.light.model])
    if stretch.row >= 0:
        facts.append("fixed by hand")
    if stretch.pinned:
        facts.append("held by a grey card")
    elif stretch.unbiased:
        facts.append("body's bias removed by a grey card")
    return ", ".join(facts)


def _fixed_stretch(row: Sequence[object] | FixedStretch) -> FixedStretch:
    if isinstance(row, FixedStretch):
        return row
    first, last, *more = row
    settings = more[0] if more and isinstance(more[0], Recipe | Fixed) else None
    return FixedStretch(str(first), str(last), settings)
