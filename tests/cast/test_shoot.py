"""The plan of a shoot: its laws, and its behaviour where the metadata are poor.

Frames are pieces of a photograph that scikit-image packages, under known lights.
"""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from batchkit import NEUTRAL, encoded_scene

from grader import cast as casts
from grader.cast.correction import angle_deg
from grader.cast.shoot_summary import shoot_summary
from grader.colour.white import linear_from_xy
from grader.errors import PresetError
from grader.model import Cast, Frame, Recipe

WINDOW, TUNGSTEN = (0.3457, 0.3585), (0.4476, 0.4074)


@cache
def measured(light: tuple[float, float], seed: int, referred: str = "scene") -> Cast:
    pixels = encoded_scene(light, seed).astype(np.float32)
    return casts.measure(Frame.from_array(pixels, referred=referred))


def frame(light, seed, at=None, body="Northlight N1 7", referred="scene", **facts) -> Cast:
    cast = measured(light, seed, referred)
    time = None if at is None else f"2031-05-04T{18 + at // 3600:02}:{at // 60 % 60:02}:{at % 60:02}"
    return replace(
        cast,
        header=replace(cast.header, file=f"{body[-1]}{seed}-{at}.dng", body=body, taken_at=time, **facts),
    )


def apart_deg(first, second) -> float:
    return angle_deg(np.asarray(linear_from_xy(first)), np.asarray(linear_from_xy(second)))


def evening() -> list[Cast]:
    return [frame(WINDOW, k, 20 * k) for k in range(8)] + [frame(TUNGSTEN, k, 600 + 20 * k) for k in range(8)]


def test_frames_under_one_light_are_corrected_alike_and_the_switch_is_found() -> None:
    plan = casts.plan(evening())
    assert len({c.stretch for c in plan[:8]}) == len({c.stretch for c in plan[8:]}) == 1
    assert plan[0].stretch != plan[8].stretch
    assert max(apart_deg(c.from_xy, plan[0].from_xy) for c in plan[:8]) < 0.5
    for correction, light in ((plan[0], WINDOW), (plan[8], TUNGSTEN)):
        assert apart_deg(correction.from_xy, light) < 4.0
        assert correction.reason


def test_lights_of_three_frames_each_are_told_apart() -> None:
    lights = [WINDOW, TUNGSTEN, WINDOW, TUNGSTEN]
    shoot = [frame(light, 3 * n + k, 900 * n + 60 * k) for n, light in enumerate(lights) for k in range(3)]
    names = [c.stretch for c in casts.plan(shoot)]
    assert len(set(names)) == 4
    assert names[::3] == names[1::3] == names[2::3]


def test_the_order_of_the_list_does_not_matter() -> None:
    shoot = evening()
    order = np.random.default_rng(3).permutation(len(shoot))
    plan, shuffled = casts.plan(shoot), casts.plan([shoot[k] for k in order])
    for place, correction in zip(order, shuffled, strict=True):
        np.testing.assert_array_equal(correction.matrix, plan[place].matrix)


def test_a_frame_far_away_changes_nothing_here() -> None:
    shoot = evening()
    far = replace(shoot[3], header=replace(shoot[3].header, file="far.dng", taken_at="2031-05-09T10:00:00"))
    for before, after in zip(casts.plan(shoot), casts.plan([*shoot, far]), strict=False):
        np.testing.assert_array_equal(before.matrix, after.matrix)


def test_one_frame_is_its_own_measurement() -> None:
    cast = frame(TUNGSTEN, 1, 0)
    assert casts.plan([cast])[0].from_xy == cast.white_xy


def test_identical_frames_get_identical_corrections() -> None:
    plan = casts.plan([frame(TUNGSTEN, 2, 30 * k) for k in range(5)])
    for correction in plan[1:]:
        np.testing.assert_allclose(correction.matrix, plan[0].matrix, atol=1e-9)


def test_a_neutral_finished_shoot_is_left_alone() -> None:
    plan = casts.plan([frame(NEUTRAL, k, 30 * k, referred="display") for k in range(12)])
    assert np.mean([apart_deg(c.from_xy, NEUTRAL) for c in plan]) <= 0.5


def test_per_frame_does_not_pool() -> None:
    shoot = evening()
    for cast, correction in zip(shoot, casts.plan(shoot, Recipe(pooling=False)), strict=True):
        assert correction.from_xy == cast.white_xy


@pytest.mark.parametrize("times", [None, 0, "backwards"])
def test_poor_times_are_no_obstacle(times) -> None:
    at = {None: lambda _: None, 0: lambda _: 0, "backwards": lambda k: 900 - 60 * k}[times]
    shoot = [frame(WINDOW, k, at(k)) for k in range(6)]
    plan = casts.plan(shoot)
    assert all(np.isfinite(c.matrix).all() for c in plan)
    assert all(("no-time" in c.flags) == (times is None) for c in plan)


def test_frames_without_a_light_take_that_of_their_stretch_or_none() -> None:
    blank = Cast(header=replace(frame(WINDOW, 1, 70).header, file="blank.dng"), flags=("nothing-measured",))
    assert casts.plan([blank])[0].from_xy is None
    np.testing.assert_array_equal(casts.plan([blank])[0].matrix, np.eye(3))
    shoot = [*evening()[:8], blank]
    assert apart_deg(casts.plan(shoot)[-1].from_xy, casts.plan(shoot)[3].from_xy) < 0.5


def test_stage_light_between_two_stretches_is_left_as_it_is() -> None:
    stage = replace(frame(WINDOW, 1, 300), white_xy=(0.22, 0.10), flags=("coloured-light",))
    plan = casts.plan([*evening()[:8], stage, *evening()[8:]])
    np.testing.assert_array_equal(plan[8].matrix, np.eye(3))
    corrected = casts.plan([*evening()[:8], stage], Recipe(coloured_light="correct"))
    assert not np.array_equal(corrected[-1].matrix, np.eye(3))


def test_boundaries_fixed_by_hand_and_known_lights() -> None:
    shoot = evening()
    files = [cast.header.file for cast in shoot]
    plan = casts.plan(shoot, stretches=[(files[0], files[3]), (files[4], files[7])])
    assert plan[3].stretch != plan[4].stretch
    pinned = casts.plan(shoot, pins={files[9]: TUNGSTEN})
    assert apart_deg(pinned[12].from_xy, TUNGSTEN) < 0.5
    with pytest.raises(PresetError):
        casts.plan(shoot, stretches=[("none.dng", files[3])])


def test_a_pair_of_raw_and_jpeg_is_one_moment_but_two_lanes() -> None:
    raw = [frame(WINDOW, k, 30 * k) for k in range(4)]
    jpeg = [frame(NEUTRAL, k, 30 * k, referred="display") for k in range(4)]
    plan = casts.plan([*raw, *jpeg])
    assert not {c.stretch for c in plan[:4]} & {c.stretch for c in plan[4:]}


def test_an_empty_shoot() -> None:
    assert casts.plan([]) == []


def test_the_summary_tells_stretches_and_what_is_beyond_tolerance() -> None:
    shoot = {cast.header.file: cast for cast in evening()}
    plan = dict(zip(shoot, casts.plan(list(shoot.values())), strict=True))
    told = shoot_summary(shoot, plan, Recipe(tolerance_delta_e_2000=3.0), against=WINDOW)
    assert [row["frames"] for row in told["stretches"]] == [8, 8]
    assert len(told["beyond_tolerance"]) >= 8
