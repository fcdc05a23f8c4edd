"""The correction against colour-science's adaptation and colour-rendering code, and against its own laws."""

import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from grader.cast.correction import (
    aim_xy,
    correction_for,
    correction_moved,
    fixed_correction,
    identity_correction,
    locus_white_xy,
    residual,
)
from grader.colour.opponent import cast_from_xy
from grader.colour.spaces import XYZ_FROM_REC2020
from grader.colour.white import D65_XY, linear_from_xy
from grader.errors import PresetError
from grader.model import Cast, Fixed, Header, Recipe

with warnings.catch_warnings():
    warnings.simplefilter("ignore")
    import colour

INCANDESCENT = (0.44758, 0.40745)  # CIE standard illuminant A, CIE 15:2004 table T.3
WINDOW = (0.3457, 0.3585)  # D50, same table
FLUORESCENT = (0.3721, 0.3751)  # CIE F2, same table
AS_SHOT = Header(referred="scene", daylight_from_decoded=np.diag([1.9, 1.0, 0.6]) @ (np.eye(3) + 0.03))


def carried(linear, correction):
    return np.asarray(linear) @ correction.matrix.T


def white_of(linear):
    xyz = XYZ_FROM_REC2020 @ linear
    return xyz[:2] / xyz.sum()


@pytest.mark.parametrize("light", [INCANDESCENT, WINDOW, FLUORESCENT])
@pytest.mark.parametrize(
    ("ours", "theirs"),
    [("cat16", "CAT16"), ("bradford", "Bradford"), ("cat02", "CAT02"), ("von-kries", "Von Kries")],
)
def test_the_matrix_is_the_published_adaptation_in_rec2020(light, ours, theirs):
    # Outside: colour-science's von Kries adaptation and ITU-R BT.2020 primaries.
    space = colour.RGB_COLOURSPACES["ITU-R BT.2020"]
    from_xyz, to_xyz = (np.array(colour.xy_to_XYZ(xy)) for xy in (light, D65_XY))
    adapt = colour.adaptation.matrix_chromatic_adaptation_VonKries(from_xyz, to_xyz, transform=theirs)
    expected = np.linalg.inv(space.matrix_RGB_to_XYZ) @ adapt @ space.matrix_RGB_to_XYZ
    found = correction_for(light, Header(), Recipe(adaptation=ours)).matrix
    np.testing.assert_allclose(found, expected, atol=2e-4)  # BT.2020 prints its matrix to four places


@pytest.mark.parametrize("cct_k", [2000, 3000, 4000, 4400, 5000, 6504, 9000])
def test_a_colour_temperature_names_the_reference_illuminant_of_cie_224(cct_k):
    # Outside: colour-science's CIE 2017 reference illuminant, integrated over its spectrum.
    observer = colour.MSDS_CMFS["CIE 1931 2 Degree Standard Observer"]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # it says that it aligns the mixed spectra
        spectrum = colour.quality.cfi2017.sd_reference_illuminant(cct_k, observer.shape)
    xyz = spectrum.values @ observer.values
    np.testing.assert_allclose(locus_white_xy(cct_k), xyz[:2] / xyz.sum(), atol=3e-4)


def test_the_shift_cancels_the_cast_on_the_trades_scales():
    # Illuminant A is 2856 K, 350 mired (CIE 15:2004); D65 is 154 mired. F2 is greener than D65 by far.
    warm = correction_for(INCANDESCENT, Header())
    assert warm.shift_mired == pytest.approx(1e6 / 6504 - 1e6 / 2856, abs=1.0)
    green = correction_for((0.3127, 0.3490), Header())
    assert green.shift_duv == pytest.approx(-0.0100, abs=0.0015)
    assert correction_for((0.70, 0.28), Header()).shift_mired is None


def test_a_neutral_as_decoded_becomes_neutral_and_keeps_its_luminance():
    for header in (Header(), AS_SHOT):
        correction = correction_for(INCANDESCENT, header)
        daylight = np.eye(3) if header.daylight_from_decoded is None else header.daylight_from_decoded
        grey = 0.18 * np.linalg.solve(daylight, linear_from_xy(INCANDESCENT))
        after = carried(grey, correction)
        np.testing.assert_allclose(after, after[1], rtol=1e-4)
        assert XYZ_FROM_REC2020[1] @ after == pytest.approx(XYZ_FROM_REC2020[1] @ grey, rel=1e-12)


@pytest.mark.parametrize("opponent", ["oklab", "ciecam16"])
@pytest.mark.parametrize(("keep_yb", "keep_gm"), [(0.3, 0.0), (0.0, 0.25), (0.2, 0.6)])
def test_the_kept_fraction_is_what_is_left_of_the_cast(opponent, keep_yb, keep_gm):
    recipe = Recipe(opponent=opponent, keep_yellow_blue=keep_yb, keep_green_magenta=keep_gm)
    light = (0.40, 0.405)
    correction = correction_for(light, Header(), recipe)
    cast, left = cast_from_xy(light, opponent), cast_from_xy(correction.toward_xy, opponent)
    np.testing.assert_allclose(left, np.array([keep_yb, keep_gm]) * cast, atol=1e-3 * np.abs(cast).max())


