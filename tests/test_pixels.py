"""Grading at full resolution.

Outside checks: colour-science does the same matrix in float64 on its own curves and primaries; what a photographer
must never see (tinted white, bands, hues that jump) is stated as properties.
"""

import subprocess
import sys
import textwrap

import colour
import numpy as np
import pytest

from grader import _pixels_kernel, _pixels_plain, pixels
from grader._pixels_steps import luminance_of, prepare
from grader.cast.correction import correction_for
from grader.colour import tone
from grader.colour.frames import frame_from_array
from grader.colour.opponent import oklab_from_xyz
from grader.colour.spaces import SPACES, XYZ_FROM_REC2020
from grader.colour.transfer import decode, encode
from grader.colour.white import D65_XY, linear_from_xy, planckian_xy
from grader.model import Correction, Curve, Frame, Header, Metadata, Output, Space

SRGB = SPACES["sRGB"]
TOED = ["sRGB", "Display P3", "Rec.2020", "ROMM RGB"]
NAMES = {  # ours -> colour-science's
    "sRGB": "sRGB",
    "Display P3": "Display P3",
    "Rec.2020": "ITU-R BT.2020",
    "ROMM RGB": "ROMM RGB",
    "opRGB": "Adobe RGB (1998)",
}
LIGHTS_K = [2300, 2856, 4000, 12000]


def matrix_only(matrix=None) -> Correction:
    return Correction(None, D65_XY, np.eye(3) if matrix is None else np.asarray(matrix))


def tungsten(cct_k: float = 2856) -> Correction:
    return correction_for(tuple(planckian_xy(cct_k)), Header())


def codes(values, kind):
    """Return values (1 = white) as codes of a type."""
    if np.dtype(kind).kind == "f":
        return np.asarray(values, kind)
    return np.rint(np.clip(values, 0, 1) * np.iinfo(kind).max).astype(kind)


def scale_of(kind):
    return 1 if np.dtype(kind).kind == "f" else np.iinfo(kind).max


def oklab_of(encoded, space=SRGB):
    """Return Oklab of encoded values (1 = white)."""
    linear = decode(space.curves[0], encoded)
    return oklab_from_xyz(linear @ space.rec2020_from_linear.T @ XYZ_FROM_REC2020.T)


def under(light_k, working, *, kind=np.uint16):
    """Return the sRGB frame (1, N) of working-light colours under a light, clipped as a camera clips."""
    lit = np.asarray(working) * linear_from_xy(tuple(planckian_xy(light_k)))
    linear = lit @ np.linalg.inv(SRGB.rec2020_from_linear).T
    return frame_from_array(codes(encode(SRGB.curves[0], np.clip(linear, 0, 1)), kind)[None])


def graded_values(frame, correction, output=None):
    graded, _ = pixels.correct(frame, correction, output)
    return graded.pixels[0] / scale_of(graded.pixels.dtype)


# ------------------------------------------------------------------------------------------ exactness


@pytest.mark.parametrize("kind", [np.uint8, np.uint16, np.float32])
@pytest.mark.parametrize("name", list(NAMES))
def test_colours_inside_agree_with_colour_science(name, kind):
    """colour-science: its curves, its primaries, CAT16 by its own function, float64."""
    theirs = colour.RGB_COLOURSPACES[NAMES[name]].copy()
    theirs.use_derived_transformation_matrices(True)  # the published ones are rounded to four digits
    rng = np.random.default_rng(5)
    values = codes(rng.uniform(0.25, 0.6, (40, 500, 1)) * rng.uniform(0.8, 1.2, (40, 500, 3)), kind)
    light_xy = tuple(planckian_xy(5000))

    graded, counts = pixels.correct(frame_from_array(values, space=name), correction_for(light_xy, Header()))

    def xyz_from(linear):
        xyz = linear @ theirs.matrix_RGB_to_XYZ.T
        return (
            xyz
            @ colour.adaptation.matrix_chromatic_adaptation_VonKries(
                colour.xy_to_XYZ(theirs.whitepoint), colour.xy_to_XYZ(D65_XY), "Bradford"
            ).T
        )

    linear = theirs.cctf_decoding(values.astype(np.float64) / scale_of(kind))
    adapted = colour.chromatic_adaptation(
        xyz_from(linear),
        colour.xy_to_XYZ(light_xy),
        colour.xy_to_XYZ(D65_XY),
        method="Von Kries",
        transform="CAT16",
    )
    back = np.linalg.solve(xyz_from(np.eye(3)).T, adapted.reshape(-1, 3).T).T.reshape(values.shape)
    wanted = codes(theirs.cctf_encoding(back), kind)
    difference = np.abs(graded.pixels.astype(np.float64) - wanted)

    assert counts.clipped_fraction == counts.out_of_gamut_fraction == 0
    if kind is np.float32:
        assert difference.max() < 5e-5  # BT.2020 in colour-science: 12-bit constants; the rest is below 1e-6
    else:
        assert difference.max() <= (3 if name == "Rec.2020" and kind is np.uint16 else 1)
        assert name == "Rec.2020" or np.mean(difference > 0) <= 0.015


