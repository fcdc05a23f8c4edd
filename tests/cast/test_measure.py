"""The measured light: laws, packaged photographs under known casts, and frames with nothing to measure.

The photographs are those that scikit-image and scikit-learn package; CIE daylight and illuminant A are from
colour-science's tables.
"""

import json
from dataclasses import asdict, replace
from pathlib import Path

import numpy as np
import pytest
import skimage.data
import skimage.transform
import sklearn.datasets
import tifffile
from hypothesis import given, settings
from hypothesis import strategies as st

import grader
from grader.cast import build_proxy, correction_for, measure, measure_proxy, plane, vote
from grader.cast.cells import cells_from_proxy
from grader.cast.vote import angle_deg
from grader.colour.spaces import space_by_name
from grader.colour.transfer import decode
from grader.colour.white import D65_XY, linear_from_xy, xy_from_cct_duv
from grader.model import FLAGS, Frame, Header, Recipe

SRGB = space_by_name("sRGB")
SAMPLES = Path(grader.__file__).parents[1] / "sample_images"


def packaged(name):
    if name.endswith(".jpg"):
        encoded = np.asarray(sklearn.datasets.load_sample_image(name))
    else:
        encoded = getattr(skimage.data, name)()
    linear = np.stack([decode(SRGB.curves[0], encoded[..., i] / 255) for i in range(3)], axis=-1)
    return (linear @ SRGB.rec2020_from_linear.T).astype(np.float32)


PHOTOGRAPHS = {
    name: packaged(name) for name in ("astronaut", "coffee", "chelsea", "rocket", "china.jpg", "flower.jpg")
}


def frame(linear, referred="display", **facts):
    return Frame.from_array(
        linear.astype(np.float32), space="Rec.2020", linear=True, referred=referred, **facts
    )


def light_of(cast):
    return linear_from_xy(cast.white_xy)


def relit(linear, gain_lms):
    matrix = np.linalg.inv(plane.LMS_FROM_REC2020) @ np.diag(gain_lms) @ plane.LMS_FROM_REC2020
    return linear @ matrix.T


def under(linear, xy):
    """Return a picture under another light, by von Kries in Oklab's cones; the neutral goes to ``xy``."""
    return relit(linear, plane.LMS_FROM_REC2020 @ linear_from_xy(xy))


def apart(cast, xy):
    return float(angle_deg(light_of(cast), linear_from_xy(xy)))


# ---- laws


@settings(max_examples=12, deadline=None)
@given(exposure=st.floats(0.01, 50.0), name=st.sampled_from(sorted(PHOTOGRAPHS)))
def test_exposure_changes_nothing(exposure, name):
    linear = PHOTOGRAPHS[name]
    one, other = measure(frame(linear, "scene")), measure(frame(linear * exposure, "scene"))
    assert float(angle_deg(light_of(one), light_of(other))) < 0.05
    assert one.doubt_deg == pytest.approx(other.doubt_deg, rel=0.02)


@pytest.mark.parametrize("name", sorted(PHOTOGRAPHS))
@pytest.mark.parametrize(
    "turn", [lambda p: p[::-1], lambda p: p[:, ::-1], np.rot90, lambda p: p.swapaxes(0, 1)]
)
def test_mirror_and_rotation_change_nothing(name, turn):
    linear = PHOTOGRAPHS[name][:384, :384]
    one, other = measure(frame(linear, "scene")), measure(frame(turn(linear), "scene"))
    assert float(angle_deg(light_of(one), light_of(other))) < 0.02
    assert one.flags == other.flags


