"""The plane and the candidate lights against colour-science and the law that a light is a shift."""

import warnings

import numpy as np
import pytest

from grader.cast import plane, vote
from grader.colour.opponent import oklab_from_xyz
from grader.colour.spaces import XYZ_FROM_REC2020
from grader.colour.white import D65_XY, xy_from_linear

with warnings.catch_warnings():
    warnings.simplefilter("ignore")
    import colour

RNG = np.random.default_rng(2)


def test_near_neutral_it_is_oklab_over_lightness():
    linear = 1.0 + 0.02 * RNG.standard_normal((50, 3))
    lightness, a, b = oklab_from_xyz(linear @ XYZ_FROM_REC2020.T).T
    np.testing.assert_allclose(
        plane.ab_from_linear(linear), np.stack([a, b], -1) / lightness[:, None], atol=2e-4
    )


def test_a_change_of_light_is_a_shift():
    linear = RNG.uniform(0.1, 1.0, (100, 3))
    gain = np.linalg.inv(plane.LMS_FROM_REC2020) @ np.diag([1.3, 1.0, 0.6]) @ plane.LMS_FROM_REC2020
    steps = plane.ab_from_linear(linear @ gain.T) - plane.ab_from_linear(linear)
    np.testing.assert_allclose(steps, np.broadcast_to(steps[0], steps.shape), atol=1e-12)


def test_there_and_back():
    places = vote.candidates()
    linear = plane.linear_from_ab(places)
    np.testing.assert_allclose(plane.ab_from_linear(linear), places, atol=1e-9)
    np.testing.assert_allclose(plane.luminance(linear), 1.0)


def test_neutral_is_the_origin():
    np.testing.assert_allclose(plane.ab_from_xy(D65_XY), 0.0, atol=1e-9)


def test_mired_and_duv_as_colour_science_finds_them():
    """colour-science, Ohno 2013, on candidates near enough to the locus for that method."""
    mired, duv = plane.mired_duv_from_xy(xy_from_linear(vote.candidate_lights()))
    pick = np.flatnonzero((np.abs(duv) < 0.02) & (mired > 100) & (mired < 500))[::40]
    for i in pick:
        uv = colour.xy_to_UCS_uv(xy_from_linear(vote.candidate_lights()[i]))
        cct, expected = colour.temperature.uv_to_CCT_Ohno2013(uv)
        assert mired[i] == pytest.approx(1e6 / cct, abs=1.0)
        assert duv[i] == pytest.approx(expected, abs=2e-4)


def test_candidates_hold_cie_illuminants():
    """CIE 15:2004 tables: every lamp kind that a photographer meets lies well inside."""
    lights = colour.CCS_ILLUMINANTS["CIE 1931 2 Degree Standard Observer"]
    for name in (
        "A",
        "D50",
        "D65",
        "D75",
        "FL2",
        "FL7",
        "FL11",
        "LED-B1",
        "LED-B3",
        "LED-B5",
        "HP1",
        "HP2",
        "HP5",
    ):
        nearest = np.linalg.norm(vote.candidates() - plane.ab_from_xy(lights[name]), axis=1).min()
        assert nearest < plane.STEP, name