@pytest.mark.parametrize("kind", [np.uint8, np.uint16, np.float32])
@pytest.mark.parametrize("name", [*TOED, "opRGB", "linear Rec.2020", "sampled"])
@pytest.mark.parametrize("light_k", [2856, 12000])
def test_compiled_and_plain_ways_agree_everywhere(name, kind, light_k):
    """All of the cube, clipped and out of gamut included: one code, at most 1.5 % of the values."""
    frame = frame_from_array(codes(np.random.default_rng(1).random((60, 200, 3)), kind))
    frame = Frame(frame.pixels, _sampled_space() if name == "sampled" else SPACES[name], frame.header)
    compiled, counts = pixels.correct(frame, tungsten(light_k))
    plain, plain_counts = _plainly(frame, tungsten(light_k))
    difference = np.abs(compiled.pixels.astype(np.float64) - plain)
    if kind is np.float32:
        assert difference.max() < 4e-5
    else:
        assert difference.max() <= 1
        assert np.mean(difference > 0) <= 0.015
        assert counts.out_of_gamut_fraction == pytest.approx(plain_counts[0] / 12000, abs=2e-4)
        assert counts.clipped_fraction == pytest.approx(plain_counts[1] / 12000, abs=2e-4)


def _plainly(frame, correction, output=None):
    target = frame.space
    result = np.empty_like(frame.pixels)
    steps = prepare(frame, correction, output or Output(), target).steps
    counts = _pixels_plain.grade(
        frame.pixels, result, steps, (frame.space.curves, target.curves), toned=False
    )
    return result, counts


def _sampled_space(flat: int = 0) -> Space:
    """A space with three different sampled curves, as old profiles have them."""
    steps = np.linspace(0, 1, 1024)
    samples = [np.round(decode(SRGB.curves[0], steps) ** g * 65535) / 65535 for g in (1.0, 1.02, 0.98)]
    for curve in samples:
        curve[:flat] = 0
        curve[500 : 500 + flat] = curve[500]
    return Space("sampled", SRGB.rec2020_from_linear, tuple(Curve(samples=curve) for curve in samples))


@pytest.mark.parametrize("kind", [np.uint8, np.uint16])
@pytest.mark.parametrize("name", [*SPACES, "flat"])
def test_identity_gives_back_every_code(name, kind):
    values = np.arange(np.iinfo(kind).max + 1, dtype=kind).reshape(-1, 16)
    space = _sampled_space(flat=20) if name == "flat" else SPACES[name]
    frame = Frame(np.stack([values, values[::-1], values], axis=-1), space)
    for output in (Output(), Output(space=name if name != "flat" else "source")):
        graded, counts = pixels.correct(frame, matrix_only(), output)
        np.testing.assert_array_equal(graded.pixels, frame.pixels)
        assert counts.clipped_fraction == 0


@pytest.mark.parametrize("name", [*TOED, "opRGB"])
def test_a_touch_of_correction_moves_no_code_by_more_than_one(name):
    """The whole decode, encode way on every 16-bit grey."""
    grey = np.repeat(np.arange(65536, dtype=np.uint16)[None, :, None], 3, axis=2)
    graded, _ = pixels.correct(frame_from_array(grey, space=name), matrix_only(np.eye(3) * (1 + 2e-9)))
    assert np.abs(graded.pixels.astype(int) - grey).max() <= 1


