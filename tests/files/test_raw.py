"""Raw files: every kind of mosaic, the balance, the matrix, black and white, and what is wrong with them.

The reference is LibRaw itself (through rawpy), and arithmetic by the DNG specification on files that tifffile writes.
"""

from pathlib import Path

import numpy as np
import pytest
import rawpy

from grader.colour.spaces import REC2020_FROM_XYZ
from grader.colour.white import D65_XY, linear_from_xy, xy_from_cct_duv, xyz_from_xy
from grader.errors import DamagedFile, MissingFile, UnsupportedFile
from grader.files import raw
from grader.files.raw_colour import neutral_under
from grader.model import ReadLimits

SENSOR_FROM_XYZ = np.array([[0.72, -0.21, -0.06], [-0.43, 1.22, 0.24], [-0.07, 0.19, 0.62]])
AS_SHOT = np.array([0.5, 1.0, 0.6])
KINDS = ("rggb", "bggr", "grbg", "gbrg", "six", "linear")


def patches(*colours, size=(240, 360)):
    """Return sensor light in vertical stripes, each colour relative to a neutral of the shot."""
    picture = np.empty((*size, 3))
    edges = np.linspace(0, size[1], len(colours) + 1).astype(int)
    for i, colour in enumerate(colours):
        picture[:, edges[i] : edges[i + 1]] = AS_SHOT * colour
    return picture


