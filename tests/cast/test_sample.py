"""Light sampled on patches, over frames, and from whole frames."""

from __future__ import annotations

import io
import math

import colour
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from PIL import Image, ImageOps

from grader.cast.box import parse_box, pixels_of_box, stored_box
from grader.cast.correction import corrected_xy, fixed_correction
from grader.cast.patch import PatchLimits, PatchSample, angles_deg, direction
from grader.cast.sample import fixed_from_sample, robust_mean, sample_hero, sample_patch
from grader.colour.white import D65_XY, linear_from_xy
from grader.errors import PresetError, TooFewUsablePixels
from grader.model import Cast, Frame, Header, Recipe

ILLUMINANTS = colour.CCS_ILLUMINANTS["CIE 1931 2 Degree Standard Observer"]


def _apart_deg(first, second):
    return float(angles_deg(direction(first)[None], direction(second))[0])


def _frame(encoded, height=60, width=80, noise=0.0, **facts):
    """A frame of one colour with noise."""
    pixels = np.broadcast_to(np.asarray(encoded, float), (height, width, 3)).copy()
    if noise:
        pixels += np.random.default_rng(7).normal(0.0, noise, pixels.shape)
    return Frame.from_array(np.rint(np.clip(pixels, 0, 1) * 65535).astype(np.uint16), **facts)


def _grey_under(xy, level=0.3):
    """What colour-science makes of a grey under a light, as encoded sRGB."""
    light = colour.xy_to_XYZ(xy) * level
    linear = colour.XYZ_to_RGB(light, "sRGB")
    return colour.models.eotf_inverse_sRGB(linear)


# --- a patch


@pytest.mark.parametrize("name", ["A", "D50", "D75", "FL2", "FL11", "LED-B3", "E"])
def test_patch_shows_the_light_it_was_rendered_under(name):
    """CIE illuminants and the sRGB encoding from colour-science."""
    xy = ILLUMINANTS[name]
    sample = sample_patch(_frame(_grey_under(xy)), (20, 20, 30, 30))
    assert sample.light_xy == pytest.approx(tuple(xy), abs=3e-4)
    assert sample.luminance == pytest.approx(0.3, abs=1e-3)
    assert sample.n == 900
    assert sample.texture < 1e-6
    assert sample.doubt_deg == pytest.approx(0.5, abs=0.01)


@pytest.mark.parametrize("dtype", [np.uint8, np.uint16, np.float32])
def test_every_depth_gives_the_same_light(dtype):
    encoded = _grey_under(ILLUMINANTS["D50"])
    top = 1.0 if dtype is np.float32 else np.iinfo(dtype).max
    pixels = np.broadcast_to(np.asarray(encoded) * top, (40, 40, 3))
    frame = Frame.from_array((pixels if dtype is np.float32 else np.rint(pixels)).astype(dtype))
    sample = sample_patch(frame, (0, 0, 40, 40))
    assert _apart_deg(sample.light_xy, tuple(ILLUMINANTS["D50"])) < (0.3 if dtype is np.uint8 else 0.01)


def test_light_is_stated_at_the_daylight_setting():
    decoded = np.array([0.30, 0.32, 0.28])
    daylight = np.array([[1.4, 0.1, 0.0], [0.0, 1.0, 0.0], [0.0, 0.05, 0.6]])
    frame = _frame(decoded, space="Rec.2020", linear=True, referred="scene", daylight_from_decoded=daylight)
    expected = daylight @ decoded
    sample = sample_patch(frame, (0, 0, 80, 60))
    got = direction(sample.light_xy)
    assert got == pytest.approx(expected / np.linalg.norm(expected), abs=1e-4)


@given(scale=st.floats(0.05, 0.9), x=st.integers(0, 20), y=st.integers(0, 20))
@settings(max_examples=25, deadline=None)
def test_exposure_and_place_do_not_matter(scale, x, y):
    linear = linear_from_xy((0.40, 0.39))
    frame = _frame(linear / linear.max() * scale, space="Rec.2020", linear=True)
    assert _apart_deg(sample_patch(frame, (x, y, 40, 30)).light_xy, (0.40, 0.39)) < 0.05


