"""The raw tone curve: its fixed points by ISO 12232 and IEC 61966-2-1, its shape, its page."""

import re
from pathlib import Path

import colour
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from grader.colour import tone
from grader.colour.spaces import ROMM_CURVE, SRGB_CURVE
from grader.colour.transfer import encode

PAGE = Path(__file__).parents[2] / "docs" / "TONE.md"


def test_a_metered_grey_lands_at_118_in_srgb():
    """ISO 12232: 18 % lies at 0.18 / sqrt 2 of saturation, and belongs at 461/1000 of the sRGB maximum."""
    shown = colour.cctf_encoding(tone.apply(0.18 / np.sqrt(2)), function="sRGB")
    assert shown == pytest.approx(0.461, abs=1e-3)
    assert round(float(shown) * 255) == 118


def test_black_and_white_stay():
    np.testing.assert_array_equal(tone.apply([0.0, 1.0]), [0.0, 1.0])
    np.testing.assert_array_equal(tone.inverse([0.0, 1.0]), [0.0, 1.0])


@given(st.floats(1e-9, 50.0))
def test_the_inverse_undoes_it(x):
    assert tone.inverse(tone.apply(x)) == pytest.approx(x, rel=1e-9)
    assert tone.apply(-x) == -tone.apply(x)


def test_it_rises_everywhere_with_a_soft_shoulder():
    x = np.geomspace(1e-6, 1.0, 4000)
    slope = np.gradient(np.log(tone.apply(x)), np.log(x))
    assert np.all(np.diff(tone.apply(x)) > 0)
    assert np.all(np.diff(slope) < 1e-9)  # firm in the shadows, ever softer towards white
    assert slope[-2] == pytest.approx(0.47, abs=0.01)
    assert np.interp(np.log(tone.GREY_SCENE), np.log(x), slope) == pytest.approx(1.11, abs=0.01)


@pytest.mark.parametrize("curve", [SRGB_CURVE, ROMM_CURVE], ids=["sRGB", "ROMM"])
def test_shadows_keep_their_sixteen_bit_steps(curve):
    codes = np.arange(0, 2048) / 65_535
    written = np.rint(encode(curve, tone.apply(codes)) * 65_535)
    assert len(np.unique(written)) == len(codes)


def test_what_is_no_number_stays_no_number():
    assert np.isnan(tone.apply(np.nan))
    assert np.isfinite(tone.apply([1e300, np.inf])).all()


def test_the_page_says_what_the_code_does():
    text = PAGE.read_text(encoding="utf-8")
    rows = [
        re.findall(r"[\d.]+", line.split("|", 2)[2]) for line in text.splitlines() if line.startswith("| ")
    ]
    x, y, level = (np.array([float(v) for v in row[-9:]]) for row in rows)
    x[3] = tone.GREY_SCENE
    np.testing.assert_allclose(tone.apply(x), y, atol=6e-5)
    np.testing.assert_array_equal(np.rint(255 * encode(SRGB_CURVE, tone.apply(x))), level)
    assert f"s = {tone._S:.4f}" in text
    white, black = np.rint(255 * encode(SRGB_CURVE, tone.apply(np.array([0.9, 0.03]) / np.sqrt(2))))
    assert f"{white:.0f} of 255, black cloth of 3 % at {black:.0f}" in text