@settings(max_examples=15, deadline=None)
@given(a=st.integers(-3, 3), b=st.integers(-5, 5), name=st.sampled_from(["astronaut", "china.jpg"]))
def test_another_light_shifts_the_evidence_and_nothing_else(a, b, name):
    """A von Kries change by whole bins moves grey and surface evidence by as many bins."""
    linear = PHOTOGRAPHS[name].astype(np.float64)
    linear = linear * np.random.default_rng(1).uniform(0.98, 1.0, (*linear.shape[:2], 1))  # no shared maximum
    gain = plane.LMS_FROM_REC2020 @ plane.linear_from_ab(np.array([a, b]) * plane.STEP)
    grids = []
    for picture in (linear, relit(linear, gain / gain[1])):
        cells = cells_from_proxy(build_proxy(frame(picture, "scene")))
        grids.append(vote.splat(cells.ab[cells.ok], np.ones(int(cells.ok.sum()))))
    moved = np.roll(grids[0], (a, b), axis=(0, 1))
    inner = np.s_[6:-6, 8:-8]
    assert np.abs(moved[inner] - grids[1][inner]).sum() < 0.06  # the edge of the plane cuts some off


@pytest.mark.parametrize("name", ["astronaut", "china.jpg", "chelsea"])
@pytest.mark.parametrize("cct_k", [3800, 5000, 9000])
def test_a_change_of_light_moves_the_measured_light(name, cct_k):
    """Without a prior the measured light follows a von Kries change of light."""
    places = []
    for xy in (D65_XY, tuple(xy_from_cct_duv(cct_k, 0.003))):
        cells = cells_from_proxy(build_proxy(frame(under(PHOTOGRAPHS[name], xy), "scene")))
        weights = vote.weights_from_log(vote.cast_vote(cells, "scene").log_likelihood)
        places.append(weights @ vote.candidates())
    moved, expected = places[1] - places[0], plane.ab_from_xy(xy_from_cct_duv(cct_k, 0.003))
    assert np.linalg.norm(moved - expected) < 0.02


@pytest.mark.parametrize("name", sorted(PHOTOGRAPHS))
def test_a_clipped_area_does_not_swing_the_light(name):
    linear = PHOTOGRAPHS[name].copy()
    before = measure(frame(linear, "scene"))
    linear[:60, :80] = 1.5  # a blown window in the corner
    after = measure(frame(linear, "scene"))
    assert float(angle_deg(light_of(before), light_of(after))) < 1.0


@settings(max_examples=8, deadline=None)
@given(
    seed=st.integers(0, 1000),
    base=st.tuples(*[st.floats(0.1, 0.6)] * 3),
    grain=st.sampled_from([0.0, 1e-3, 0.03]),
    referred=st.sampled_from(["scene", "display"]),
)
def test_noise_and_one_flat_colour_are_never_sure(seed, base, grain, referred):
    rng = np.random.default_rng(seed)
    flat = np.ones((60, 90, 3)) * np.array(base)
    shaded = flat * np.linspace(0.5, 1.0, 90)[:, None]
    noise = rng.uniform(0, 1, (60, 90, 3))
    for picture in (flat, shaded, flat * (1 + grain * rng.standard_normal(flat.shape)), noise):
        cast = measure(frame(picture, referred))
        assert cast.doubt_deg is None or "high-doubt" in cast.flags


@pytest.mark.parametrize("exposure", [1.0, 2.0, 6.0])
def test_what_is_clipped_makes_less_sure(exposure):
    linear = PHOTOGRAPHS["coffee"] / PHOTOGRAPHS["coffee"].max()
    over = np.minimum(linear * exposure, 1.0)
    cast = measure(frame(over, "scene"))
    share = build_proxy(frame(over, "scene")).clipped_fraction
    assert cast.doubt_deg >= min(15.0 * share, 12.0) - 1e-9
    assert share < 0.3 or "high-doubt" in cast.flags


@pytest.mark.parametrize("name", ["astronaut", "coffee", "china.jpg"])
def test_size_hardly_matters(name):
    linear = PHOTOGRAPHS[name]
    whole = measure(frame(linear, "scene"))
    for scale in (0.5, 0.25):
        small = skimage.transform.rescale(linear, scale, channel_axis=2, anti_aliasing=True)
        assert float(angle_deg(light_of(whole), light_of(measure(frame(small, "scene"))))) < 1.5