def test_noise_widens_the_doubt_but_not_the_texture():
    quiet = sample_patch(_frame((0.5, 0.5, 0.5)), (0, 0, 80, 60))
    noisy = sample_patch(_frame((0.5, 0.5, 0.5), noise=0.05), (0, 0, 80, 60))
    assert noisy.doubt_deg > quiet.doubt_deg
    assert noisy.texture < 0.02
    assert noisy.grain > 0.03
    assert _apart_deg(noisy.light_xy, quiet.light_xy) < 3 * noisy.doubt_deg


def test_fractions_and_pixels_name_the_same_patch():
    frame = _frame((0.4, 0.5, 0.45), noise=0.02)
    assert sample_patch(frame, (20, 15, 40, 30)) == sample_patch(frame, (0.25, 0.25, 0.5, 0.5))
    assert sample_patch(frame, (20.0, 15.0, 40.0, 30.0)).box_px == (20, 15, 40, 30)
    assert sample_patch(frame, (0.0, 0.0, 1.0, 1.0)).box_px == (0, 0, 80, 60)


def test_a_gradient_of_colour_is_doubted():
    pixels = np.full((60, 80, 3), 0.5)
    pixels[..., 2] *= np.linspace(0.97, 1.03, 80)[None]
    frame = Frame.from_array(np.rint(pixels * 65535).astype(np.uint16))
    assert sample_patch(frame, (0, 0, 80, 60)).doubt_deg > 0.8


def test_a_very_large_patch_is_thinned_out_evenly():
    frame = Frame.from_array(np.full((3000, 2000, 3), 118, np.uint8))
    sample = sample_patch(frame, (0.0, 0.0, 1.0, 1.0))
    assert 100_000 < sample.n <= 1_000_000
    assert _apart_deg(sample.light_xy, D65_XY) < 1e-6


def test_what_is_far_from_the_whole_frame_is_noted():
    cast = Cast(Header(), white_xy=(0.44, 0.40), doubt_deg=2.0)
    sample = sample_patch(_frame((0.5, 0.5, 0.5)), (0, 0, 80, 60), cast=cast)
    assert "from what the whole frame suggests" in sample.notes[0]
    near = Cast(Header(), white_xy=D65_XY, doubt_deg=2.0)
    assert sample_patch(_frame((0.5, 0.5, 0.5)), (0, 0, 80, 60), cast=near).notes == ()


# --- patches that are refused


def test_clipped_patch_is_refused_with_its_share():
    frame = _frame((0.5, 0.5, 0.5))
    frame.pixels[:, 30:50, 0] = 65535
    with pytest.raises(TooFewUsablePixels, match="50% of the patch 20,0,40,40 is clipped"):
        sample_patch(frame, (20, 0, 40, 40))


def test_clipped_floating_point_is_refused():
    pixels = np.full((40, 40, 3), 0.4, np.float32)
    pixels[:20] = 1.0
    frame = Frame.from_array(pixels, linear=True)
    with pytest.raises(TooFewUsablePixels, match="clipped"):
        sample_patch(frame, (0, 0, 40, 40))
    assert sample_patch(frame, (0, 20, 40, 20)).clipped_fraction == 0.0


def test_small_dark_and_empty_patches_are_refused():
    with pytest.raises(TooFewUsablePixels, match="only 49 pixels"):
        sample_patch(_frame((0.5, 0.5, 0.5)), (0, 0, 7, 7))
    with pytest.raises(TooFewUsablePixels, match="too dark"):
        sample_patch(_frame((0.01, 0.01, 0.01)), (0, 0, 80, 60))
    with pytest.raises(TooFewUsablePixels, match="too dark"):
        sample_patch(_frame((0.0, 0.0, 0.0)), (0, 0, 80, 60))
    with pytest.raises(TooFewUsablePixels, match="no numbers"):
        sample_patch(Frame.from_array(np.full((40, 40, 3), np.nan, np.float32)), (0, 0, 40, 40))
    with pytest.raises(TooFewUsablePixels, match="too dark"):
        sample_patch(Frame.from_array(np.full((40, 40, 3), -0.5, np.float32)), (0, 0, 40, 40))


