"""Small frames measure like whole ones: averages in linear light, clipped stays clipped."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import skimage.data
from PIL import Image

from grader import files
from grader.cast.proxy import build_proxy
from grader.colour.frames import frame_from_array
from grader.files.raster_reduce import cell_width, reduced


def srgb_light(encoded: np.ndarray) -> np.ndarray:
    """IEC 61966-2-1, in float64."""
    return np.where(encoded <= 0.04045, encoded / 12.92, ((encoded + 0.055) / 1.055) ** 2.4)


def cells(light: np.ndarray, width: int) -> np.ndarray:
    rows, columns = light.shape[0] // width, light.shape[1] // width
    whole = light[: rows * width, : columns * width]
    return whole.reshape(rows, width, columns, width, 3).mean(axis=(1, 3))


@pytest.mark.parametrize("dtype", [np.uint8, np.uint16, np.float32])
def test_cells_are_means_of_light(dtype: type) -> None:
    """Against a plain average of the published curve; a mean of encoded values would be off by some per cent."""
    rng = np.random.default_rng(2)
    encoded = rng.uniform(0.02, 0.98, (240, 400, 3))
    top = 1.0 if dtype is np.float32 else float(np.iinfo(dtype).max)
    stored = (encoded * top).astype(dtype) if dtype is np.float32 else np.round(encoded * top).astype(dtype)
    small = reduced(frame_from_array(stored, space="sRGB", linear=False, referred="display"), 100)
    width = cell_width(240, 400, 100)
    assert width == 4
    assert small.pixels.shape == (60, 100, 3)
    assert small.pixels.dtype == dtype
    expected = cells(srgb_light(stored / top), width)
    tolerance = 0.006 if dtype is np.uint8 else 3e-5
    assert np.abs(srgb_light(small.pixels / top) - expected).max() < tolerance
    assert np.abs((srgb_light(small.pixels / top) - expected).mean(axis=(0, 1))).max() < tolerance / 50


def test_clipped_cells_stay_clipped_and_empty_ones_empty() -> None:
    stored = np.full((300, 600, 3), 100, np.uint8)
    stored[:, :150] = 255
    stored[:, 150:300] = 0
    stored[::5, 300:450] = 255  # a fifth clipped: the rest is averaged
    small = reduced(frame_from_array(stored, space="sRGB", linear=False, referred="display"), 60).pixels
    assert small.shape == (30, 60, 3)
    assert (small[:, :15] == 255).all()
    assert (small[:, 15:30] == 0).all()
    assert (small[:, 30:] == 100).all()


def test_floats_that_share_the_largest_value_are_clipped() -> None:
    light = np.full((100, 200, 3), 0.25, np.float32)
    light[:, :40] = 1.5
    light[:, 40:80] = np.nan
    small = reduced(frame_from_array(light, space="Rec.2020", linear=True), 50).pixels
    np.testing.assert_array_equal(small[:, :10], 1.5)
    np.testing.assert_array_equal(small[:, 10:20], 0)
    np.testing.assert_allclose(small[:, 20:], 0.25, rtol=1e-6)


def test_a_small_frame_is_left_alone() -> None:
    frame = frame_from_array(np.zeros((40, 60, 3), np.uint8))
    assert reduced(frame, 60) is frame


def test_alpha_goes_along() -> None:
    frame = frame_from_array(np.full((101, 203, 3), 9, np.uint8))
    small = reduced(replace(frame, alpha=np.full((101, 203), 77, np.uint8)), 50)
    assert small.alpha.shape == small.pixels.shape[:2]
    assert (small.alpha == 77).all()


@pytest.mark.parametrize(
    ("name", "suffix"),
    [("astronaut", ".tif"), ("coffee", ".tif"), ("chelsea", ".jpg"), ("rocket", ".jpg"), ("coffee", ".png")],
)
def test_the_proxy_of_a_small_frame_is_that_of_the_whole(name: str, suffix: str, tmp_path: Path) -> None:
    """Photographs packaged by scikit-image, enlarged to a camera's size, with noise."""
    photo = Image.fromarray(getattr(skimage.data, name)())
    photo = photo.resize((1500, 1500 * photo.height // photo.width), Image.Resampling.BICUBIC)
    noise = np.random.default_rng(6).normal(0, 3, (photo.height, photo.width, 3))
    pixels = np.clip(np.asarray(photo) + noise, 0, 255).astype(np.uint8)
    Image.fromarray(pixels).save(tmp_path / f"photo{suffix}", quality=92)
    whole = build_proxy(files.read(tmp_path / f"photo{suffix}"))
    small = build_proxy(files.read_reduced(tmp_path / f"photo{suffix}"))
    assert small.linear.shape == whole.linear.shape
    used = (whole.usable > 0.9) & (small.usable > 0.9)
    assert used.mean() > 0.6
    ratio = small.linear[used].astype(float).mean(axis=0) / whole.linear[used].astype(float).mean(axis=0)
    np.testing.assert_allclose(ratio, 1, atol=2e-3)
    assert small.clipped_fraction == pytest.approx(whole.clipped_fraction, abs=0.02)
    assert small.header.width_px == 1500
    assert small.header.sha256 == whole.header.sha256