# ---- photographs under known casts


@pytest.mark.parametrize("name", sorted(PHOTOGRAPHS))
@pytest.mark.parametrize("mired", [-60, -40, 40, 80, 120])
def test_a_known_cast_leaves_no_more_than_it_was(name, mired):
    xy = tuple(xy_from_cct_duv(1e6 / (153.8 + mired), 0.0032))
    linear = PHOTOGRAPHS[name]
    given_cast = float(angle_deg(linear_from_xy(xy), np.ones(3)))
    left = apart(measure(frame(under(linear, xy))), xy)
    assert left <= given_cast + 1e-6


@pytest.mark.parametrize("name", sorted(PHOTOGRAPHS))
def test_a_second_pass_corrects_less(name):
    linear = PHOTOGRAPHS[name]
    first = measure(frame(linear))
    matrix = correction_for(first.white_xy, first.header, Recipe()).matrix
    second = measure(frame(linear @ matrix.T))
    assert abs(second.delta_e_2000) <= first.delta_e_2000 + 0.2


@pytest.mark.parametrize("name", ["astronaut", "china.jpg", "rocket"])
def test_a_picture_with_much_grey_stays_as_shipped(name):
    assert apart(measure(frame(PHOTOGRAPHS[name])), D65_XY) < 2.5


@pytest.mark.skipif(
    not (SAMPLES / "truth.json").exists(), reason="the sample pictures are not in an installed grader"
)
def test_half_of_grey_worlds_error_on_the_sample_pictures():
    """Rendered spectrally, so that each frame's light is known (sample_images/truth.json)."""
    ours, grey_world = [], []
    for name, truth in json.loads((SAMPLES / "truth.json").read_text()).items():
        if truth["coloured"]:
            continue
        picture = grader.read(SAMPLES / name)
        proxy = build_proxy(picture)
        cells = cells_from_proxy(proxy)
        true_light = linear_from_xy(truth["white_xy"])
        ours.append(float(angle_deg(light_of(measure_proxy(proxy)), true_light)))
        grey_world.append(float(angle_deg(cells.linear[cells.ok].mean(axis=0), true_light)))
    assert np.mean(ours) <= 0.5 * np.mean(grey_world), (np.mean(ours), np.mean(grey_world))


# ---- the camera's own balance


def test_the_cameras_balance_pulls_gently():
    as_shot = linear_from_xy(xy_from_cct_duv(3200, 0.0))
    linear = PHOTOGRAPHS["coffee"]
    plain = measure(frame(linear, "scene"))
    matrix = np.diag(as_shot)
    with_balance = measure(frame(linear / as_shot, "scene", daylight_from_decoded=matrix))
    before, after = (apart(cast, xy_from_cct_duv(3200, 0.0)) for cast in (plain, with_balance))
    assert after < before
    assert after > 0.1 * before


def test_the_daylight_setting_tells_nothing():
    linear = PHOTOGRAPHS["coffee"]
    plain = measure(frame(linear, "scene"))
    fixed = measure(frame(linear, "scene", daylight_from_decoded=np.eye(3)))
    assert fixed.white_xy == pytest.approx(plain.white_xy, abs=1e-9)


# ---- nothing, or next to nothing, to measure