def test_textured_patches_are_refused_with_the_figure():
    frame = _frame((0.5, 0.5, 0.5))
    frame.pixels[:, ::2] //= 4
    with pytest.raises(PresetError, match=r"textured: luminance varies by \d+%"):
        sample_patch(frame, (0, 0, 80, 60))
    frame = _frame((0.5, 0.5, 0.5))
    frame.pixels[:, :40] //= 2
    with pytest.raises(PresetError, match="textured"):
        sample_patch(frame, (0, 0, 80, 60))


def test_two_colours_in_a_patch_are_refused():
    frame = _frame((0.5, 0.5, 0.5))
    frame.pixels[:, 40:] = np.rint(np.array([0.54, 0.49, 0.42]) * 65535)
    with pytest.raises(PresetError, match=r"several colours: its colour varies by \d+\.\d degrees"):
        sample_patch(frame, (0, 0, 80, 60))


@pytest.mark.parametrize("encoded", [(0.6, 0.2, 0.2), (0.2, 0.6, 0.3), (0.6, 0.3, 0.6), (0.1, 0.2, 0.8)])
def test_coloured_patches_are_refused_with_the_figures(encoded):
    with pytest.raises(PresetError, match=r"coloured: Oklab chroma \d\.\d\d, Duv [+-]"):
        sample_patch(_frame(encoded), (0, 0, 80, 60))


def test_limits_can_be_widened():
    wide = PatchLimits(most_saturation=1.0, most_duv=1.0)
    assert sample_patch(_frame((0.2, 0.6, 0.3)), (0, 0, 80, 60), limits=wide).saturation > 0.1


@pytest.mark.parametrize(
    "box",
    [
        (70, 0, 20, 20),
        (0, 50, 20, 20),
        (-1, 0, 20, 20),
        (0, 0, 0, 20),
        (0, 0, 20, -20),
        (0.5, 0.5, 0.6, 0.1),
        (0.5, 10, 10, 10),
        (0.1, 0.1, 0.0, 0.1),
        (math.nan, 0.1, 0.1, 0.1),
        (math.inf, 0.1, 0.1, 0.1),
        (1, 2, 3),
    ],
)
def test_boxes_outside_the_frame_are_refused(box):
    with pytest.raises(PresetError):
        sample_patch(_frame((0.5, 0.5, 0.5)), box)


# --- boxes


@pytest.mark.parametrize(
    "text", ["", "1,2,3", "1,2,3,4,5", "a,b,c,d", "1,2,3,-4", "1e9,1,1,1", "nan,0,1,1", "99999999,0,1,1"]
)
def test_texts_that_are_no_box(text):
    with pytest.raises(PresetError, match="no patch"):
        parse_box(text)


@pytest.mark.parametrize("orientation", range(1, 9))
def test_upright_boxes_land_where_pillow_turns_them(orientation):
    """The meaning of EXIF orientation from Pillow's `ImageOps.exif_transpose`."""
    stored = np.zeros((40, 60, 3), np.uint8)
    stored[:] = np.arange(40 * 60).reshape(40, 60, 1) % 251
    buffer = io.BytesIO()
    exif = Image.Exif()
    exif[0x0112] = orientation
    Image.fromarray(stored).save(buffer, "png", exif=exif)
    upright = np.asarray(ImageOps.exif_transpose(Image.open(buffer)))
    box = (7, 5, 12, 9)
    header = Header(width_px=60, height_px=40, orientation=orientation)
    x, y, width, height = pixels_of_box(stored_box(box, header), header, stored.shape)
    seen = upright[box[1] : box[1] + box[3], box[0] : box[0] + box[2]]
    assert sorted(stored[y : y + height, x : x + width].ravel()) == sorted(seen.ravel())
    shares = (
        box[0] / upright.shape[1],
        box[1] / upright.shape[0],
        box[2] / upright.shape[1],
        box[3] / upright.shape[0],
    )
    assert pixels_of_box(stored_box(shares, header), header, stored.shape) == (x, y, width, height)


