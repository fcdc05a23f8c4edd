"""Outside check: colour-science's von Kries form of the same transforms."""

import colour
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from grader.colour.adaptation import TRANSFORMS, adaptation_matrix
from grader.colour.white import D65_XY, xy_from_cct_duv, xyz_from_xy
from grader.errors import PresetError

LIGHTS = st.builds(xy_from_cct_duv, st.floats(2800, 20_000), st.floats(-0.03, 0.02))
NAMES = st.sampled_from(list(TRANSFORMS))
REFERENCE = {"cat16": "CAT16", "bradford": "Bradford", "cat02": "CAT02", "von-kries": "Von Kries"}


@pytest.mark.parametrize("name", TRANSFORMS)
@pytest.mark.parametrize("light", ["A", "D50", "FL2", "LED-B3"])
def test_agrees_with_colour_science(name, light):
    xy = colour.CCS_ILLUMINANTS["CIE 1931 2 Degree Standard Observer"][light]
    reference = colour.adaptation.matrix_chromatic_adaptation_VonKries(
        xyz_from_xy(xy), xyz_from_xy(D65_XY), transform=REFERENCE[name]
    )
    np.testing.assert_allclose(adaptation_matrix(xy, D65_XY, name), reference, atol=1e-12)


@given(LIGHTS, LIGHTS, NAMES)
def test_there_and_back_is_nothing(one, other, name):
    product = adaptation_matrix(one, other, name) @ adaptation_matrix(other, one, name)
    np.testing.assert_allclose(product, np.eye(3), atol=1e-10)


@given(LIGHTS, NAMES, st.floats(0, 1))
def test_equal_whites_need_nothing(xy, name, degree):
    np.testing.assert_allclose(adaptation_matrix(xy, xy, name, degree), np.eye(3), atol=1e-12)


@given(LIGHTS, LIGHTS, NAMES)
def test_white_goes_to_white(one, other, name):
    np.testing.assert_allclose(
        adaptation_matrix(one, other, name) @ xyz_from_xy(one), xyz_from_xy(other), atol=1e-10
    )


def test_degree_mixes_the_gains():
    full = adaptation_matrix((0.45, 0.41), D65_XY)
    half = adaptation_matrix((0.45, 0.41), D65_XY, degree=0.5)
    np.testing.assert_allclose(half, (full + np.eye(3)) / 2, atol=1e-12)
    np.testing.assert_allclose(adaptation_matrix((0.45, 0.41), D65_XY, degree=0), np.eye(3), atol=1e-12)


def test_very_saturated_lights_stay_finite():
    assert np.isfinite(adaptation_matrix((0.16, 0.01), D65_XY)).all()


def test_unknown_name_is_refused():
    with pytest.raises(PresetError, match="no adaptation called"):
        adaptation_matrix(D65_XY, D65_XY, "x")
