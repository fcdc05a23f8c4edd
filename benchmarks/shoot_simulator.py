"""Lay out shoots along known courses of light, plan them, and score the plan.

    shoot_simulator.py [--shoots N] [--frames N] [--scenes spectral|photographs] [--seed N]

Two bodies work through rooms, windows and a stage in mixed order; lamps switch, daylight drifts, some
frames are odd (another light for one frame), one body's clock is off.  Scenes are spectral (`shoot_scenes`), or
the photographs that scikit-image and scikit-learn package, re-lit in sensor space as if they were neutral
(their own casts are not known, so that figures from them hold a bias that is not the plan's).

Scores: error of the light used (recovery angle in working light), frame-to-frame jitter of that error inside a
stretch, switches above 4 degrees found within one frame of the body, switches declared where there is none,
drift slopes inside their intervals, the step between the bodies.
"""

from __future__ import annotations

import argparse
import time
from dataclasses import dataclass, field
from datetime import datetime, timedelta

import numpy as np
from shoot_scenes import Scenes, Sensor, black_body, daylight, lamp, sensors

from grader.cast import measure, plan_shoot, summarise
from grader.cast.plane import ab_from_linear
from grader.cast.shoot_course import degrees_apart
from grader.colour.white import linear_from_xy
from grader.model import Cast, Frame, Recipe

LAMPS = ("A", "FL2", "FL11", "LED-B1", "LED-B3", "LED-B4", "LED-BH1", "ISO 7589 Photoflood")
START = datetime(2031, 5, 4, 14, 0)


@dataclass(frozen=True)
class Course:
    """What is laid out: the spectral power for each frame, and the numbers of its light."""

    power: np.ndarray
    light: np.ndarray
    odd: np.ndarray
    seconds: np.ndarray


@dataclass
class Score:
    """Sums over shoots."""

    errors: list[float] = field(default_factory=list)
    long_errors: list[float] = field(default_factory=list)
    odd_errors: list[float] = field(default_factory=list)
    single_errors: list[float] = field(default_factory=list)
    jitter: list[float] = field(default_factory=list)
    switches: int = 0
    found: int = 0
    false: int = 0
    slopes: int = 0
    inside: int = 0
    steps: list[float] = field(default_factory=list)
    step_doubts: list[float] = field(default_factory=list)
    seconds: float = 0.0


def lay_out(random: np.random.Generator, frames: int, odd_share: float = 0.03) -> Course:
    """Return a course: lights of 16 to 80 frames, drift in daylight and in half of the black bodies."""
    powers, numbers, seconds, clock = [], [], [], 0.0
    number = 0
    while len(powers) < frames:
        length = int(min(random.integers(16, 81), frames - len(powers)))
        if frames - len(powers) - length < 16:
            length = frames - len(powers)
        clock += random.choice([5.0, 60.0, 900.0], p=[0.4, 0.4, 0.2])
        for power in _one_light(random, length):
            powers.append(power)
            numbers.append(number)
            clock += random.exponential(12.0)
            seconds.append(clock)
        number += 1
    odd = random.random(frames) < odd_share
    power = np.stack(powers)
    for at in np.flatnonzero(odd):
        power[at] = _one_light(random, 1)[0]
    return Course(power, np.array(numbers), odd, np.array(seconds))


def _one_light(random: np.random.Generator, length: int) -> list[np.ndarray]:
    """Return the spectral power of consecutive frames under one light."""
    kind = random.choice(3, p=[0.4, 0.25, 0.35])
    if kind == 2:
        return [lamp(str(random.choice(LAMPS)))] * length
    mired = random.uniform(110.0, 215.0) if kind == 0 else random.uniform(290.0, 420.0)
    drift = random.uniform(-0.5, 0.5) * length if random.random() < 0.5 else 0.0
    spectrum = daylight if kind == 0 else black_body
    low, high = (100.0, 245.0) if kind == 0 else (250.0, 480.0)
    along = np.clip(mired + drift * np.linspace(-0.5, 0.5, length), low, high)
    return [spectrum(1e6 / value) for value in along]