# --- several samples, whole frames


def test_strays_count_little():
    rng = np.random.default_rng(3)
    good = [PatchSample((0.40 + e, 0.38 + f), 0.6) for e, f in rng.normal(0, 5e-4, (12, 2))]
    stray = [PatchSample((0.33, 0.34), 0.6)] * 4
    mean = robust_mean(good + stray)
    assert _apart_deg(mean.light_xy, (0.40, 0.38)) < 0.3
    assert mean.n == 16
    assert mean.by == "frames"
    assert "4 of 16" in mean.notes[0]
    assert mean.doubt_deg < 0.7


def test_order_and_repetition_of_samples_do_not_matter():
    samples = [PatchSample((0.40 + i * 1e-3, 0.38), 0.5 + i / 10) for i in range(5)]
    forth, back = robust_mean(samples), robust_mean(samples[::-1])
    assert forth.light_xy == pytest.approx(back.light_xy, abs=1e-9)
    assert robust_mean(samples[:1]) is samples[0]
    assert robust_mean([samples[1]] * 3).light_xy == pytest.approx(samples[1].light_xy, abs=1e-9)


def test_different_lights_have_no_mean():
    warm, cool = PatchSample((0.44, 0.40), 0.5), PatchSample((0.31, 0.33), 0.5)
    for samples in ([warm, cool], [warm, warm, cool, cool]):
        with pytest.raises(PresetError, match="no common light"):
            robust_mean(samples)
    with pytest.raises(PresetError, match="no sample"):
        robust_mean([])


def test_a_hero_frame_gives_its_measured_light():
    hero = sample_hero(Cast(Header(), white_xy=(0.40, 0.38), doubt_deg=1.7))
    assert (hero.light_xy, hero.doubt_deg, hero.by) == ((0.40, 0.38), 1.7, "frame")
    with pytest.raises(TooFewUsablePixels, match="no light could be measured"):
        sample_hero(Cast(Header(file="black.tif")))


# --- the fixed correction


def test_fixed_correction_carries_the_grey_to_neutral_and_remembers_where_from():
    header = Header(file=r"C:\shoot\card.dng", body="Northlight N1 7", sha256="ab" * 32, referred="scene")
    sample = PatchSample((0.44, 0.40), 0.61234, box_px=(1, 2, 3, 4))
    fixed = fixed_from_sample(sample, Recipe(), header)
    assert fixed.measured_on_file == "card.dng"
    assert fixed.measured_on_body == "Northlight N1 7"
    assert fixed.measured_on_sha256 == "ab" * 32
    assert fixed.measured_doubt_deg == 0.612
    assert fixed.measured_patch_px == (1, 2, 3, 4)
    assert fixed.measured_referred == "scene"
    correction = fixed_correction(fixed, header)
    assert corrected_xy((0.44, 0.40), header, correction) == pytest.approx(D65_XY, abs=1e-9)


def test_fixed_correction_keeps_what_the_recipe_keeps():
    sample = PatchSample((0.44, 0.40), 0.5)
    assert fixed_from_sample(sample, Recipe(keep_yellow_blue=1, keep_green_magenta=1)).toward_xy == (
        0.44,
        0.40,
    )
    half = fixed_from_sample(sample, Recipe(keep_yellow_blue=0.5))
    assert D65_XY[0] < half.toward_xy[0] < 0.44
    assert fixed_from_sample(sample, Recipe(toward="0.3457,0.3585")).toward_xy == (0.3457, 0.3585)


def test_a_correction_measured_on_raw_is_flagged_on_developed_files():
    fixed = fixed_from_sample(PatchSample((0.44, 0.40), 0.5), Recipe(), Header(referred="scene"))
    assert fixed_correction(fixed, Header(referred="display")).flags == ("other-kind",)
    assert fixed_correction(fixed, Header(referred="scene")).flags == ()
