"""Two bodies, drift and grey cards: what the plan of a shoot makes of lights that were laid out.

The lights are black bodies and illuminants of the CIE, scenes are pieces of a photograph that scikit-image packages.
"""

from dataclasses import replace
from datetime import datetime, timedelta
from functools import cache

import numpy as np
import pytest
from batchkit import encoded_scene

from grader import cast as casts
from grader.cast import plan_shoot
from grader.cast.correction import angle_deg
from grader.cast.drift import slope_of
from grader.cast.shoot import compare_bodies
from grader.cast.shoot_summary import shoot_summary
from grader.colour.white import linear_from_xy, planckian_xy, xy_from_linear
from grader.model import Cast, Frame, Recipe

WINDOW, TUNGSTEN = (0.3457, 0.3585), (0.4476, 0.4074)
START = datetime(2031, 5, 4, 18)
STEP = np.array([1.0, 0.95, 1.08])
"""What the second body makes of a light that the first sees neutral: three degrees off."""
FIRST, SECOND = "Northlight N1 7", "Tallyho H2 5"


@cache
def measured(light_xy: tuple[float, float], seed: int) -> Cast:
    pixels = encoded_scene(light_xy, seed).astype(np.float32)
    return casts.measure(Frame.from_array(pixels, referred="scene"))


def frame(light_xy, seed, at_s, body=FIRST) -> Cast:
    cast = measured(tuple(float(v) for v in light_xy), seed)
    moment = (START + timedelta(seconds=at_s)).isoformat()
    header = replace(cast.header, file=f"{body[0]}{at_s}.dng", body=body, taken_at=moment)
    return replace(cast, header=header)


def seen_by_second(light_xy):
    return xy_from_linear(np.asarray(linear_from_xy(light_xy)) * STEP)


def both_bodies(late_s=0) -> list[Cast]:
    """Two lights of sixteen frames, each body taking every other frame of other scenes."""
    shoot = []
    for number, light in enumerate((WINDOW, TUNGSTEN)):
        for k in range(16):
            at_s = 1800 * number + 20 * k
            shoot.append(frame(light, k, at_s))
            shoot.append(frame(seen_by_second(light), k, at_s + 10 + late_s, SECOND))
    return shoot


def apart_deg(first, second) -> float:
    return angle_deg(np.asarray(linear_from_xy(first)), np.asarray(linear_from_xy(second)))


def lights_of(shoot, plan, body):
    return [c.from_xy for cast, c in zip(shoot, plan, strict=True) if cast.header.body == body]


def test_the_step_between_two_bodies_is_found_and_both_share_their_lights() -> None:
    shoot = both_bodies()
    plan = plan_shoot(shoot, Recipe())
    (match,) = plan.matches
    assert {match.first, match.second} == {FIRST, SECOND}
    assert match.applied
    given_deg = angle_deg(np.ones(3), STEP)
    assert match.degrees == pytest.approx(
        given_deg, abs=0.4 * given_deg
    )  # pieces of one photograph err alike
    first, second = (lights_of(shoot, plan.corrections, body) for body in (FIRST, SECOND))
    for one, other in zip(first, second, strict=True):
        assert apart_deg(seen_by_second(one), other) < 0.5 * given_deg
    assert len({c.stretch for c in plan.corrections}) == 4


def test_without_matching_each_body_keeps_its_own_lights() -> None:
    shoot = both_bodies()
    plan = plan_shoot(shoot, Recipe(match_bodies=False))
    assert not plan.matches
    for body in (FIRST, SECOND):
        alone = [cast for cast in shoot if cast.header.body == body]
        expected = [c.from_xy for c in casts.plan(alone)]
        np.testing.assert_allclose(lights_of(shoot, plan.corrections, body), expected, atol=1e-9)


def test_a_clock_that_is_off_is_set_right() -> None:
    late = both_bodies(late_s=7200)
    assert not compare_bodies(late)
    (match,) = compare_bodies(late, clocks={"Tallyho": -7200})
    (true,) = compare_bodies(both_bodies())
    np.testing.assert_allclose(match.step.ab, true.step.ab, atol=1e-9)


def test_a_body_with_one_frame_is_measured_by_itself() -> None:
    alone = frame(TUNGSTEN, 3, 75, SECOND)
    shoot = [*[frame(WINDOW, k, 20 * k) for k in range(8)], alone]
    plan = plan_shoot(shoot)
    assert not plan.matches
    assert plan.corrections[-1].from_xy == alone.white_xy


def test_a_grey_card_takes_the_bias_of_its_body_out_of_other_stretches() -> None:
    """The body sees every light shifted; the card stands in its first stretch only."""
    lights = (WINDOW, TUNGSTEN)
    shoot = [
        frame(seen_by_second(light), k, 1800 * n + 20 * k)
        for n, light in enumerate(lights)
        for k in range(12)
    ]
    plain = plan_shoot(shoot).corrections
    pinned = plan_shoot(shoot, pins={0: seen_by_second(WINDOW)}).corrections
    assert apart_deg(pinned[5].from_xy, seen_by_second(WINDOW)) < 0.3
    wrong = plain[5].from_xy
    known = apart_deg(wrong, seen_by_second(WINDOW))
    moved = apart_deg(plain[18].from_xy, pinned[18].from_xy)
    assert 0.2 * known < moved < 1.5 * known
    assert "bias removed" in pinned[18].reason


def test_ten_thousand_frames_in_one_stretch() -> None:
    shoot = [frame(WINDOW, k % 7, 3 * k) for k in range(10_000)]
    plan = casts.plan(shoot)
    assert {c.stretch for c in plan} == {"A1"}
    assert apart_deg(plan[0].from_xy, plan[-1].from_xy) < 0.5


def test_drift_of_daylight_toward_evening_is_told_with_its_interval() -> None:
    """Planckian lights from 180 to 240 mired within two hours: 30 mired an hour."""
    mired = np.linspace(180.0, 240.0, 60)
    shoot = {
        cast.header.file: cast
        for k, m in enumerate(mired)
        for cast in [frame(planckian_xy(1e6 / m), k % 12, int(120 * k * 60 / 59))]
    }
    plan = dict(zip(shoot, casts.plan(list(shoot.values())), strict=True))
    told = shoot_summary(shoot, plan, Recipe())
    (row,) = told["stretches"]
    slope, low, high = (row[f"drift_mired_{name}"] for name in ("per_hour", "low", "high"))
    assert low <= 30.0 <= high
    assert slope == pytest.approx(30.0, abs=6.0)


def test_the_interval_of_a_slope_holds_the_truth_about_as_often_as_it_says() -> None:
    times = np.arange(0.0, 3600.0, 90.0)
    held = 0
    for seed in range(200):
        rng = np.random.default_rng(seed)
        values = 5.0 * times / 3600.0 + rng.normal(0.0, 3.0, len(times))
        values[rng.integers(0, len(times), 3)] += 80.0  # odd frames
        slope = slope_of(times, values)
        held += slope.low <= 5.0 <= slope.high
    assert held >= 180
