"""The proxy against plain numpy, scikit-image's block averages, and its own laws."""

from dataclasses import replace

import numpy as np
import pytest
from skimage.measure import block_reduce

from grader.cast.proxy import build_proxy, cell_width
from grader.colour.spaces import space_by_name
from grader.colour.transfer import decode
from grader.errors import TooFewUsablePixels
from grader.model import Frame

RNG = np.random.default_rng(5)


def frame(pixels, **facts):
    facts = {"space": "Rec.2020", "linear": True, "referred": "scene"} | facts
    return Frame.from_array(pixels, **facts)


@pytest.mark.parametrize(
    ("shape", "cells"), [((7, 5), (7, 5)), ((800, 1200), (400, 600)), ((1, 65_535), (1, 596))]
)
def test_size(shape, cells):
    assert build_proxy(frame(np.full((*shape, 3), 0.2, np.float32))).usable.shape == cells


def test_cells_are_the_means_that_scikit_image_finds():
    pixels = RNG.uniform(0.1, 0.8, (1200, 1800, 3)).astype(np.float32)
    expected = block_reduce(pixels.astype(np.float64), (3, 3, 1), np.mean)
    np.testing.assert_allclose(build_proxy(frame(pixels)).linear, expected, rtol=1e-6)


@pytest.mark.parametrize("dtype", [np.uint8, np.uint16])
def test_integers_are_averaged_in_linear_light(dtype):
    top = np.iinfo(dtype).max
    pixels = RNG.integers(top // 4, top // 2, (800, 1200, 3)).astype(dtype)
    linear = np.stack(
        [decode(c, pixels[..., i] / top) for i, c in enumerate(space_by_name("sRGB").curves)], axis=-1
    )
    expected = block_reduce(linear, (2, 2, 1), np.mean) @ space_by_name("sRGB").rec2020_from_linear.T
    found = build_proxy(frame(pixels, space="sRGB", linear=False)).linear
    np.testing.assert_allclose(found, expected, rtol=2e-5)


def test_clipped_dark_and_empty_pixels_are_left_out():
    pixels = np.full((400, 600, 3), 20_000, np.uint16)
    pixels[:100] = 65_535
    pixels[100:150] = 0
    pixels[150:160] = 3
    proxy = build_proxy(frame(pixels))
    assert (proxy.clipped_fraction, proxy.empty_fraction, proxy.dark_fraction) == (0.25, 0.125, 0.025)
    assert proxy.usable.mean() == pytest.approx(0.6)
    np.testing.assert_allclose(proxy.linear[proxy.usable > 0], 20_000 / 65_535, rtol=1e-6)


def test_a_cell_averages_only_what_is_usable():
    pixels = np.full((800, 1200, 3), 30_000, np.uint16)
    pixels[::2, ::2] = 65_535
    proxy = build_proxy(frame(pixels))
    np.testing.assert_allclose(proxy.usable, 0.75)
    np.testing.assert_allclose(proxy.linear, 30_000 / 65_535, rtol=1e-6)


def test_floats_above_one_stay_and_a_shared_maximum_is_clipping():
    open_ended = RNG.uniform(0.5, 4.0, (60, 60, 3)).astype(np.float32)
    assert build_proxy(frame(open_ended)).clipped_fraction == 0.0
    assert build_proxy(frame(np.minimum(open_ended, 2.0))).clipped_fraction > 0.5


def test_what_is_not_a_number_is_empty():
    pixels = np.full((40, 40, 3), 0.5, np.float32)
    pixels += RNG.uniform(0, 0.01, pixels.shape).astype(np.float32)
    pixels[:10], pixels[10:20, :, 1] = np.nan, np.inf
    proxy = build_proxy(frame(pixels))
    assert proxy.empty_fraction == 0.5
    assert np.isfinite(proxy.linear).all()


def test_the_light_is_stated_at_the_daylight_setting():
    matrix = np.array([[1.5, 0.1, 0.0], [0.0, 1.0, 0.0], [0.0, 0.05, 0.6]])
    pixels = np.full((20, 20, 3), 0.25, np.float32)
    pixels[0, 0] = 0.26
    proxy = build_proxy(frame(pixels, daylight_from_decoded=matrix))
    np.testing.assert_allclose(proxy.linear[5, 5], matrix @ [0.25, 0.25, 0.25], rtol=1e-6)


def test_many_pixels_sum_without_loss():
    pixels = np.full((3000, 4500, 3), 1000, np.uint16)
    pixels[..., 2] = 1001
    proxy = build_proxy(frame(pixels))
    np.testing.assert_allclose(proxy.linear[..., 2] / proxy.linear[..., 0], 1.001, rtol=1e-6)


@pytest.mark.parametrize("shape", [(1, 65_535), (4000, 300), (1000, 1501), (450, 999)])
def test_floats_and_integers_give_cells_of_one_size(shape):
    levels = RNG.integers(20_000, 21_000, (*shape, 3)).astype(np.uint16)
    whole, floating = build_proxy(frame(levels)), build_proxy(frame((levels / 65_535).astype(np.float32)))
    assert whole.usable.shape == floating.usable.shape
    np.testing.assert_allclose(whole.linear.mean((0, 1)), floating.linear.mean((0, 1)), rtol=0.003)


def test_no_pixel_at_all():
    whole = frame(np.zeros((5, 5, 3), np.float32))
    with pytest.raises(TooFewUsablePixels):
        build_proxy(replace(whole, pixels=whole.pixels[:0]))


def test_cell_width_never_enlarges():
    assert cell_width(1, 1) == 1
    assert cell_width(400, 600) == 1
    assert cell_width(401, 600) == 2
