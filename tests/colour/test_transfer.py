"""Outside check: colour-science's transfer functions."""

import colour
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from grader.colour import spaces
from grader.colour.transfer import decode, decode_table, encode
from grader.model import Curve

RAMP = np.linspace(0, 1, 4097)
CURVES = {name: space.curves[0] for name, space in spaces.SPACES.items()}
SAMPLED = Curve(samples=np.linspace(0, 1, 1024) ** 1.9)


def test_srgb_agrees_with_colour_science():
    """IEC 61966-2-1:1999."""
    np.testing.assert_allclose(decode(CURVES["sRGB"], RAMP), colour.models.eotf_sRGB(RAMP), atol=1e-12)
    np.testing.assert_allclose(encode(CURVES["sRGB"], RAMP), colour.models.eotf_inverse_sRGB(RAMP), atol=1e-6)


@pytest.mark.parametrize(("twelve_bit", "within"), [(False, 4e-4), (True, 1e-4)])
def test_rec2020_agrees_with_both_published_roundings(twelve_bit, within):
    """ITU-R BT.2020-2, table 4; ours is the exact solution that both round."""
    reference = colour.models.oetf_BT2020(RAMP, twelve_bit)
    np.testing.assert_allclose(encode(CURVES["Rec.2020"], RAMP), reference, atol=within)


def test_romm_agrees_with_colour_science():
    """ISO 22028-2:2013."""
    np.testing.assert_allclose(
        decode(CURVES["ROMM RGB"], RAMP), colour.models.cctf_decoding_ROMMRGB(RAMP), atol=1e-12
    )


def test_oprgb_is_its_gamma():
    """IEC 61966-2-5:2007: 563/256 = 2.19921875."""
    np.testing.assert_allclose(decode(CURVES["opRGB"], RAMP), RAMP**2.19921875, atol=1e-14)


@pytest.mark.parametrize("name", ["linear Rec.2020", "linear Rec.709", "ACEScg"])
def test_linear_spaces_have_no_curve(name):
    np.testing.assert_array_equal(decode(CURVES[name], RAMP), RAMP)


@given(st.sampled_from([*CURVES.values(), SAMPLED]), st.floats(-4, 4))
def test_curves_round_trip(curve, value):
    assert float(decode(curve, encode(curve, value))) == pytest.approx(value, abs=1e-9)
    assert float(encode(curve, decode(curve, value))) == pytest.approx(value, abs=1e-6)


@pytest.mark.parametrize("name", CURVES)
def test_curves_rise_and_are_odd(name):
    ramp = np.linspace(0, 2, 2001)
    assert (np.diff(decode(CURVES[name], ramp)) > 0).all()
    np.testing.assert_array_equal(decode(CURVES[name], -ramp), -decode(CURVES[name], ramp))


def test_flat_sampled_curve_is_inverted_without_complaint():
    curve = Curve(samples=np.array([0.0, 0.0, 0.5, 0.5, 1.0]))
    np.testing.assert_allclose(encode(curve, [0.0, 0.25, 0.5, 1.0]), [0.0, 0.25, 0.5, 1.0])
    assert encode(Curve(samples=np.array([0.5, 0.5])), 0.7) == 0.0


def test_table_spans_every_code_value():
    table = decode_table(CURVES["sRGB"], 65536)
    assert table.dtype == np.float32
    assert table[0] == 0
    assert table[-1] == 1
    assert table[32768] == pytest.approx(colour.models.eotf_sRGB(32768 / 65535), rel=1e-6)