@pytest.mark.parametrize("name", [*TOED, "linear Rec.2020"])
def test_deep_shadows_keep_their_gradation(name):
    """A 16-bit ramp of the darkest 4096 codes: as many levels come out as the encoding has for them."""
    ramp = np.repeat(np.arange(4096, dtype=np.uint16)[None, :, None], 3, axis=2)
    graded, _ = pixels.correct(frame_from_array(ramp, space=name), tungsten(5000))
    curve = SPACES[name].curves[0]
    to_rec2020 = SPACES[name].rec2020_from_linear
    gains = (np.linalg.inv(to_rec2020) @ tungsten(5000).matrix @ to_rec2020).sum(1)
    for channel in range(3):
        out = graded.pixels[0, :, channel].astype(int)
        exact = np.rint(encode(curve, gains[channel] * decode(curve, np.arange(4096) / 65535)) * 65535)
        assert (np.diff(out) >= 0).all()
        assert len(np.unique(out)) >= 0.995 * len(np.unique(exact))
        assert np.diff(out).max() <= np.diff(exact).max() + 1


# ------------------------------------------------------------------------------------------ highlights


@pytest.mark.parametrize("kind", [np.uint8, np.uint16])
@pytest.mark.parametrize("light_k", LIGHTS_K)
def test_blown_white_stays_white(light_k, kind):
    frame = frame_from_array(np.full((3, 700, 3), np.iinfo(kind).max, kind))
    graded, counts = pixels.correct(frame, tungsten(light_k))
    assert graded.pixels.min() == np.iinfo(kind).max
    assert counts.clipped_fraction == counts.out_of_gamut_fraction == 0


@pytest.mark.parametrize("light_k", LIGHTS_K)
def test_a_grey_ramp_through_clipping_stays_grey_rising_and_smooth(light_k):
    """White paper under a lamp, from two stops below clipping to four above, as a camera clips it."""
    exposure = np.exp2(np.linspace(-2, 4, 3000))
    frame = under(light_k, exposure[:, None] * np.ones(3))
    values = graded_values(frame, tungsten(light_k))
    lab = oklab_of(values)
    assert np.hypot(lab[:, 1], lab[:, 2]).max() < 0.012  # about half of a just visible difference at white
    assert np.diff(lab[:, 0]).min() > -1e-4
    assert np.abs(np.diff(lab, axis=0)).max() < 0.004
    np.testing.assert_array_equal(values[-1], 1)


@pytest.mark.parametrize("light_k", LIGHTS_K)
def test_no_cyan_or_magenta_near_clipping(light_k):
    """Surfaces of everyday colours: near clipping they may pale, but never take on a hue on the other side."""
    surfaces = np.array([(0.62, 0.42, 0.32), (0.8, 0.72, 0.6), (0.7, 0.68, 0.72), (0.75, 0.78, 0.74)])
    exposure = np.exp2(np.linspace(-2, 4, 400))
    for surface in surfaces:
        lab = oklab_of(graded_values(under(light_k, exposure[:, None] * surface), tungsten(light_k)))
        own = lab[0, 1:] / lab[0, 0]
        across = lab[:, 1:] / lab[:, :1]
        # the part of each chroma that is not along the surface's own
        stray = across - np.clip(across @ own / (own @ own), 0, 1)[:, None] * own
        assert np.hypot(*stray.T).max() < 0.05


LEDS = {
    "red": (1, 0.02, 0.02),
    "green": (0.05, 1, 0.1),
    "blue": (0.03, 0.08, 1),
    "magenta": (1, 0.05, 0.9),
    "amber": (1, 0.45, 0.02),
}


@pytest.mark.parametrize("light_k", [2856, 4000, 12000])
@pytest.mark.parametrize("name", list(LEDS))
def test_clipped_coloured_lamps_keep_their_hue(name, light_k):
    """A lamp's clipped core has the hue of the glow around it, and is not turned grey."""
    peak = np.linspace(0.3, 1.6, 300)[:, None]
    linear = np.clip(np.array(LEDS[name]) * peak, 0, 1)
    frame = frame_from_array(codes(encode(SRGB.curves[0], linear), np.uint16)[None])
    lab = oklab_of(graded_values(frame, tungsten(light_k)))
    chroma = np.hypot(lab[:, 1], lab[:, 2])
    assert chroma.min() > 0.45 * chroma[0]
    hue = np.unwrap(np.arctan2(lab[:, 2], lab[:, 1]))
    assert np.abs(np.diff(hue)).max() < np.radians(4)  # no break
    assert np.abs(np.diff(lab, axis=0)).max() < 0.02


