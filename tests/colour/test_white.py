"""Outside checks: CIE facts and colour-science."""

import colour
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from grader.colour import _tables, white

KELVINS = st.floats(1200, 40_000)
DUVS = st.floats(-0.04, 0.04)


def test_cie_facts():
    """CIE 15:2004: illuminant A is a black body at 2856 K (350 mired), D65 is about 6504 K."""
    a_xy = colour.CCS_ILLUMINANTS["CIE 1931 2 Degree Standard Observer"]["A"]
    cct_k, duv = white.cct_duv_from_xy(a_xy)
    assert cct_k == pytest.approx(2856, abs=1)
    assert duv == pytest.approx(0, abs=5e-5)
    assert white.mired_from_k(cct_k) == pytest.approx(350, abs=0.5)
    cct_k, duv = white.cct_duv_from_xy(white.D65_XY)
    assert cct_k == pytest.approx(6504, abs=1)
    assert duv == pytest.approx(0.0032, abs=5e-5)


@pytest.mark.parametrize("cct_k", [1200, 2000, 2856, 4000, 5500, 6504, 9000, 15_000])
@pytest.mark.parametrize("duv", [-0.03, -0.005, 0.0, 0.01, 0.04])
def test_cct_and_duv_agree_with_ohno_2013_in_colour_science(cct_k, duv):
    uv = colour.temperature.CCT_to_uv_Ohno2013([cct_k, duv])
    ours_k, ours_duv = white.cct_duv_from_xy(white.xy_from_uv1960(uv))
    assert ours_k == pytest.approx(cct_k, abs=1)
    assert ours_duv == pytest.approx(duv, abs=2e-6)
    np.testing.assert_allclose(white.uv1960_from_xy(white.xy_from_cct_duv(cct_k, duv)), uv, atol=4e-5)


@pytest.mark.parametrize("cct_k", [1000, 2856, 6504, 20_000, 100_000])
def test_locus_agrees_with_plancks_law_in_colour_science(cct_k):
    """At 1 nm over the same 360-830 nm; ours sums every fifth."""
    shape = colour.SpectralShape(360, 830, 1)
    cmfs = colour.MSDS_CMFS["CIE 1931 2 Degree Standard Observer"]
    reference = colour.XYZ_to_xy(
        colour.sd_to_XYZ(colour.sd_blackbody(cct_k, shape), cmfs, method="Integration")
    )
    np.testing.assert_allclose(white.planckian_xy(cct_k), reference, atol=5e-6)


def test_colour_matching_functions_are_colour_sciences():
    cmfs = (
        colour.MSDS_CMFS["CIE 1931 2 Degree Standard Observer"]
        .copy()
        .align(colour.SpectralShape(360, 830, 5))
    )
    np.testing.assert_array_equal(_tables.CMF, cmfs.values)
    assert colour.colorimetry.blackbody.CONSTANT_C2 == _tables.C2_M_K


def test_far_from_the_locus_there_is_no_colour_temperature():
    """Ohno 2014: no meaning beyond a Duv of 0.05.  sRGB's green primary lies far on the green side."""
    for xy, side in (((0.30, 0.60), 1), ((0.2, 0.05), -1)):
        cct_k, duv = white.cct_duv_from_xy(xy)
        assert cct_k is None
        assert np.sign(duv) == side


def test_beyond_the_ends_of_the_locus_there_is_no_colour_temperature():
    for xy in (white.planckian_xy(800), (0.235, 0.228)):
        assert white.cct_duv_from_xy(xy)[0] is None


@given(KELVINS, DUVS)
def test_cct_and_duv_round_trip(cct_k, duv):
    ours_k, ours_duv = white.cct_duv_from_xy(white.xy_from_cct_duv(cct_k, duv))
    assert white.mired_from_k(ours_k) == pytest.approx(white.mired_from_k(cct_k), abs=1e-4)
    assert ours_duv == pytest.approx(duv, abs=1e-9)


@given(st.tuples(st.floats(0.1, 0.7), st.floats(0.05, 0.8)))
def test_chromaticities_round_trip(xy):
    np.testing.assert_allclose(white.xy_from_uv1960(white.uv1960_from_xy(xy)), xy, atol=1e-12)
    np.testing.assert_allclose(white.xy_from_xyz(white.xyz_from_xy(xy)), xy, atol=1e-12)
    np.testing.assert_allclose(white.xy_from_linear(3.0 * white.linear_from_xy(xy)), xy, atol=1e-12)


def test_uv1960_agrees_with_colour_science():
    xy = np.random.default_rng(1).uniform(0.1, 0.6, (50, 2))
    np.testing.assert_allclose(white.uv1960_from_xy(xy), colour.xy_to_UCS_uv(xy), atol=1e-14)


def test_arrays_keep_their_shape():
    cct_k = np.full((4, 5), 5000.0)
    assert white.planckian_xy(cct_k).shape == (4, 5, 2)
    assert white.xy_from_cct_duv(cct_k, 0.01).shape == (4, 5, 2)
    assert white.linear_from_xy(white.planckian_xy(cct_k)).shape == (4, 5, 3)
