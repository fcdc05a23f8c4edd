"""The lights of a shoot: parts joined across bodies, cut into stretches, each stretch measured."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from grader.cast import bodies, shoot_course, vote
from grader.cast.bodies import Span, Step
from grader.cast.shoot_course import Maps
from grader.cast.shoot_order import BREAK_S, switch_odds
from grader.cast.shoot_parts import Part
from grader.cast.stretches import Light, find_switches, measure_light
from grader.model import Cast, Referred

Array = NDArray[np.float64]
Indices = NDArray[np.intp]

_DOUBT_SHARE: Final = 0.45
"""Mean error of a step between bodies as a share of the spread that its covariance tells; 0.4 came out on simulated
shoots of two kinds. (tuned: benchmarks/shoot_simulator.py)"""


@dataclass(frozen=True, slots=True, eq=False)
class Stretch:
    """Frames under one light, of one body or of several that were matched.

    ``rows`` (n,) are places in the list of casts, in capture order; ``steps`` (n, 2) what each frame's body
    adds to the light; ``light`` is None for coloured light, which is not pooled.
    """

    rows: Indices
    times_s: Array
    steps: Array
    referred: Referred
    light: Light | None
    flash: bool = False
    row: int = -1
    pinned: bool = False
    unbiased: bool = False

    @property
    def places(self) -> Array:
        """Return the light of each frame in the plane, (n, 2)."""
        if self.light is None:
            raise ValueError("a coloured stretch has no pooled light")
        return np.asarray(self.light.places + self.steps)


@dataclass(frozen=True, slots=True, eq=False)
class Match:
    """Two bodies compared: ``step`` from the first to the second in the plane, and whether it was applied."""

    first: str
    second: str
    referred: Referred
    step: Step
    degrees: float
    doubt_deg: float
    applied: bool


@dataclass(frozen=True, slots=True, eq=False)
class _Line:
    """Frames that may share lights, in capture order, whatever their body."""

    rows: Indices
    times_s: Array
    steps: Array


def find_lights(
    casts: Sequence[Cast], maps: Maps, parts: Sequence[Part], *, match_bodies: bool
) -> tuple[list[Stretch], list[Match]]:
    """Return the stretches of a shoot and how its bodies compare.

    Parameters
    ----------
    casts : sequence of Cast
    maps : (n, C) float32
        From `shoot_course.log_robust`, a row for each cast.
    parts : sequence of Part
    match_bodies : bool
        Let bodies that work at the same time share their lights.

    Returns
    -------
    list of Stretch, list of Match
    """
    found: list[Stretch] = []
    for part in parts:
        still = np.zeros((len(part.rows), 2))
        if part.kind == "coloured":
            found.append(Stretch(part.rows, part.times_s, still, part.referred, None, part.flash, part.row))
        elif part.kind == "manual":
            line = _Line(part.rows, part.times_s, still)
            found.append(_measured(line, maps, part.referred, part.flash, part.row))
    matches: list[Match] = []
    for group in _pooled_groups(parts):
        lines = [_Line(part.rows, part.times_s, np.zeros((len(part.rows), 2))) for part in group]
        referred, flash = group[0].referred, group[0].flash
        if match_bodies and len(group) > 1:
            lines, told = _joined(casts, maps, group, lines)
            matches += told
        for line in lines:
            pieces = _cut(casts, maps, line, referred)
            found += [_measured(piece, maps, referred, flash, -1) for piece in pieces]
    return found, matches


def find_matches(casts: Sequence[Cast], maps: Maps, parts: Sequence[Part]) -> list[Match]:
    """Return how the bodies of a shoot compare; arguments as for `find_lights`."""
    matches: list[Match] = []
    for group in _pooled_groups(parts):
        lines = [_Line(part.rows, part.times_s, np.zeros((len(part.rows), 2))) for part in group]
        if len(group) > 1:
            matches += _joined(casts, maps, group, lines)[1]
    return matches


def _pooled_groups(parts: Sequence[Part]) -> list[list[Part]]:
    """Return the parts of all bodies that could share lights: alike in referral and flash."""
    groups: dict[tuple[bool, bool], list[Part]] = {}
    for part in parts:
        if part.kind == "pooled":
            groups.setdefault((part.referred == "display", part.flash), []).append(part)
    return [groups[key] for key in sorted(groups)]


def _measured(line: _Line, maps: Maps, referred: Referred, flash: bool, row: int) -> Stretch:
    clock = line.times_s
    if not np.isfinite(clock).all() or np.ptp(clock) == 0.0:
        clock = np.arange(len(line.rows), dtype=np.float64)
    light = measure_light(_carried(maps, line), vote.log_prior(referred), clock)
    return Stretch(line.rows, line.times_s, line.steps, referred, light, flash, row)


def _cut(casts: Sequence[Cast], maps: Maps, line: _Line, referred: Referred) -> Iterator[_Line]:
    """Yield the frames of each light in turn."""
    for chain in _chains(line):
        odds = switch_odds(chain.rows, chain.times_s, casts)
        switches = find_switches(_carried(maps, chain), vote.log_prior(referred), odds)
        yield from _pieces(chain, switches)


def _chains(line: _Line) -> Iterator[_Line]:
    """Yield the frames between pauses that no light is followed across."""
    gaps = np.flatnonzero(np.diff(line.times_s) > BREAK_S) + 1
    return _pieces(line, gaps.tolist())


def _pieces(line: _Line, cuts: Sequence[int]) -> Iterator[_Line]:
    for first, last in zip([0, *cuts], [*cuts, len(line.rows)], strict=True):
        yield _Line(line.rows[first:last], line.times_s[first:last], line.steps[first:last])


def _carried(maps: Maps, line: _Line) -> Maps:
    """Return the frames' maps, carried to the light as the first body sees it."""
    own = maps[line.rows]
    moved = np.flatnonzero(line.steps.any(axis=1))
    if len(moved):
        own[moved] = shoot_course.shifted(own[moved], line.steps[moved])
    return own