def middle(pixels, i, of):
    """Return the mean colour of the middle of stripe i, 0 to 1."""
    height, width = pixels.shape[:2]
    x0, x1 = int((i + 0.3) * width / of), int((i + 0.7) * width / of)
    return pixels[height // 4 : 3 * height // 4, x0:x1].reshape(-1, 3).mean(axis=0) / 65_535


def centres(pixels):
    """Return the mean colours of the middles of 6 x 8 blocks."""
    row, column = pixels.shape[0] / 6, pixels.shape[1] / 8
    inner = [slice(int((i + 0.35) * row), int((i + 0.65) * row)) for i in range(6)]
    across = [slice(int((i + 0.35) * column), int((i + 0.65) * column)) for i in range(8)]
    return np.array([[pixels[y, x].reshape(-1, 3).mean(axis=0) for x in across] for y in inner])


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("byteorder", ["<", ">"])
def test_a_neutral_of_the_shot_is_grey_in_every_kind(sensor_file, tmp_path, kind, byteorder):
    path = sensor_file(tmp_path / "a.dng", patches(0.2, 0.6), kind=kind, byteorder=byteorder)
    frame = raw.read(path)
    assert raw.is_raw(path)
    assert frame.pixels.dtype == np.uint16
    assert frame.space.name == "linear Rec.2020"
    assert frame.header.referred == "scene"
    assert frame.header.flags == ()
    for i, level in enumerate((0.2, 0.6)):
        np.testing.assert_allclose(middle(frame.pixels, i, 2), level, rtol=3e-3 if kind == "six" else 1e-3)


@pytest.mark.parametrize("kind", KINDS)
def test_a_colour_follows_the_camera_matrix(sensor_file, tmp_path, kind):
    """By the DNG specification, chapter 6: sensor = ColorMatrix . XYZ, here relative to the neutral of D65."""
    neutral = SENSOR_FROM_XYZ @ xyz_from_xy(D65_XY)
    xyz = np.array([0.30, 0.27, 0.22])
    sensor = SENSOR_FROM_XYZ @ xyz
    picture = np.broadcast_to(sensor / neutral.max() * 0.9, (240, 240, 3)).copy()
    path = sensor_file(tmp_path / "a.dng", picture, kind=kind, as_shot=neutral / neutral[1])
    frame = raw.read(path)
    seen = middle(frame.pixels, 0, 1)
    expected = REC2020_FROM_XYZ @ xyz
    np.testing.assert_allclose(seen / seen[1], expected / expected[1], rtol=5e-3 if kind == "six" else 2e-3)
    assert frame.header.daylight_from_decoded is None or np.allclose(
        frame.header.daylight_from_decoded, np.eye(3), atol=1e-3
    )


@pytest.mark.parametrize("kind", ["rggb", "six", "linear"])
def test_the_daylight_setting_is_what_libraw_decodes_at_it(sensor_file, tmp_path, kind):
    path = sensor_file(tmp_path / "a.dng", patches((0.3, 0.35, 0.25), (0.2, 0.15, 0.3), 0.3), kind=kind)
    frame = raw.read(path)
    with rawpy.imread(str(path)) as file:
        daylight = np.array(file.daylight_whitebalance[:3])
        shot = np.array(file.camera_whitebalance[:3])
        at_daylight = file.postprocess(
            user_wb=[*daylight, daylight[1]],
            gamma=(1, 1),
            no_auto_bright=True,
            adjust_maximum_thr=0,
            output_bps=16,
            output_color=rawpy.ColorSpace.Rec2020,
            demosaic_algorithm=rawpy.DemosaicAlgorithm.LINEAR,
            user_sat=15_488 if kind == "linear" else None,  # white less black
        )
    scale = (daylight[1] / daylight.min()) / (shot[1] / shot.min())  # LibRaw scales by the least multiplier
    for i in range(3):
        turned = frame.header.daylight_from_decoded @ middle(frame.pixels, i, 3) * scale
        np.testing.assert_allclose(middle(at_daylight, i, 3), turned, rtol=1e-3)


def test_the_sensor_is_told_as_the_file_gives_it(sensor_file, tmp_path):
    sensor = raw.read_header(sensor_file(tmp_path / "a.dng", patches(0.3))).sensor
    neutral = SENSOR_FROM_XYZ @ xyz_from_xy(D65_XY)
    np.testing.assert_allclose(sensor.daylight_neutral, neutral / neutral[1], rtol=2e-3)
    np.testing.assert_allclose(sensor.as_shot_neutral, AS_SHOT, rtol=1e-5)
    np.testing.assert_allclose(sensor.sensor_from_rec2020.sum(axis=1), 1, rtol=1e-4)
    light = xy_from_cct_duv(2856, 0.0)  # CIE illuminant A
    expected = SENSOR_FROM_XYZ @ xyz_from_xy(light)
    np.testing.assert_allclose(neutral_under(sensor, light), expected / expected[1], rtol=2e-3)


@pytest.mark.parametrize("kind", ["rggb", "gbrg", "six"])
def test_multipliers_make_a_light_neutral_in_libraw(sensor_file, tmp_path, kind):
    light = xy_from_cct_duv(2856, 0.0)
    response = SENSOR_FROM_XYZ @ xyz_from_xy(light)
    greys = response / response.max() * np.repeat([0.1, 0.3, 0.7], 80)[None, :, None]
    path = sensor_file(tmp_path / "a.dng", np.broadcast_to(greys, (120, 240, 3)).copy(), kind=kind)
    multipliers = raw.sensor_multipliers(raw.read_header(path), light)
    assert multipliers[1] == 1
    with rawpy.imread(str(path)) as file:
        pixels = file.postprocess(
            user_wb=[*multipliers, multipliers[1]],
            gamma=(1, 1),
            no_auto_bright=True,
            adjust_maximum_thr=0,
            output_bps=16,
            demosaic_algorithm=rawpy.DemosaicAlgorithm.LINEAR,
        )
    for i in range(3):
        grey = middle(pixels, i, 3)
        np.testing.assert_allclose(grey / grey[1], 1, atol=5e-3)


@pytest.mark.parametrize("kind", [*KINDS, "grey"])
def test_the_reduced_frame_agrees_with_the_whole_one(sensor_file, tmp_path, kind):
    rng = np.random.default_rng(5)
    blocks = rng.uniform(0.1, 0.8, (6, 8, 3)) * [1.1, 1.0, 0.9]
    soft = 0.6 * blocks.mean(axis=2, keepdims=True) + 0.4 * blocks
    picture = AS_SHOT * np.kron(soft, np.ones((72, 72, 1)))
    path = sensor_file(tmp_path / "a.dng", picture, kind=kind)
    whole, small = raw.read(path), raw.read_reduced(path, target_px=96)
    assert 48 <= max(small.pixels.shape) <= 96
    ratio = small.pixels.reshape(-1, 3).mean(axis=0) / whole.pixels.reshape(-1, 3).mean(axis=0)
    np.testing.assert_allclose(ratio, 1, atol=5e-3)
    rough = 5e-3 if kind == "six" else 2e-3  # LibRaw averages small 6x6 frames with integer weights
    np.testing.assert_allclose(centres(small.pixels), centres(whole.pixels), rtol=rough)
    assert small.header.width_px == whole.header.width_px == 576
    assert small.header.sha256 == whole.header.sha256


def test_clipped_stays_clipped_and_a_little_clipping_is_left_out(sensor_file, tmp_path):
    picture = patches(0.4, 4.0)
    picture[100:104, 50:54] = 1.0  # a glint inside the grey half
    path = sensor_file(tmp_path / "a.dng", picture)
    small = raw.read_reduced(path, target_px=36).pixels
    assert (small[:, 20:] == 65_535).all()
    np.testing.assert_allclose(small[:, :17] / 65_535, 0.4, rtol=2e-3)
    assert (raw.read(path).pixels[:, 200:] >= 65_530).all()


@pytest.mark.parametrize("kind", ["rggb", "linear"])
def test_black_and_white_levels_are_honoured(sensor_file, tmp_path, kind):
    for black, white in ((0, 65_535), (1024, 4095), (64, 1023)):
        path = sensor_file(tmp_path / "a.dng", patches(0.25, 2.0), kind=kind, black=black, white=white)
        pixels = raw.read(path).pixels
        np.testing.assert_allclose(middle(pixels, 0, 2), 0.25, atol=1.5 / (white - black) + 1e-4)
        assert middle(pixels, 1, 2).min() > 0.9999
    four = sensor_file(tmp_path / "four.dng", patches(0.02, 0.3), black=(500, 504, 497, 502), white=16_000)
    for frame in (raw.read(four), raw.read_reduced(four, target_px=60)):
        dim = middle(frame.pixels, 0, 2)
        np.testing.assert_allclose(dim / dim[1], 1, atol=5e-3)


@pytest.mark.parametrize("as_shot", [None, (0.001, 1.0, 1.0), (1.0, 1.0, 900.0), (0.0, 0.0, 0.0)])
def test_a_missing_or_absurd_balance_gives_way_to_daylight(sensor_file, tmp_path, as_shot):
    neutral = SENSOR_FROM_XYZ @ xyz_from_xy(D65_XY)
    picture = np.broadcast_to(neutral / neutral.max() * 0.5, (64, 96, 3)).copy()
    path = sensor_file(tmp_path / "a.dng", picture, as_shot=as_shot)
    for frame in (raw.read(path), raw.read_reduced(path, target_px=20)):
        assert "balance-unusable" in frame.header.flags
        assert any("daylight" in note for note in frame.header.notes)
        assert frame.header.daylight_from_decoded is None
        colour = middle(frame.pixels, 0, 1)
        np.testing.assert_allclose(colour / colour[1], 1, atol=5e-3)


def test_a_balance_given_as_a_chromaticity(sensor_file, tmp_path):
    """AsShotWhiteXY (DNG specification, chapter 4): the neutral is ColorMatrix . XYZ of that white."""
    white = (0.44757, 0.40745)  # CIE illuminant A
    neutral = SENSOR_FROM_XYZ @ xyz_from_xy(white)
    picture = np.broadcast_to(neutral / neutral.max() * 0.5, (64, 96, 3)).copy()
    tag = (50729, 5, 2, [44_757, 100_000, 40_745, 100_000])
    frame = raw.read(sensor_file(tmp_path / "a.dng", picture, as_shot=None, tags=[tag]))
    assert frame.header.flags == ()
    np.testing.assert_allclose(middle(frame.pixels, 0, 1) / middle(frame.pixels, 0, 1)[1], 1, atol=2e-3)
    np.testing.assert_allclose(frame.header.sensor.as_shot_neutral, neutral / neutral[1], rtol=1e-3)
    daylight = SENSOR_FROM_XYZ @ xyz_from_xy(D65_XY)
    np.testing.assert_allclose(frame.header.sensor.daylight_neutral, daylight / daylight[1], rtol=1e-3)
    seen = frame.header.daylight_from_decoded @ middle(frame.pixels, 0, 1)
    np.testing.assert_allclose(seen / seen[1], linear_from_xy(white) / linear_from_xy(white)[1], rtol=3e-3)


def test_a_missing_matrix_is_flagged_and_neutrals_stay_neutral(sensor_file, tmp_path):
    for matrix in (None, np.zeros((3, 3)), np.ones((3, 3))):
        path = sensor_file(tmp_path / "a.dng", patches(0.2, 0.5), matrix=matrix)
        for frame in (raw.read(path), raw.read_reduced(path, target_px=60)):
            assert "matrix-missing" in frame.header.flags
            assert frame.header.referred == "display"  # the light's own chromaticity cannot be known
            assert frame.header.sensor is None
            assert raw.sensor_multipliers(frame.header, D65_XY) is None
            colour = middle(frame.pixels, 0, 2)
            np.testing.assert_allclose(colour / colour[1], 1, atol=5e-3)


def test_a_sensor_without_colour_gives_grey(sensor_file, tmp_path):
    frame = raw.read(sensor_file(tmp_path / "a.dng", patches(0.3, 0.6), kind="grey"))
    np.testing.assert_array_equal(frame.pixels[..., 0], frame.pixels[..., 2])
    assert frame.header.sensor is None
    assert any("no colour" in note for note in frame.header.notes)
    assert "matrix-missing" not in frame.header.flags


@pytest.mark.parametrize(("level", "flag"), [(0.0, "dark"), (9.0, "clipped")])
def test_all_black_and_all_white_are_told(sensor_file, tmp_path, level, flag):
    path = sensor_file(tmp_path / "a.dng", patches(level))
    assert flag in raw.read(path).header.flags
    assert flag in raw.read_reduced(path, target_px=30).header.flags


def test_a_tiny_picture_is_told(sensor_file, tmp_path):
    path = sensor_file(tmp_path / "a.dng", patches(0.3, size=(30, 40)))
    for frame in (raw.read(path), raw.read_reduced(path)):
        assert "few-usable-pixels" in frame.header.flags


@pytest.mark.parametrize("orientation", range(1, 9))
def test_pixels_stay_as_stored_and_the_orientation_is_told(sensor_file, tmp_path, orientation):
    path = sensor_file(tmp_path / "a.dng", patches(0.1, 0.6), tags=[(274, "H", 1, orientation)])
    frame = raw.read(path)
    assert frame.header.orientation == orientation
    assert frame.pixels.shape == (240, 360, 3)
    assert middle(frame.pixels, 0, 2)[1] < middle(frame.pixels, 1, 2)[1]


def test_facts_come_from_the_tags(sensor_file, tmp_path):
    tags = [
        (271, "s", 0, "Lumo Works"),
        (272, "s", 0, "Lumo K2"),
        (50735, "s", 0, "0042"),
        (0x9003, "s", 0, "2031:05:04 18:30:09"),
        (0x9291, "s", 0, "25"),
        (0x829A, 5, 1, [1, 250]),
        (0x829D, 5, 1, [28, 10]),
        (0x8827, "H", 1, 1600),
        (0x9209, "H", 1, 1),
    ]
    header = raw.read(sensor_file(tmp_path / "a.dng", patches(0.3), tags=tags)).header
    assert header.body == "Lumo K2 0042"
    assert header.taken_at == "2031-05-04T18:30:09.25"
    assert (header.exposure_time_s, header.f_number, header.iso, header.flash) == (1 / 250, 2.8, 1600, True)
    assert (header.width_px, header.height_px, header.format) == (360, 240, "raw")


def test_too_large_is_refused_before_it_is_unpacked(sensor_file, tmp_path):
    path = sensor_file(tmp_path / "a.dng", patches(0.3))
    with pytest.raises(UnsupportedFile, match="limit"):
        raw.read(path, ReadLimits(max_pixels=80_000))
    with pytest.raises(UnsupportedFile, match="limit"):
        raw.read_reduced(path, ReadLimits(max_pixels=80_000))


def test_what_is_no_raw_file_is_told(sensor_file, tmp_path):
    whole = sensor_file(tmp_path / "a.dng", patches(0.3)).read_bytes()
    cut = tmp_path / "cut.dng"
    cut.write_bytes(whole[: len(whole) // 2])
    with pytest.raises(DamagedFile) as caught:
        raw.read(cut)
    assert str(caught.value).startswith(str(cut))
    words = tmp_path / "words.nef"
    words.write_text("not a picture at all, just words\n" * 10)
    assert not raw.is_raw(words)
    with pytest.raises((UnsupportedFile, DamagedFile)):
        raw.read(words)
    with pytest.raises(MissingFile):
        raw.read(tmp_path / "none.dng")


def test_a_plain_tiff_is_no_raw_file_even_from_a_camera(tmp_path):
    import tifffile

    path = tmp_path / "scan.tif"
    tags = [(271, "s", 0, "Lumo Works", True), (272, "s", 0, "Lumo K2", True)]
    for shape, photometric in (((40, 60, 3), "rgb"), ((40, 60), "minisblack")):
        tifffile.imwrite(path, np.full(shape, 9_000, np.uint16), photometric=photometric, extratags=tags)
        assert not raw.is_raw(path)


def test_a_name_that_is_no_utf8(sensor_file, tmp_path):
    import os

    path = sensor_file(tmp_path / "a.dng", patches(0.3))
    odd = os.fsdecode(os.fsencode(tmp_path) + b"/\xff\xfe.dng")
    try:
        path.rename(odd)
    except OSError:
        pytest.skip("this file system takes only UTF-8 names")
    assert raw.is_raw(odd)
    assert raw.read(odd).pixels.shape == (240, 360, 3)


def test_damaged_files_end_in_an_error_or_a_picture(sensor_file, tmp_path):
    """Bytes changed at random, mostly in the directories: only our errors come out."""
    rng = np.random.default_rng(3)
    path = tmp_path / "b.dng"
    for kind in ("rggb", "linear"):
        whole = sensor_file(tmp_path / "a.dng", patches(0.3, size=(24, 32)), kind=kind).read_bytes()
        for _ in range(60):
            data = bytearray(whole)
            for at in rng.integers(0, min(700, len(data)), rng.integers(1, 4)):
                data[at] = rng.integers(0, 256)
            path.write_bytes(data[: rng.integers(len(data) // 2, len(data) + 1)])
            try:
                if raw.is_raw(path):
                    raw.read_reduced(path, ReadLimits(max_pixels=1_000_000), target_px=8)
            except (DamagedFile, UnsupportedFile, MissingFile):
                continue


def test_linear_light_from_a_light_is_the_spaces_white():
    np.testing.assert_allclose(linear_from_xy(D65_XY), 1, rtol=1e-6)


def test_paths_of_every_kind(sensor_file, tmp_path):
    path = sensor_file(tmp_path / "a.dng", patches(0.3))
    assert raw.read(str(path)).header.file == str(path) == raw.read(Path(path)).header.file
