"""Outside checks: Ottosson's published pairs and colour-science."""

import colour
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from grader.colour import opponent, white
from grader.errors import PresetError

LIGHTS = st.builds(white.xy_from_cct_duv, st.floats(1500, 30_000), st.floats(-0.05, 0.05))
SOME_XYZ = np.random.default_rng(2).uniform(0, 1, (500, 3)) @ white.xyz_from_primaries("Rec.2020").T


@pytest.mark.parametrize(
    ("xyz", "oklab"),
    [
        ((0.950, 1.000, 1.089), (1.000, 0.000, 0.000)),
        ((1.000, 0.000, 0.000), (0.450, 1.236, -0.019)),
        ((0.000, 1.000, 0.000), (0.922, -0.671, 0.263)),
        ((0.000, 0.000, 1.000), (0.153, -1.415, -0.449)),
    ],
)
def test_oklab_gives_the_published_pairs(xyz, oklab):
    """Ottosson 2020, table of test pairs, all digits."""
    np.testing.assert_array_equal(opponent.oklab_from_xyz(xyz).round(3), oklab)
    np.testing.assert_allclose(opponent.xyz_from_oklab(oklab), xyz, atol=3e-3)


def test_oklab_agrees_with_colour_science():
    """Within the rescaling that makes D65 exactly neutral."""
    np.testing.assert_allclose(opponent.oklab_from_xyz(SOME_XYZ), colour.XYZ_to_Oklab(SOME_XYZ), atol=2e-4)


def test_cielab_agrees_with_colour_science():
    reference = colour.XYZ_to_Lab(SOME_XYZ, white.D65_XY)
    np.testing.assert_allclose(opponent.cielab_from_xyz(SOME_XYZ), reference, atol=1e-11)


def test_ciecam16ucs_agrees_with_colour_science():
    model = colour.XYZ_to_CAM16(
        100 * SOME_XYZ,
        100 * white.xyz_from_xy(white.D65_XY),
        64 / np.pi * 0.2,
        20,
        colour.VIEWING_CONDITIONS_CAM16["Average"],
        discount_illuminant=True,
    )
    reference = colour.JMh_CAM16_to_CAM16UCS(colour.utilities.tstack([model.J, model.M, model.h]))
    np.testing.assert_allclose(opponent.ciecam16ucs_from_xyz(SOME_XYZ), reference, atol=1e-10)


def test_ciecam16ucs_round_trips():
    np.testing.assert_allclose(
        opponent.xyz_from_ciecam16ucs(opponent.ciecam16ucs_from_xyz(SOME_XYZ)), SOME_XYZ, atol=1e-9
    )


@pytest.mark.parametrize("space", ["oklab", "ciecam16", "cielab"])
def test_neutral_has_no_cast(space):
    assert opponent.cast_from_xy(white.D65_XY, space) == pytest.approx((0, 0), abs=1e-7)
    assert opponent.xy_from_cast(0, 0, space) == pytest.approx(white.D65_XY, abs=1e-7)


@pytest.mark.parametrize("space", ["oklab", "ciecam16", "cielab"])
def test_signs_are_yellow_and_magenta(space):
    """CIE A is yellower than D65; FL2 is greener than the black body of its temperature (CIE 15:2004)."""
    ccs = colour.CCS_ILLUMINANTS["CIE 1931 2 Degree Standard Observer"]
    assert opponent.cast_from_xy(ccs["A"], space)[0] > 0
    cct_k, _ = white.cct_duv_from_xy(ccs["FL2"])
    on_locus = opponent.cast_from_xy(white.planckian_xy(cct_k), space)
    assert opponent.cast_from_xy(ccs["FL2"], space)[1] < on_locus[1]


@given(LIGHTS, st.sampled_from(["oklab", "ciecam16", "cielab"]))
def test_casts_round_trip(xy, space):
    assert opponent.xy_from_cast(*opponent.cast_from_xy(xy, space), space) == pytest.approx(
        tuple(xy), abs=1e-10
    )


@given(st.floats(-1e-3, 1e-3), st.floats(-1e-3, 1e-3), st.sampled_from(["oklab", "ciecam16", "cielab"]))
def test_faint_casts_round_trip(yellow_blue, green_magenta, space):
    there = opponent.cast_from_xy(opponent.xy_from_cast(yellow_blue, green_magenta, space), space)
    assert there == pytest.approx((yellow_blue, green_magenta), abs=1e-7)


@pytest.mark.parametrize("xy", [(0.64, 0.33), (0.15, 0.06), (0.17, 0.02), (0.1, 0.8), (0.7, 0.29)])
@pytest.mark.parametrize("space", ["oklab", "ciecam16", "cielab"])
def test_casts_of_saturated_lights_round_trip(xy, space):
    assert opponent.xy_from_cast(*opponent.cast_from_xy(xy, space), space) == pytest.approx(xy, abs=1e-9)


@given(st.lists(st.floats(-0.2, 1.5), min_size=3, max_size=3))
def test_oklab_and_cielab_round_trip(xyz):
    np.testing.assert_allclose(opponent.xyz_from_cielab(opponent.cielab_from_xyz(xyz)), xyz, atol=1e-9)
    np.testing.assert_allclose(opponent.xyz_from_oklab(opponent.oklab_from_xyz(xyz)), xyz, atol=1e-9)


def test_impossible_and_unknown_are_refused():
    with pytest.raises(PresetError, match="no light gives"):
        opponent.xy_from_cast(1e4, 0.0, "ciecam16")
    for ask in (lambda: opponent.cast_from_xy(white.D65_XY, "x"), lambda: opponent.xy_from_cast(0, 0, "x")):
        with pytest.raises(PresetError, match="opponent space"):
            ask()