def test_small_corrections_make_small_changes_at_clipping():
    rng = np.random.default_rng(2)
    frame = frame_from_array(codes(rng.uniform(0.8, 1, (1, 4000, 3)), np.uint16))
    graded, _ = pixels.correct(frame, matrix_only(np.diag([1.0005, 1, 0.9995])))
    assert np.abs(graded.pixels.astype(int) - frame.pixels).max() < 150


@pytest.mark.parametrize("name", list(SPACES))
def test_a_measured_neutral_keeps_its_luminance(name):
    light = linear_from_xy(tuple(planckian_xy(3400)))
    space = SPACES[name]
    in_space = np.linalg.inv(space.rec2020_from_linear) @ (0.3 * light)
    encoded = encode(space.curves[0], in_space)
    frame = frame_from_array(np.asarray(encoded, np.float32)[None, None], space=name)
    graded, _ = pixels.correct(frame, tungsten(3400))
    np.testing.assert_allclose(decode(space.curves[0], graded.pixels[0, 0]), 0.3, atol=2e-6)


# ------------------------------------------------------------------------------------------ gamut


def test_colours_outside_are_pulled_in_at_their_luminance_and_hue_line():
    rng = np.random.default_rng(3)
    frame = frame_from_array(codes(rng.uniform(0, 0.85, (1, 5000, 3)), np.uint16))
    graded, counts = pixels.correct(frame, tungsten(3200))

    linear = decode(SRGB.curves[0], frame.pixels[0] / 65535)
    rec2020 = linear @ SRGB.rec2020_from_linear.T
    light = (rec2020 @ tungsten(3200).matrix.T) @ np.linalg.inv(SRGB.rec2020_from_linear).T
    outside = (light.min(1) < -1e-5) | (light.max(1) > 1 + 1e-5)
    assert counts.out_of_gamut_fraction == pytest.approx(outside.mean(), abs=1e-3)
    assert 0.05 < outside.mean() < 0.8

    weights = luminance_of(SRGB)
    result = decode(SRGB.curves[0], graded.pixels[0] / 65535)
    unclipped = linear.max(1) < 0.75
    pulled = outside & unclipped & (light.max(1) <= 1)  # above white, luminance gives way
    luminance = light @ weights
    np.testing.assert_allclose((result @ weights)[pulled], np.minimum(luminance, 1)[pulled], atol=3e-5)
    before, after = light - luminance[:, None], result - (result @ weights)[:, None]
    crossed = np.linalg.norm(np.cross(before[pulled], after[pulled]), axis=1)
    assert crossed.max() < 1e-4
    assert pulled.mean() > 0.02
    edge = np.minimum(result.min(1), 1 - result.max(1))[pulled]
    assert np.abs(edge).max() < 1e-4  # no further in than the edge


def test_colours_inside_are_left_alone_beside_colours_outside():
    inside = codes(np.full((1, 2000, 3), (0.4, 0.35, 0.3)), np.uint16)
    both = inside.copy()
    both[0, ::3] = (65535, 0, 0)
    alone, _ = pixels.correct(frame_from_array(inside), tungsten())
    beside, _ = pixels.correct(frame_from_array(both), tungsten())
    np.testing.assert_array_equal(alone.pixels[0, 1::3], beside.pixels[0, 1::3])


def test_what_luminance_does_not_fit_is_clipped_and_counted():
    values = np.full((10, 100, 3), 30000, np.uint16)
    values[:5] = 50000
    graded, counts = pixels.correct(frame_from_array(values), matrix_only(), Output(exposure_ev=1))
    assert (graded.pixels[:5] == 65535).all()
    assert counts.clipped_fraction == 0.5


# ------------------------------------------------------------------------------------------ floating point


