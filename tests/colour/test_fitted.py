"""Curves in the forms of the fast loops.  Outside check: colour-science's transfer functions."""

import colour
import numpy as np
import pytest

from grader.colour import fitted, tone
from grader.colour.spaces import SPACES
from grader.colour.transfer import encode
from grader.model import Curve

RAMP = np.linspace(0, 1, 65536)
THEIRS = {  # name: decode, encode, tolerance in 16-bit steps
    "sRGB": (colour.models.eotf_sRGB, colour.models.eotf_inverse_sRGB, 0.08),
    "ROMM RGB": (colour.models.cctf_decoding_ROMMRGB, colour.models.cctf_encoding_ROMMRGB, 0.05),
    "Rec.2020": (
        lambda v: colour.models.oetf_inverse_BT2020(v, True),
        lambda v: colour.models.oetf_BT2020(v, True),
        7,  # theirs has the standard's 12-bit roundings
    ),
}


def curves(name):
    return SPACES[name].curves


def rational(form, values, root=lambda v: v):
    polyval = np.polynomial.polynomial.polyval
    upper, lower = np.array(form.upper, np.float64), np.array((1, *form.lower), np.float64)
    above = polyval(root(values), upper) / polyval(root(values), lower)
    return np.where(values < form.toe, form.slope * values, above)


def through_table(form, values, channel=0):
    """Interpolate as the loops do, by the places that `octave_steps` gives."""
    table = form.table[min(channel, len(form.table) - 1)].astype(np.float64)
    last = fitted.HIGHEST_OCTAVE if len(table) > 62 << form.octave_bits else 0
    places = fitted.octave_steps(form.first_octave, last, form.octave_bits)
    return np.copysign(np.interp(np.abs(values), places, table), values)


@pytest.mark.parametrize("name", list(THEIRS))
def test_ratios_meet_the_published_curves(name):
    decode_theirs, encode_theirs, tolerance = THEIRS[name]
    decoder = fitted.decoder(curves(name), 65536)
    encoder = fitted.encoder(curves(name))
    assert decoder.kind == encoder.kind == fitted.RATIONAL
    linear = rational(decoder, RAMP)
    steps = np.abs(encode_theirs(linear) - RAMP) * 65535
    assert steps.max() < tolerance
    encoded = rational(encoder, decode_theirs(RAMP), np.sqrt)
    assert np.abs(encoded - RAMP).max() * 65535 < tolerance


def test_a_pure_gamma_and_a_sampled_curve_go_through_tables():
    sampled = Curve(samples=np.linspace(0, 1, 1024) ** 1.9)
    for three in (curves("opRGB"), (sampled, sampled, sampled)):
        assert fitted.decoder(three, 65536).kind == fitted.TABLE
        encoder = fitted.encoder(three)
        assert encoder.kind == fitted.TABLE
        linear = RAMP**2.2
        error = np.abs(through_table(encoder, linear) - encode(three[0], linear))
        assert error.max() * 65535 < 0.05


def test_three_different_curves_keep_their_places():
    three = tuple(Curve(g=g) for g in (1.8, 2.0, 2.2))
    decoder = fitted.decoder(three, 256)
    assert decoder.table.shape == (3, 256)
    np.testing.assert_allclose(decoder.table[:, 128], (128 / 255) ** np.array([1.8, 2.0, 2.2]), rtol=1e-6)


def test_one_curve_is_tabulated_once():
    assert fitted.decoder(curves("opRGB"), 256).table.shape == (1, 256)
    assert fitted.decoder(curves("opRGB"), 256) is fitted.decoder(curves("opRGB"), 256)


@pytest.mark.parametrize("name", ["linear Rec.2020", "ACEScg"])
def test_straight_curves_cost_nothing(name):
    assert fitted.decoder(curves(name), 65536).kind == fitted.LINEAR
    assert fitted.encoder(curves(name)).kind == fitted.LINEAR
    straight = Curve(samples=np.array([0.0, 1.0]))
    assert fitted.decoder((straight,) * 3, 256).kind == fitted.LINEAR


def test_floats_have_tables_far_beyond_white_in_both_ways():
    decoder = fitted.decoder(curves("sRGB"), 0)
    encoder = fitted.encoder(curves("sRGB"), floating=True)
    values = np.array([-2.0, -0.3, 0.0, 1e-6, 0.002, 0.5, 1.0, 7.0, 900.0])
    there = through_table(decoder, values)
    np.testing.assert_allclose(through_table(encoder, there), values, rtol=2e-6, atol=1e-9)
    inside = values[3:7]
    np.testing.assert_allclose(through_table(decoder, inside), colour.models.eotf_sRGB(inside), rtol=1e-6)


def test_the_tone_curve_is_folded_in():
    encoder = fitted.encoder(curves("sRGB"), toned=True)
    scene = np.array([0.0, 0.001, tone.GREY_SCENE, 0.5, 1.0])
    wanted = encode(curves("sRGB")[0], tone.apply(scene))
    np.testing.assert_allclose(through_table(encoder, scene), wanted, atol=1e-6)


def test_curves_are_compared_by_value():
    samples = np.linspace(0, 1, 9) ** 2
    first = tuple(Curve(samples=samples.copy()) for _ in range(3))
    second = tuple(Curve(samples=samples.copy()) for _ in range(3))
    assert fitted.same_curves(first, second)
    assert not fitted.same_curves(first, curves("sRGB"))


@pytest.mark.parametrize(
    "curve",
    [
        Curve(g=2.4, a=0.9, b=0.1, c=0.08, d=0.05, f=0.01),  # a toe that misses zero
        Curve(g=2.4, a=1, b=0, c=0.5, d=0.3),  # a jump
        Curve(g=2.2, a=1.1, b=-0.1, c=0, d=0.1 / 1.1),  # flat below
    ],
)
def test_odd_curves_are_left_to_tables(curve):
    assert fitted.decoder((curve,) * 3, 256).kind == fitted.TABLE
    assert fitted.encoder((curve,) * 3).kind == fitted.TABLE
