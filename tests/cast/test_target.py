"""The grey row of a 24-patch target, rendered from published reflectances."""

from __future__ import annotations

import colour
import numpy as np
import pytest
from skimage import transform

from grader.cast import target
from grader.cast.patch import angles_deg, direction
from grader.colour.white import D65_XY
from grader.errors import PresetError, TooFewUsablePixels
from grader.model import Frame

CMFS = colour.MSDS_CMFS["CIE 1931 2 Degree Standard Observer"]
REFLECTANCES = colour.SDS_COLOURCHECKERS["ISO 17321-1"]
SIZE = (240, 360)
CORNERS = [(0, 0), (360, 0), (360, 240), (0, 240)]


def _chart(illuminant="D65", *, flare=0.0, level=0.9):
    """The chart of ISO 17321-1 under a CIE illuminant, float linear Rec.709: (frame, the light's xy)."""
    shape = colour.SpectralShape(400, 700, 5)
    observer = CMFS.copy().align(shape).values
    light = colour.SDS_ILLUMINANTS[illuminant].copy().align(shape).values[:, None] * observer
    white = light.sum(axis=0)
    reflected = np.array([sd.copy().align(shape).values for sd in REFLECTANCES.values()])
    xyz = (reflected @ light / white[1]).reshape(4, 6, 3) * level + flare
    linear = xyz @ np.linalg.inv(colour.RGB_COLOURSPACES["sRGB"].matrix_RGB_to_XYZ).T
    picture = np.zeros((*SIZE, 3))
    for row in range(4):
        for column in range(6):
            picture[row * 60 + 6 : row * 60 + 54, column * 60 + 6 : column * 60 + 54] = linear[row, column]
    return picture, tuple(colour.XYZ_to_xy(white))


def _frame(picture):
    return Frame.from_array(picture.astype(np.float32), linear=True)


def _apart_deg(first, second):
    return float(angles_deg(direction(first)[None], direction(second))[0])


def test_grey_row_is_the_published_average():
    """Averages of 30 targets, from colour-science, adapted D50 to D65 by its Bradford."""
    average = colour.CCS_COLOURCHECKERS["BabelColor Average"]
    adapt = colour.adaptation.matrix_chromatic_adaptation_VonKries(
        colour.xy_to_XYZ(average.illuminant), colour.xy_to_XYZ(D65_XY), transform="Bradford"
    )
    greys = np.array([colour.xyY_to_XYZ(xyy) for xyy in list(average.data.values())[-6:]])
    expected = greys @ adapt.T @ np.linalg.inv(colour.RGB_COLOURSPACES["ITU-R BT.2020"].matrix_RGB_to_XYZ).T
    assert np.array([linear for _, linear in target.GREY_ROW]) == pytest.approx(expected, abs=2e-4)


@pytest.mark.parametrize("illuminant", ["A", "D50", "D65", "D75", "FL2", "FL11"])
def test_light_of_the_target_is_the_illuminant(illuminant):
    """Reflectances of ISO 17321-1 under CIE illuminants, all from colour-science."""
    picture, xy = _chart(illuminant)
    sample = target.sample_target(_frame(picture), CORNERS)
    assert _apart_deg(sample.light_xy, xy) < 0.6
    assert sample.by == "target"
    assert sample.box_px == (0, 0, 360, 240)
    assert 0.2 < sample.doubt_deg < 1.0


def test_a_target_seen_aslant_turned_and_mirrored():
    picture, xy = _chart("A")
    corners = np.array([(460.0, 90.0), (420.0, 330.0), (100.0, 300.0), (60.0, 40.0)])
    for places in (corners, np.roll(corners, 2, axis=0), corners * (-1, 1) + (520, 0)):
        warp = transform.estimate_transform("projective", np.array(CORNERS, float), places)
        seen = transform.warp(picture, warp.inverse, output_shape=(380, 520), cval=0.1, order=1)
        sample = target.sample_target(_frame(seen), places)
        assert _apart_deg(sample.light_xy, xy) < 0.6


def test_corners_off_by_a_little_do_no_harm():
    picture, xy = _chart("D50")
    sample = target.sample_target(_frame(picture), [(6, 5), (354, 8), (352, 236), (7, 233)])
    assert _apart_deg(sample.light_xy, xy) < 0.6


def test_a_clipped_white_is_no_hindrance():
    picture, xy = _chart("D65", level=1.6)
    sample = target.sample_target(_frame(np.minimum(picture, 1.0)), CORNERS)
    assert _apart_deg(sample.light_xy, xy) < 0.6


@pytest.mark.parametrize("turn", [1, 2, 3])
def test_corners_in_another_order_are_refused(turn):
    picture, _ = _chart()
    with pytest.raises(PresetError, match=r"grey row|textured|several colours|coloured"):
        target.sample_target(_frame(picture), CORNERS[turn:] + CORNERS[:turn])


@pytest.mark.parametrize(
    ("corners", "words"),
    [
        ([(0, 0), (360, 240), (360, 0), (0, 240)], "cross or lie on a line"),
        ([(0, 0), (10, 0), (20, 0), (30, 0)], "cross or lie on a line"),
        ([(0, 0)] * 4, "cross or lie on a line"),
        ([(0, 0), (400, 0), (360, 240), (0, 240)], "not inside the frame"),
        ([(0, 0), (360, 0), (360, -1), (0, 240)], "not inside the frame"),
        ([(0, 0), (360, 0), (360, 240)], "four corners"),
        ([(0, 0), (360, 0), (float("nan"), 240), (0, 240)], "four corners"),
    ],
)
def test_corners_that_make_no_field_are_refused(corners, words):
    with pytest.raises(PresetError, match=words):
        target.sample_target(_frame(_chart()[0]), corners)


def test_clipped_small_and_flared_targets_are_refused():
    picture, _ = _chart()
    with pytest.raises(TooFewUsablePixels, match="neutral 8 is clipped"):
        target.sample_target(_frame(np.minimum(picture * 3, 1.0)), CORNERS)
    with pytest.raises(TooFewUsablePixels, match="pixels"):
        target.sample_target(_frame(picture), [(0, 0), (36, 0), (36, 24), (0, 24)])
    flare, _ = _chart(flare=np.array([0.25, 0.2, 0.02]))
    with pytest.raises(PresetError, match=r"disagree by|coloured"):
        target.sample_target(_frame(flare), CORNERS)