def shoot(
    random: np.random.Generator, course: Course, scenes: list[Scenes], clock_error_s: float
) -> tuple[list[Cast], np.ndarray, np.ndarray]:
    """Return the casts of a course shot by two bodies, their true lights, and which body took each."""
    bodies = random.integers(0, 2, len(course.light))
    casts, truth = [], []
    for at, which in enumerate(bodies):
        sensor: Sensor = sensors()[which]
        moment = START + timedelta(seconds=float(course.seconds[at]) + clock_error_s * which)
        frame = Frame.from_array(
            scenes[which].frame(course.power[at], sensor),
            space="Rec.2020",
            linear=True,
            referred="scene",
            body=sensor.name,
            file=f"{'TQ'[which]}{at:05}.dng",
            taken_at=moment.isoformat(timespec="milliseconds"),
        )
        casts.append(measure(frame))
        truth.append(ab_from_linear(sensor.light(course.power[at])))
    return casts, np.array(truth), bodies


def score_shoot(
    course: Course, casts: list[Cast], truth: np.ndarray, bodies: np.ndarray, score: Score, clocks
) -> None:
    """Plan a shoot and add its figures."""
    recipe = Recipe()
    begun = time.process_time()
    plan = plan_shoot(casts, recipe, clocks=clocks)
    score.seconds += time.process_time() - begun
    used = np.array([ab_from_linear(linear_from_xy(one.from_xy)) for one in plan.corrections])
    own = np.array([ab_from_linear(linear_from_xy(cast.white_xy)) for cast in casts])
    error = degrees_apart(used, truth)
    sizes = np.bincount(course.light)[course.light]
    score.errors += error[~course.odd].tolist()
    score.long_errors += error[~course.odd & (sizes >= 16)].tolist()
    score.odd_errors += error[course.odd].tolist()
    score.single_errors += degrees_apart(own, truth).tolist()
    for body in (0, 1):
        rows = np.flatnonzero(bodies == body)
        _score_switches(course, truth, [plan.corrections[row].stretch for row in rows], rows, score)
        even = rows[~course.odd[rows]]
        off = (used - truth)[even]
        together = course.light[even][1:] == course.light[even][:-1]
        score.jitter += degrees_apart(off[1:], off[:-1])[together].tolist()
    _score_drift(course, casts, plan, truth, score, clocks)
    if plan.matches:
        match = plan.matches[0]
        sign = 1.0 if match.first == sensors()[0].name else -1.0
        score.steps.append(float(degrees_apart(sign * match.step.ab, _true_step(course))))
        score.step_doubts.append(match.doubt_deg)


def _true_step(course: Course) -> np.ndarray:
    first, second = (np.mean([ab_from_linear(s.light(p)) for p in course.power], axis=0) for s in sensors())
    return second - first


def _score_switches(
    course: Course, truth: np.ndarray, names: list[str], rows: np.ndarray, score: Score
) -> None:
    """Add one body's switches: ``rows`` are its frames in capture order."""
    light = course.light[rows]
    true = [k for k in range(1, len(rows)) if light[k] != light[k - 1]]
    declared = [k for k in range(1, len(rows)) if names[k] != names[k - 1]]
    for k in true:
        ends = [
            truth[rows[near]][~course.odd[rows[near]]]
            for near in (np.arange(max(k - 3, 0), k), np.arange(k, min(k + 3, len(rows))))
        ]
        if all(len(end) for end in ends) and degrees_apart(ends[0][-1], ends[1][0]) > 4.0:
            score.switches += 1
            score.found += any(abs(k - d) <= 1 for d in declared)
    score.false += sum(not any(abs(k - d) <= 1 for k in true) for d in declared)


def _score_drift(course: Course, casts: list[Cast], plan, truth: np.ndarray, score: Score, clocks) -> None:
    """Add the slopes of stretches that lie within one light."""
    from grader.cast.plane import linear_from_ab, mired_duv_from_xy
    from grader.colour.white import xy_from_linear

    mired, _ = mired_duv_from_xy(xy_from_linear(linear_from_ab(truth)))
    names = np.array([one.stretch for one in plan.corrections])
    for stretch in summarise(casts, plan.corrections, clocks=clocks).stretches:
        rows = np.flatnonzero((names == stretch.stretch) & ~course.odd)
        if stretch.drift_mired_per_hour is None or len(set(course.light[rows])) > 1:
            continue
        true = np.polyfit(course.seconds[rows] / 3600.0, mired[rows], 1)[0]
        score.slopes += 1
        score.inside += stretch.drift_mired_low <= true <= stretch.drift_mired_high


