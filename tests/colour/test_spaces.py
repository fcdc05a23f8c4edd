"""Outside check: colour-science's primaries, matrices and adaptation."""

import colour
import numpy as np
import pytest

from grader.colour import spaces
from grader.errors import PresetError

REFERENCE = {
    "sRGB": "sRGB",
    "Display P3": "Display P3",
    "Rec.2020": "ITU-R BT.2020",
    "ROMM RGB": "ROMM RGB",
    "linear Rec.2020": "ITU-R BT.2020",
    "linear Rec.709": "ITU-R BT.709",
    "ACEScg": "ACEScg",
}


@pytest.mark.parametrize("name", REFERENCE)
def test_matrices_agree_with_colour_science(name):
    working, space = (
        colour.RGB_COLOURSPACES["ITU-R BT.2020"].copy(),
        colour.RGB_COLOURSPACES[REFERENCE[name]].copy(),
    )
    working.use_derived_transformation_matrices(True)
    space.use_derived_transformation_matrices(True)
    reference = colour.matrix_RGB_to_RGB(space, working, "Bradford")
    np.testing.assert_allclose(spaces.SPACES[name].rec2020_from_linear, reference, atol=1e-12)


def test_oprgb_matrix_is_the_standards():
    """IEC 61966-2-5:2007, equation of XYZ from linear opRGB, four digits; from memory."""
    xyz = spaces.XYZ_FROM_REC2020 @ spaces.SPACES["opRGB"].rec2020_from_linear
    standard = [[0.5767, 0.1856, 0.1882], [0.2973, 0.6274, 0.0753], [0.0270, 0.0707, 0.9911]]
    np.testing.assert_allclose(xyz, standard, atol=3e-4)


def test_working_light_is_the_standards():
    """ITU-R BT.2020-2, table 4: luminance 0.2627 R + 0.6780 G + 0.0593 B."""
    np.testing.assert_array_equal(spaces.XYZ_FROM_REC2020[1].round(4), (0.2627, 0.6780, 0.0593))
    np.testing.assert_allclose(spaces.XYZ_FROM_REC2020 @ spaces.REC2020_FROM_XYZ, np.eye(3), atol=1e-14)


@pytest.mark.parametrize("space", spaces.SPACES.values(), ids=lambda space: space.name)
def test_white_stays_white(space):
    np.testing.assert_allclose(space.rec2020_from_linear.sum(axis=1), 1, atol=1e-12)


@pytest.mark.parametrize(
    ("name", "found"),
    [
        ("srgb", "sRGB"),
        ("REC2020", "Rec.2020"),
        ("display-p3", "Display P3"),
        ("linear rec.2020", "linear Rec.2020"),
        ("linear sRGB", "linear Rec.709"),
        ("linear ROMM RGB", "linear ROMM RGB"),
        ("linear acescg", "ACEScg"),
    ],
)
def test_spaces_are_found_by_name(name, found):
    space = spaces.space_by_name(name)
    assert space.name == found
    assert ("linear" in name) == (space.curves[0].g == 1.0)


def test_unknown_space_is_refused_with_the_known_ones():
    with pytest.raises(PresetError, match=r"no colour space called 'foo'; choose one of sRGB, .*ACEScg"):
        spaces.space_by_name("foo")
