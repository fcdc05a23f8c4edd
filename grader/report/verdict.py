"""The verdict on a shoot: one sentence, and five questions answered at a glance."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from statistics import fmean
from typing import NamedTuple

from grader.report.records import Body, Shoot, Stretch, mapping, number
from grader.report.words import (
    JUST_SEEN_MIRED,
    clock,
    count,
    drift_figures,
    drift_words,
    drifted,
    kelvin,
    signed,
    span_hours,
)


class Answer(NamedTuple):
    """One question that a report answers at a glance."""

    question: str
    mark: str
    """``fine``, ``look``, ``failed`` or ``unknown``."""
    words: str
    figures: str
    target: str
    """Fragment of the page where the rest stands."""


def headline(shoot: Shoot) -> str:
    """Return the verdict on the whole run in one sentence."""
    total, failed, look = len(shoot.frames), shoot.count("failed"), len(shoot.to_look_at)
    if total == 0:
        return "The log holds no frames."
    done, verb = _done(shoot)
    if done == 0 and failed == total:
        return f"None of the {count(total, 'frame')} could be used."
    said = f"{done} of {count(total, 'frame')} {verb}"
    if done == total:
        said = f"All {total} frames are {verb}" if total > 1 else f"The frame is {verb}"
    if failed:
        said += f", {failed} failed"
    if total > done + failed:
        said += f", {total - done - failed} not done"
    if look:
        return f"{said}; look at {look} by eye."
    return f"{said}; none asks for a look by eye." if not failed else f"{said}."


def answers(shoot: Shoot) -> list[Answer]:
    """Return the five questions that a photographer asks of a shoot, answered."""
    return [_worked(shoot), _changed(shoot), _drift(shoot), _bodies(shoot), _by_eye(shoot)]


def mean_cast(shoot: Shoot, when: str) -> float | None:
    """Return the mean cast before or after, as the summary states it or over the frames. (Delta E 2000)."""
    stated = number(mapping(shoot.summary.get(f"mean_cast_{when}")).get("delta_e_2000"))
    if stated is not None:
        return stated
    values = (row.delta_e_2000 if when == "before" else row.residual_delta_e_2000 for row in shoot.frames)
    known = [value for value in values if value is not None]
    return fmean(known) if known else None


def _done(shoot: Shoot) -> tuple[int, str]:
    graded = shoot.count("graded") + shoot.count("skipped")
    if graded or any(row.output_file for row in shoot.frames):
        return graded, "graded"
    return shoot.count("planned") + shoot.count("measured"), "measured"


def _worked(shoot: Shoot) -> Answer:
    question, target = "Did it work?", "residuals"
    before, after = mean_cast(shoot, "before"), mean_cast(shoot, "after")
    done, verb = _done(shoot)
    if done == 0:
        return Answer(question, "failed", "No frame came through.", "", "look")
    if before is None:
        return Answer(
            question, "unknown", f"{count(done, 'frame')} {verb}; no cast was measured.", "", target
        )
    if verb == "measured" or after is None:
        words = "Measured only: no picture was changed."
        return Answer(
            question,
            "fine",
            words,
            f"mean cast, \u0394E 2000: {before:.1f} (1 is just visible){_doubt(shoot)}",
            target,
        )
    figures = f"mean cast, \u0394E 2000: {before:.1f} \u2192 {after:.1f}, as single frames measure it{_doubt(shoot)}"
    missing = len(shoot.frames) - done
    if after > before + 1.0:  # visibly more
        return Answer(question, "failed", "No: more cast is left than there was.", figures, target)
    if missing:
        return Answer(
            question, "look", f"Yes, but {count(missing, 'frame')} did not come through.", figures, "look"
        )
    words = "Yes: every frame came through."
    if before - after < 1.0:
        words = "Every frame came through; there was little cast to remove."
    return Answer(question, "fine", words, figures, target)


def _doubt(shoot: Shoot) -> str:
    known = [row.doubt_deg for row in shoot.frames if row.doubt_deg is not None]
    return f"; mean doubt of a frame {fmean(known):.1f}\u00b0" if known else ""


def _changed(shoot: Shoot) -> Answer:
    question = "Where did the light change?"
    if not shoot.stretches:
        return Answer(question, "unknown", "No stretches of light were told apart.", "", "course")
    lights = count(len(shoot.stretches), "stretch", "stretches") + " of light"
    jump = max(_changes(shoot.stretches), key=lambda change: change[0], default=None)
    if jump is None or jump[0] < JUST_SEEN_MIRED:
        return Answer(question, "fine", "It did not, to the eye: one light throughout.", lights, "course")
    _, earlier, later = jump
    words = f"Most of all at {clock(later.first_taken_at)}; from {kelvin(earlier.cct_k)} to {kelvin(later.cct_k)}."
    return Answer(question, "fine", words, lights, "course")


def _changes(stretches: Sequence[Stretch]) -> list[tuple[float, Stretch, Stretch]]:
    """Return the steps from light to light: within each body, or among all where each body saw but one."""
    lit = [stretch for stretch in stretches if stretch.cct_k]
    within = [
        pair
        for body in dict.fromkeys(stretch.body for stretch in lit)
        for pair in pairwise([stretch for stretch in lit if stretch.body == body])
    ]
    pairs = within or list(pairwise(lit))
    return [(abs(1e6 / (b.cct_k or 1) - 1e6 / (a.cct_k or 1)), a, b) for a, b in pairs]


def _drift(shoot: Shoot) -> Answer:
    question, target = "Did the light drift?", "stretches"
    told = [(stretch, moved) for stretch in shoot.stretches if (moved := drifted(stretch)) is not None]
    if not told:
        return Answer(question, "unknown", "Too few frames over too short a time to tell.", "", target)
    moving = [stretch for stretch, moved in told if moved]
    if not moving:
        held = all(drift_words(stretch) == "steady" for stretch, _ in told)
        words = "No: it held still within each stretch." if held else "None beyond what chance explains."
        most = max((stretch for stretch, _ in told), key=lambda one: abs(one.drift_mired_per_hour or 0))
        return Answer(question, "fine", words, f"most in {most.stretch}: {drift_figures(most)}", target)
    worst = max(moving, key=lambda one: abs(one.drift_mired_per_hour or 0) * (span_hours(one) or 0))
    named = ", ".join(stretch.stretch for stretch in moving[:4]) + (" \u2026" if len(moving) > 4 else "")
    words = f"Yes, in {len(moving)} of {count(len(told), 'stretch', 'stretches')}: {named}."
    return Answer(question, "look", words, f"{worst.stretch}: {drift_figures(worst)}", target)


def _bodies(shoot: Shoot) -> Answer:
    question, target = "Do the bodies agree?", "bodies"
    others = [body for body in shoot.bodies if body.offset_to is not None]
    if len(shoot.bodies) < 2:
        return Answer(question, "fine", "There is only one body.", "", target)
    known = [body for body in others if body.yellow_blue is not None and body.shared_stretches != 0]
    if not known:
        words = "Nobody can tell: they never shared a light."
        return Answer(question, "unknown", words, count(len(shoot.bodies), "body", "bodies"), target)
    apart = [body for body in known if body.applied]
    if not apart:
        return Answer(
            question, "fine", "Yes, within what chance explains.", _offset_figures(known[0]), target
        )
    words = f"No, but {', '.join(body.label for body in apart)} was matched to {apart[0].offset_to}."
    return Answer(question, "fine", words, _offset_figures(apart[0]), target)


def _offset_figures(body: Body) -> str:
    if body.offset_deg is not None:
        return f"{body.label} measured {body.offset_deg:.1f}\u00b0 apart from {body.offset_to}"
    axes = (
        f"yellow\u2013blue {signed(body.yellow_blue, 4)}, green\u2013magenta {signed(body.green_magenta, 4)}"
    )
    return f"{body.label}: {axes}"


def _by_eye(shoot: Shoot) -> Answer:
    question, look, failed = "Which frames need my eye?", shoot.to_look_at, shoot.count("failed")
    if not look and not failed:
        return Answer(question, "fine", "None stands out.", "", "look")
    words = f"{count(len(look), 'frame')}, worst first." if look else "None of those that came through."
    figures = f"{count(failed, 'frame')} failed" if failed else f"of {len(shoot.frames)}"
    return Answer(question, "look", words, figures, "look")