def test_floats_keep_values_below_black_and_above_white():
    values = np.linspace(-0.5, 4, 3000, dtype=np.float32).reshape(1, -1, 3)
    frame = frame_from_array(values, space="Rec.2020", linear=True)
    matrix = np.array([[1.2, -0.1, 0.05], [0.02, 0.9, 0.03], [0.1, -0.3, 1.5]])
    graded, counts = pixels.correct(frame, matrix_only(matrix))
    np.testing.assert_allclose(graded.pixels[0], values[0].astype(float) @ matrix.T, rtol=1e-5, atol=1e-6)
    assert graded.pixels.dtype == np.float32
    assert counts.clipped_fraction == counts.out_of_gamut_fraction == 0


def test_a_float_frame_clipped_at_white_stays_white_there():
    values = np.full((1, 600, 3), 0.4, np.float32)
    values[0, :300] = 1
    graded, counts = pixels.correct(frame_from_array(values), tungsten())
    assert np.ptp(graded.pixels[0, :300]) < 1e-6
    assert "clipped" in counts.notes[0]
    values[0, 599] = 1.5  # now 1 is nothing special
    graded, counts = pixels.correct(frame_from_array(values), tungsten())
    assert graded.pixels[0, 0, 2] > 1.5
    assert counts.notes == ()


def test_missing_numbers_stay_where_they_are():
    values = np.full((1, 64, 3), 0.25, np.float32)
    clean, _ = pixels.correct(frame_from_array(values), tungsten())
    values[0, 5] = (np.nan, np.inf, -np.inf)
    graded, _ = pixels.correct(frame_from_array(values), tungsten())
    others = np.arange(64) != 5
    np.testing.assert_array_equal(graded.pixels[0, others], clean.pixels[0, others])


# ------------------------------------------------------------------------------------------ raw, spaces


def _raw(values) -> Frame:
    return Frame(
        np.asarray(values, np.uint16), SPACES["linear Rec.2020"], Header(format="raw", referred="scene")
    )


def test_raw_frames_get_the_tone_curve_once():
    grey = round(tone.GREY_SCENE * 65535)
    frame = _raw(np.full((1, 3, 3), [[[0], [grey], [65535]]]))
    graded, _ = pixels.correct(frame, matrix_only())
    wanted = encode(SPACES["Rec.2020"].curves[0], tone.apply(frame.pixels[0] / 65535)) * 65535
    assert graded.space.name == "Rec.2020"
    np.testing.assert_allclose(graded.pixels[0], wanted, atol=1)
    assert graded.pixels[0, 0, 0] == 0
    assert graded.pixels[0, 2, 0] == 65535

    jpeg, _ = pixels.correct(frame, matrix_only(), Output(format="jpeg"))
    assert jpeg.space.name == "sRGB"
    assert abs(jpeg.pixels[0, 1, 0] / 65535 * 255 - 118) < 1  # ISO 12232: mid grey at 118 of 255


def test_linear_tone_leaves_raw_frames_scene_linear():
    ramp = np.repeat(np.arange(0, 65536, 64, dtype=np.uint16)[None, :, None], 3, axis=2)
    graded, _ = pixels.correct(_raw(ramp), matrix_only(), Output(tone="linear", space="linear Rec.2020"))
    np.testing.assert_array_equal(graded.pixels, ramp)


def test_every_raw_code_keeps_its_order_through_the_tone_curve():
    ramp = np.repeat(np.arange(65536, dtype=np.uint16)[None, :, None], 3, axis=2)
    graded, _ = pixels.correct(_raw(ramp), matrix_only())
    assert (np.diff(graded.pixels[0, :, 1].astype(int)) >= 0).all()


@pytest.mark.parametrize("target", ["Display P3", "ROMM RGB", "ACEScg"])
def test_other_spaces_show_the_same_colours(target):
    """Outside check: colour-science converts between the same two spaces."""
    rng = np.random.default_rng(8)
    values = codes(rng.uniform(0.2, 0.8, (1, 300, 3)), np.uint16)
    graded, _ = pixels.correct(frame_from_array(values), matrix_only(), Output(space=target))
    assert graded.space.name == target
    space = colour.RGB_COLOURSPACES[target]
    linear = colour.RGB_to_RGB(colour.models.eotf_sRGB(values[0] / 65535), "sRGB", space, "Bradford")
    wanted = linear if target == "ACEScg" else space.cctf_encoding(linear)
    np.testing.assert_allclose(graded.pixels[0] / 65535, wanted, atol=1.5e-4)


