"""Outside checks: Sharma et al. 2005 and colour-science."""

import colour
import numpy as np
import pytest

from grader.colour.difference import delta_e_2000, grey_delta_e_2000
from grader.colour.white import D65_XY, planckian_xy


@pytest.mark.parametrize(
    ("lab1", "lab2", "expected"),
    [
        ((50.0, 2.6772, -79.7751), (50.0, 0.0, -82.7485), 2.0425),
        ((50.0, -1.3802, -84.2814), (50.0, 0.0, -82.7485), 1.0000),
        ((50.0, 0.0, 0.0), (50.0, -1.0, 2.0), 2.3669),
        ((50.0, 2.4900, -0.0010), (50.0, -2.4900, 0.0009), 7.1792),
        ((50.0, 2.4900, -0.0010), (50.0, -2.4900, 0.0011), 7.2195),
        ((50.0, -0.0010, 2.4900), (50.0, 0.0011, -2.4900), 4.7461),
        ((50.0, 2.5, 0.0), (73.0, 25.0, -18.0), 27.1492),
        ((60.2574, -34.0099, 36.2677), (60.4626, -34.1751, 39.4387), 1.2644),
        ((22.7233, 20.0904, -46.6940), (23.0331, 14.9730, -42.5619), 2.0373),
        ((2.0776, 0.0795, -1.1350), (0.9033, -0.0636, -0.5514), 0.9082),
    ],
)
def test_published_pairs(lab1, lab2, expected):
    """Rows of Sharma, Wu & Dalal 2005, table 1, chosen for its discontinuities; from memory."""
    assert float(delta_e_2000(lab1, lab2)) == pytest.approx(expected, abs=5e-5)
    assert float(delta_e_2000(lab2, lab1)) == pytest.approx(expected, abs=5e-5)


def test_agrees_with_colour_science():
    lab1, lab2 = np.random.default_rng(3).uniform((0, -60, -60), (100, 60, 60), (2, 1000, 3))
    reference = colour.difference.delta_E_CIE2000(lab1, lab2)
    np.testing.assert_allclose(delta_e_2000(lab1, lab2), reference, atol=1e-10)


def test_grey_under_a_cast():
    """Mid grey (L* = 50) under CIE A seen as if D65 were white; formula of colour-science."""
    xy = planckian_xy(2856)
    xyz = colour.xy_to_XYZ(xy) * float(colour.colorimetry.luminance_CIE1976(50) / 100)
    reference = colour.difference.delta_E_CIE2000(colour.XYZ_to_Lab(xyz, D65_XY), [50, 0, 0])
    assert grey_delta_e_2000(xy) == pytest.approx(float(reference), abs=1e-6)
    assert grey_delta_e_2000(D65_XY) == 0