def _joined(
    casts: Sequence[Cast], maps: Maps, group: Sequence[Part], lines: Sequence[_Line]
) -> tuple[list[_Line], list[Match]]:
    """Return lines with the frames of bodies that share lights in one, and how the bodies compare.

    Every body is held against the one with the most frames.
    """
    order = sorted(range(len(group)), key=lambda k: (-len(group[k].rows), group[k].body))
    base, referred = order[0], group[order[0]].referred
    if not np.isfinite(lines[base].times_s).all():
        return list(lines), []
    spans = {base: [Span(piece.rows, piece.times_s) for piece in _cut(casts, maps, lines[base], referred)]}
    whole, alone, matches = lines[base], [], []
    for other in order[1:]:
        match, shared = None, np.zeros(len(lines[other].rows), bool)
        if np.isfinite(lines[other].times_s).all():
            own = [Span(piece.rows, piece.times_s) for piece in _cut(casts, maps, lines[other], referred)]
            match, shared = _compared(maps, group[base], group[other], spans[base], own)
        if match is None:
            alone.append(lines[other])
            continue
        matches.append(match)
        step = match.step.ab if match.applied else np.zeros(2)
        whole = _merged(whole, _picked(lines[other], shared, step))
        if not shared.all():
            alone.append(_picked(lines[other], ~shared, np.zeros(2)))
    return [whole, *alone], matches


def _compared(
    maps: Maps, first: Part, second: Part, one: Sequence[Span], other: Sequence[Span]
) -> tuple[Match | None, NDArray[np.bool_]]:
    """Return how two bodies compare, and which of the second's frames are under lights of the first."""
    pairs = bodies.overlaps(one, other)
    step = bodies.measure_step(maps, vote.log_prior(first.referred), [(one[i], other[j]) for i, j in pairs])
    if step is None or step.shared.max() < 0.5:
        return None, np.zeros(len(second.rows), bool)
    shared = np.concatenate(
        [_shared_frames(one, span, number, pairs, step) for number, span in enumerate(other)]
    )
    white = np.zeros(2)
    degrees = float(shoot_course.degrees_apart(white, step.ab))
    doubt_deg = _DOUBT_SHARE * float(shoot_course.degrees_apart(white, np.sqrt(np.diag(step.covariance))))
    match = Match(
        first.body, second.body, first.referred, step, degrees, doubt_deg, applied=degrees > doubt_deg
    )
    return match, shared


def _shared_frames(
    one: Sequence[Span], span: Span, number: int, pairs: Sequence[tuple[int, int]], step: Step
) -> NDArray[np.bool_]:
    """Return which frames of a span share the light of the other body: as the pair at their time says, else most pairs."""
    own = {i: bool(step.shared[k] >= 0.5) for k, (i, j) in enumerate(pairs) if j == number}
    usual = not own or 2 * sum(own.values()) >= len(own)
    frames = np.full(len(span.rows), usual)
    for i, together in own.items():
        inside = (span.times_s >= one[i].times_s[0]) & (span.times_s <= one[i].times_s[-1])
        frames[inside] = together
    return frames


def _picked(line: _Line, which: NDArray[np.bool_], step: Array) -> _Line:
    return _Line(line.rows[which], line.times_s[which], line.steps[which] + step)


def _merged(one: _Line, other: _Line) -> _Line:
    """Return both in the order of time; at equal times the first comes first."""
    times = np.concatenate([one.times_s, other.times_s])
    order = np.argsort(times, kind="stable")
    rows, steps = np.concatenate([one.rows, other.rows]), np.concatenate([one.steps, other.steps])
    return _Line(rows[order], times[order], steps[order])