# ------------------------------------------------------------------------------------------ frames


def test_threads_and_layout_change_nothing():
    values = codes(np.random.default_rng(4).random((301, 257, 3)), np.uint16)
    one, counts = pixels.correct(frame_from_array(values), tungsten())
    two, counts_of_two = pixels.correct(frame_from_array(values), tungsten(), threads=3)
    np.testing.assert_array_equal(one.pixels, two.pixels)
    assert counts == counts_of_two
    for odd in (values.astype(">u2"), np.ascontiguousarray(values.transpose(2, 0, 1)).transpose(1, 2, 0)):
        other, _ = pixels.correct(Frame(odd, SRGB), tungsten())
        np.testing.assert_array_equal(one.pixels, other.pixels)


def test_the_source_is_untouched_unless_given_away():
    values = codes(np.random.default_rng(4).random((20, 30, 3)), np.uint8)
    frame = frame_from_array(values.copy())
    graded, _ = pixels.correct(frame, tungsten())
    np.testing.assert_array_equal(frame.pixels, values)
    again, _ = pixels.correct(frame, tungsten(), overwrite=True)
    assert again.pixels is frame.pixels
    np.testing.assert_array_equal(graded.pixels, again.pixels)
    frozen = frame_from_array(values.copy())
    frozen.pixels.setflags(write=False)
    kept, _ = pixels.correct(frozen, tungsten(), overwrite=True)
    assert kept.pixels is not frozen.pixels


def test_everything_besides_pixels_is_carried_over():
    alpha = np.ones((2, 2), np.uint8)
    frame = Frame(
        np.full((2, 2, 3), 90, np.uint8), SRGB, Header(body="a b 1"), Metadata(xmp=b"x"), alpha, {"k": 1}
    )
    graded = pixels.correct_frame(frame, tungsten())
    assert graded.header is frame.header
    assert graded.metadata is frame.metadata
    assert graded.alpha is alpha
    assert graded.encoding is frame.encoding


def test_a_single_pixel_and_odd_sizes():
    whole = codes(np.random.default_rng(9).random((1, _pixels_kernel.CHUNK + 7, 3)), np.uint16)
    graded, _ = pixels.correct(frame_from_array(whole), tungsten())
    for count in (1, 2, 9, _pixels_kernel.CHUNK):
        part, _ = pixels.correct(frame_from_array(whole[:, :count]), tungsten())
        assert np.abs(part.pixels.astype(int) - graded.pixels[:, :count]).max() <= 1


# ------------------------------------------------------------------------------------------ without numba


def test_without_numba_there_is_one_warning_and_the_same_picture(tmp_path):
    values = codes(np.random.default_rng(6).random((40, 60, 3)), np.uint16)
    np.save(tmp_path / "in.npy", values)
    np.save(tmp_path / "matrix.npy", tungsten().matrix)
    program = f"""
        import sys, warnings
        sys.modules["numba"] = None
        import numpy as np
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always")
            from grader import pixels
            from grader.colour.frames import frame_from_array
            from grader.model import Correction
            correction = Correction(None, (0.3127, 0.329), np.load(r"{tmp_path}/matrix.npy"))
            for _ in range(2):
                frame = frame_from_array(np.load(r"{tmp_path}/in.npy"))
                graded, _ = pixels.correct(frame, correction)
        np.save(r"{tmp_path}/out.npy", graded.pixels)
        print(len(caught), caught[0].message)
    """
    told = subprocess.run(
        [sys.executable, "-c", textwrap.dedent(program)], capture_output=True, text=True, check=True
    ).stdout
    assert told.startswith("1 numba cannot be used")
    graded, _ = pixels.correct(frame_from_array(values), tungsten())
    difference = np.abs(graded.pixels.astype(int) - np.load(tmp_path / "out.npy"))
    assert difference.max() <= 1
    assert np.mean(difference > 0) <= 0.015
