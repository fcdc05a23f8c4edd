"""Grey cards pasted into photographs that scikit-image and scikit-learn package."""

from __future__ import annotations

import numpy as np
import pytest
from skimage import data
from sklearn.datasets import load_sample_image

from grader.cast.card import find_grey_card, mark_box
from grader.cast.patch import angles_deg, direction
from grader.cast.proxy import build_proxy
from grader.colour.spaces import SRGB_CURVE, space_by_name
from grader.colour.transfer import decode, encode
from grader.colour.white import linear_from_xy, xy_from_cct_duv
from grader.errors import PresetError, TooFewUsablePixels
from grader.model import Frame

PHOTOGRAPHS = {
    "astronaut": data.astronaut,
    "coffee": data.coffee,
    "cat": data.chelsea,
    "rocket": data.rocket,
    "palace": lambda: load_sample_image("china.jpg"),
    "dahlia": lambda: load_sample_image("flower.jpg"),
}


def _relit(picture, light_xy, cards=()):
    """A photograph with cards (centre, half size, angle, reflectance) under another light, sRGB 8-bit."""
    linear = decode(SRGB_CURVE, picture[..., :3] / 255.0)
    height, width = linear.shape[:2]
    ys, xs = np.mgrid[:height, :width]
    for (x, y), (half_width, half_height), angle, reflectance in cards:
        along = (xs - x) * np.cos(angle) + (ys - y) * np.sin(angle)
        across = (ys - y) * np.cos(angle) - (xs - x) * np.sin(angle)
        inside = (np.abs(along) < half_width) & (np.abs(across) < half_height)
        linear = np.where(
            inside[..., None], np.asarray(reflectance) * (1 + 0.05 * along / half_width)[..., None], linear
        )
    matrix = space_by_name("sRGB").rec2020_from_linear
    light = linear_from_xy(light_xy)
    lit = ((linear @ matrix.T) * light / light.max()) @ np.linalg.inv(matrix).T
    lit += np.random.default_rng(5).normal(0, 0.004, lit.shape) * np.sqrt(np.maximum(lit, 0) + 0.02)
    return Frame.from_array(np.rint(encode(SRGB_CURVE, np.clip(lit, 0, 1)) * 255).astype(np.uint8))


@pytest.mark.parametrize("name", PHOTOGRAPHS)
def test_no_card_is_found_where_there_is_none(name):
    with pytest.raises(PresetError, match="no grey card was found"):
        find_grey_card(Frame.from_array(np.ascontiguousarray(PHOTOGRAPHS[name]()[..., :3])))


@pytest.mark.parametrize("name", ["coffee", "cat", "dahlia"])
@pytest.mark.parametrize(("cct_k", "angle"), [(4000.0, 0.3), (7500.0, -0.2)])
def test_a_card_is_found_and_shows_the_light(name, cct_k, angle):
    picture = PHOTOGRAPHS[name]()
    height, width = picture.shape[:2]
    x, y, half = 0.4 * width, 0.55 * height, 0.12 * height
    light = tuple(xy_from_cct_duv(cct_k, 0.004))
    frame = _relit(picture, light, [((x, y), (1.4 * half, half), angle, 0.2)])
    found = find_grey_card(frame)
    left, top, box_width, box_height = found.box_px
    assert abs(left + box_width / 2 - x) < half
    assert abs(top + box_height / 2 - y) < half
    assert float(angles_deg(direction(found.sample.light_xy)[None], direction(light))[0]) < 0.7
    assert found.sample.by == "grey-card"
    assert found.picture.dtype == np.uint8
    assert found.picture.shape[2] == 3


def test_two_cards_under_one_light_agree_and_the_larger_is_taken():
    frame = _relit(
        data.coffee(),
        tuple(xy_from_cct_duv(5000.0, 0.0)),
        [((150, 200), (50, 40), 0.0, 0.2), ((450, 200), (60, 50), 0.0, 0.6)],
    )
    assert find_grey_card(frame).box_px[0] > 300


def test_two_different_cards_are_too_many():
    frame = _relit(
        data.coffee(),
        tuple(xy_from_cct_duv(5500.0, 0.0)),
        [((150, 200), (60, 45), 0.0, (0.30, 0.27, 0.22)), ((450, 200), (60, 45), 0.0, (0.24, 0.25, 0.28))],
    )
    with pytest.raises(PresetError, match=r"several areas could be the grey card \(\d+,"):
        find_grey_card(frame)


def test_a_wall_a_disc_and_a_red_sheet_are_no_cards():
    light = tuple(xy_from_cct_duv(6000.0, 0.0))
    wall = _relit(data.coffee(), light, [((0, 200), (250, 500), 0.0, 0.3)])
    red = _relit(data.coffee(), light, [((300, 200), (80, 60), 0.0, (0.3, 0.05, 0.05))])
    disc = data.coffee().copy()
    ys, xs = np.mgrid[: disc.shape[0], : disc.shape[1]]
    disc[np.hypot(xs - 300, ys - 200) < 70] = 120
    for frame in (wall, red, Frame.from_array(disc)):
        with pytest.raises(PresetError, match="no grey card"):
            find_grey_card(frame)


def test_frames_with_nothing_in_them():
    for pixels in (np.zeros((50, 50, 3), np.uint8), np.full((50, 50, 3), 255, np.uint8)):
        with pytest.raises(TooFewUsablePixels):
            find_grey_card(Frame.from_array(pixels))
    with pytest.raises((PresetError, TooFewUsablePixels)):
        find_grey_card(Frame.from_array(np.full((50, 50, 3), 120, np.uint8)))


def test_box_is_drawn_where_it_was_measured():
    frame = Frame.from_array(np.full((200, 300, 3), 100, np.uint8))
    picture = mark_box(build_proxy(frame), (100, 50, 40, 30))
    assert (picture[49, 100:140] == 255).all()
    assert (picture[80, 100:140] == 255).all()
    assert (picture[50:80, 99] == 255).all()
    assert (picture[48, 100:140] == 0).all()
    assert len(np.unique(picture[51:79, 101:139])) == 1
    assert mark_box(build_proxy(frame), (0, 0, 300, 200)).shape == (200, 300, 3)