def test_keeping_everything_changes_nothing():
    recipe = Recipe(keep_yellow_blue=1.0, keep_green_magenta=1.0)
    np.testing.assert_allclose(correction_for(INCANDESCENT, Header(), recipe).matrix, np.eye(3), atol=1e-12)


def test_toward_a_colour_temperature_keeps_the_warmth_of_that_white():
    correction = correction_for(INCANDESCENT, Header(), Recipe(toward="5000"))
    after = carried(linear_from_xy(INCANDESCENT), correction)
    np.testing.assert_allclose(white_of(after), locus_white_xy(5000), atol=1e-6)
    assert correction_for(D65_XY, Header(), Recipe(toward="0.3127,0.3290")).toward_xy == D65_XY


@pytest.mark.parametrize(
    "toward", ["", "warm", "900", "40000", "-5000", "0.3", "0.6,0.6", "nan", "1,2,3", "inf"]
)
def test_an_aim_that_means_nothing_is_refused(toward):
    with pytest.raises(PresetError):
        aim_xy(toward)


def test_coloured_light_is_left_unless_told_otherwise():
    stage = (0.20, 0.12)
    left = correction_for(stage, AS_SHOT, flags=("coloured-light",))
    np.testing.assert_array_equal(left.matrix, np.eye(3))
    assert left.from_xy == left.toward_xy == stage
    corrected = correction_for(stage, AS_SHOT, Recipe(coloured_light="correct"), flags=("coloured-light",))
    assert not np.allclose(corrected.matrix, np.eye(3))


def test_nothing_measured_is_left_as_it_was():
    correction = correction_for(None, AS_SHOT)
    np.testing.assert_array_equal(correction.matrix, np.eye(3))
    assert correction.from_xy is None
    assert correction.shift_mired is None
    assert correction.reason


def test_a_fixed_correction_is_the_same_on_frames_with_another_balance():
    # The same patch, decoded with two camera balances, must come out alike up to exposure.
    fixed = Fixed(from_xy=INCANDESCENT, toward_xy=D65_XY, measured_on_body="A 1")
    patch = np.array([0.3, 0.2, 0.1])  # at the daylight setting
    outcomes = [
        carried(
            np.linalg.solve(d, patch), fixed_correction(fixed, Header(body="A 1", daylight_from_decoded=d))
        )
        for d in (np.eye(3), np.diag([2.0, 1.0, 0.7]))
    ]
    first, second = (x / x.sum() for x in outcomes)
    np.testing.assert_allclose(first, second, rtol=1e-10)
    assert fixed_correction(fixed, Header(body="A 1")).flags == ()
    assert fixed_correction(fixed, Header(body="B 2")).flags == ("other-body",)


def test_the_residual_is_what_the_own_measurement_still_shows():
    cast = Cast(AS_SHOT, white_xy=INCANDESCENT)
    own = residual(cast, correction_for(INCANDESCENT, AS_SHOT))
    np.testing.assert_allclose(own, 0.0, atol=1e-4)
    untouched = residual(Cast(Header(), white_xy=WINDOW), identity_correction(None, reason="left"))
    np.testing.assert_allclose(untouched, cast_from_xy(WINDOW), atol=1e-9)
    assert residual(Cast(Header()), identity_correction(None, reason="left")) is None


def test_how_far_a_correction_moved_is_the_angle_on_its_neutral():
    old, same = (correction_for(INCANDESCENT, AS_SHOT) for _ in range(2))
    assert correction_moved(old, same) == pytest.approx(0.0, abs=1e-9)
    moved = correction_moved(old, correction_for((0.4400, 0.4050), AS_SHOT))
    assert 0.1 < moved < 3.0
    stage = correction_for((0.2, 0.12), Header(), flags=("coloured-light",))
    assert correction_moved(stage, stage) == pytest.approx(0.0, abs=1e-9)


plausible = st.tuples(st.floats(0.27, 0.48), st.floats(-0.01, 0.01)).map(
    lambda t: (
        t[0],
        -3.0 * t[0] ** 2 + 2.870 * t[0] - 0.275 + t[1] if t[0] < 0.36 else 0.41 - 0.2 * (0.45 - t[0]) ** 2,
    )
)


@settings(max_examples=40, deadline=None)
@given(plausible, plausible)
def test_there_and_back_is_the_identity(first, second):
    there = correction_for(first, Header(), Recipe(toward=f"{first[0]},{first[1]}")).matrix
    np.testing.assert_allclose(there, np.eye(3), atol=1e-12)
    out = correction_for(first, Header(), Recipe(toward=f"{second[0]},{second[1]}")).matrix
    back = correction_for(second, Header(), Recipe(toward=f"{first[0]},{first[1]}")).matrix
    np.testing.assert_allclose(out @ back, np.eye(3), atol=1e-9)