def bad_frames():
    nan = np.full((40, 60, 3), np.nan, np.float32)
    half = PHOTOGRAPHS["coffee"].copy()
    half[:200] = np.inf
    half[200:300] = np.nan
    return {
        "black": np.zeros((40, 60, 3), np.uint8),
        "white": np.full((40, 60, 3), 255, np.uint8),
        "clipped": np.tile(np.array([255, 90, 40], np.uint8), (40, 60, 1)),
        "white 16": np.full((40, 60, 3), 65_535, np.uint16),
        "nan": nan,
        "inf": np.full((40, 60, 3), np.inf, np.float32),
        "negative": np.full((40, 60, 3), -0.5, np.float32),
        "two pixels": np.array([[[10, 20, 30], [200, 100, 50]]], np.uint8),
        "one pixel": np.array([[[10, 20, 30]]], np.uint8),
        "a line": np.random.default_rng(1).integers(10, 240, (1, 65_535, 3)).astype(np.uint8),
        "a column": np.random.default_rng(1).integers(10, 240, (65_535, 1, 3)).astype(np.uint8),
        "half broken": half,
        "huge": np.full((40, 60, 3), 3e38, np.float32),
        "tiny": np.random.default_rng(1).uniform(0, 1e-37, (40, 60, 3)).astype(np.float32),
        "pure blue": np.tile(np.array([0, 0, 200], np.uint8), (40, 60, 1)),
    }


@pytest.mark.parametrize("name", sorted(bad_frames()))
@pytest.mark.parametrize("referred", ["scene", "display"])
def test_bad_frames_give_flagged_results_and_plain_numbers(name, referred):
    picture = Frame.from_array(bad_frames()[name], space="sRGB", linear=name == "huge", referred=referred)
    cast = measure(picture)
    record = asdict(replace(cast, evidence=None, header=Header()))
    json.dumps(record, allow_nan=False)
    assert set(cast.flags) <= set(FLAGS)
    if cast.white_xy is None:
        assert cast.doubt_deg is None
        assert "nothing-measured" in cast.flags
    if name in {"black", "white", "clipped", "white 16", "nan", "inf", "negative", "two pixels", "one pixel"}:
        assert cast.white_xy is None


def test_evidence_is_relative_to_its_peak():
    cast = measure(frame(PHOTOGRAPHS["coffee"]))
    assert cast.evidence.log_likelihood.min() == 0
    assert cast.evidence.log_likelihood.shape == (len(vote.candidates()),)
    assert cast.evidence.grid == plane.GRID


# ---- flags


def test_a_saturated_stage_light_is_flagged():
    """A deep blue light: everything in the frame lies outside what lamps and daylight look like."""
    blue = PHOTOGRAPHS["astronaut"] * np.array([0.05, 0.1, 1.0])
    cast = measure(frame(blue, "scene"))
    assert {"coloured-light", "high-doubt"} <= set(cast.flags)


def test_two_lights_are_seen():
    linear = PHOTOGRAPHS["astronaut"].copy()
    linear[:, 256:] = under(linear[:, 256:], tuple(xy_from_cct_duv(2856, 0.0)))
    assert "two-lights" in measure(frame(linear, "scene")).flags


def test_dark_and_clipped():
    assert "dark" in measure(frame(PHOTOGRAPHS["astronaut"] * 0.005)).flags
    bright = np.minimum(PHOTOGRAPHS["astronaut"] * 4, 1.0)
    assert "clipped" in measure(frame(bright)).flags


# ---- what a linear TIFF holds


def test_a_linear_tiff_is_what_the_recipe_says(tmp_path):
    """Tungsten light on a photograph, at the daylight setting: a usual light of a scene, a large cast of a picture."""
    light = xy_from_cct_duv(2856, 0.0)
    picture = (PHOTOGRAPHS["coffee"] * linear_from_xy(light)).astype(np.float32)
    linear, rounded = tmp_path / "linear.tif", tmp_path / "coded.tif"
    tifffile.imwrite(linear, picture, photometric="rgb")
    tifffile.imwrite(rounded, (np.clip(picture, 0, 1) * 65535).astype(np.uint16), photometric="rgb")
    scene = Recipe(linear_tiff="scene")
    assert measure(grader.read(linear)).header.referred == "display"
    assert measure(grader.read(linear), scene).header.referred == "scene"
    assert measure(grader.read(rounded), scene).header.referred == "display"
    array = frame(picture, "display")
    assert measure(array, scene).header.referred == "display"
    as_array = measure(replace(grader.read(linear), header=replace(array.header, referred="scene")))
    assert measure(grader.read(linear), scene).white_xy == as_array.white_xy