class Photographs:
    """Crops of packaged photographs, re-lit in sensor space."""

    def __init__(self, random: np.random.Generator):
        self.random = random

    def frame(self, power: np.ndarray, sensor: Sensor) -> np.ndarray:
        """Return one frame in working light, float32."""
        pictures = photographs()
        picture = pictures[self.random.integers(len(pictures))]
        share = self.random.uniform(0.5, 1.0, 2)
        height, width = (int(side * part) for side, part in zip(picture.shape, share, strict=False))
        top, left = (
            int(self.random.integers(0, s - t + 1))
            for s, t in zip(picture.shape, (height, width), strict=False)
        )
        crop = picture[top : top + height, left : left + width]
        balanced = crop @ np.linalg.inv(sensor.rec2020_from_sensor).T
        lit = (balanced * (power @ sensor.sensitivities)) @ sensor.rec2020_from_sensor.T
        return (lit / np.percentile(lit.max(axis=-1), 99.5)).astype(np.float32)


_PICTURES: list[np.ndarray] = []


def photographs() -> list[np.ndarray]:
    """Return the packaged photographs in linear working light, about 96 cells wide."""
    if not _PICTURES:
        from skimage import data
        from skimage.transform import resize
        from sklearn.datasets import load_sample_images

        from grader.colour.spaces import space_by_name
        from grader.colour.transfer import decode

        srgb = space_by_name("sRGB")
        encoded = [data.astronaut(), data.chelsea(), data.coffee(), *load_sample_images().images]
        for picture in encoded:
            linear = decode(srgb.curves[0], picture / 255.0) @ srgb.rec2020_from_linear.T
            height = round(linear.shape[0] * 128 / linear.shape[1])
            _PICTURES.append(resize(linear, (height, 128), anti_aliasing=True))
    return _PICTURES


def run(shoots: int, frames: int, kind: str, seed: int, clock_error_s: float = -47.0) -> Score:
    """Lay out, measure, plan and score shoots; the second body's clock error is told to the plan."""
    score = Score()
    for number in range(shoots):
        random = np.random.default_rng([seed, number])
        course = lay_out(random, frames)
        scenes = [Scenes(random) if kind == "spectral" else Photographs(random) for _ in sensors()]
        casts, truth, bodies = shoot(random, course, scenes, clock_error_s)
        clocks = {sensors()[1].name: -clock_error_s}
        score_shoot(course, casts, truth, bodies, score, clocks)
    return score


def report(score: Score) -> str:
    """Return the figures as text."""
    frames = len(score.errors) + len(score.odd_errors)
    return "\n".join(
        [
            f"a frame by itself                  {np.mean(score.single_errors):.2f} degrees mean, {np.median(score.single_errors):.2f} median",
            f"light used                         {np.mean(score.errors):.2f} mean, {np.percentile(score.errors, 95):.2f} 95th percentile",
            f"light used, odd frames             {np.mean(score.odd_errors):.2f} mean of {len(score.odd_errors)}",
            f"jitter inside a stretch            {np.mean(score.jitter):.2f} mean",
            f"switches above 4 degrees found     {score.found} of {score.switches}",
            f"false switches                     {100 * score.false / frames:.2f} per 100 frames",
            f"drift slopes inside their interval {score.inside} of {score.slopes}",
            f"step between the bodies            {np.mean(score.steps):.2f} mean error, {np.mean(score.step_doubts):.2f} mean doubt",
            f"planning                           {1000 * score.seconds / frames:.2f} ms a frame",
        ]
    )


def main() -> None:
    arguments = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    arguments.add_argument("--shoots", type=int, default=12)
    arguments.add_argument("--frames", type=int, default=400)
    arguments.add_argument("--scenes", choices=("spectral", "photographs"), default="spectral")
    arguments.add_argument("--seed", type=int, default=1)
    options = arguments.parse_args()
    print(report(run(options.shoots, options.frames, options.scenes, options.seed)))


if __name__ == "__main__":
    main()
