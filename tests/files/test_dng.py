"""DNG copies with another as-shot neutral: LibRaw is the reader, tifffile looks at the tags.

Rules are those of the DNG specification 1.7.1, chapter 4, AsShotNeutral and AsShotWhiteXY.
"""

import hashlib

import numpy as np
import pytest
import rawpy
import tifffile

from grader.cast.correction import correction_matrix
from grader.colour.white import D65_XY, xy_from_cct_duv, xyz_from_xy
from grader.errors import MissingFile, UnsupportedFile, WriteFailed
from grader.files import dng, raw
from grader.files.metadata_tree import Structure
from grader.model import Correction

SENSOR_FROM_XYZ = np.array([[0.72, -0.21, -0.06], [-0.43, 1.22, 0.24], [-0.07, 0.19, 0.62]])
NEUTRAL, WHITE_XY = 50728, 50729


def greys_under(light_xy):
    """Return sensor light of a grey ramp under a light, by the specification's colour model."""
    response = SENSOR_FROM_XYZ @ xyz_from_xy(light_xy)
    levels = np.repeat([0.08, 0.25, 0.7], 40)[None, :, None]
    return np.broadcast_to(response / response.max() * levels, (80, 120, 3)).copy()


def large(picture):
    """Return the picture at a size that LibRaw demosaics with its own method for 6x6 filter arrays."""
    return np.kron(picture, np.ones((7, 5, 1)))


def neutrals_in(path, **options):
    """Return what LibRaw makes of the three greys, each relative to its green."""
    with rawpy.imread(str(path)) as file:
        pixels = file.postprocess(
            gamma=(1, 1),
            no_auto_bright=True,
            adjust_maximum_thr=0,
            output_bps=16,
            **(options or {"use_camera_wb": True}),
        )
    rows, columns = pixels.shape[0] // 8, pixels.shape[1] // 12
    means = [
        pixels[rows:-rows, x * columns : (x + 2) * columns].reshape(-1, 3).mean(axis=0) for x in (1, 5, 9)
    ]
    return np.array([m / m[1] for m in means])


def tags_of(path):
    """Return all tags of all directories with their values, as tifffile reads them."""
    with tifffile.TiffFile(path) as file:
        return {tag.code: (tag.dtype, tag.count, tag.value) for page in file.pages for tag in page.tags}


@pytest.mark.parametrize("byteorder", ["<", ">"])
@pytest.mark.parametrize("kind", ["rggb", "six", "linear"])
def test_the_copy_opens_neutral_and_differs_in_one_tag(sensor_file, tmp_path, kind, byteorder):
    light = xy_from_cct_duv(2950, 0.006)
    picture = large(greys_under(light)) if kind == "six" else greys_under(light)
    source = sensor_file(tmp_path / "a.dng", picture, kind=kind, byteorder=byteorder)
    before = source.read_bytes()
    written = dng.rewrite_raw(source, tmp_path / "b.dng", _correction(source, light))
    np.testing.assert_allclose(neutrals_in(tmp_path / "b.dng"), 1, atol=5e-3)
    assert np.abs(neutrals_in(source) - 1).max() > 0.1
    after = (tmp_path / "b.dng").read_bytes()
    assert source.read_bytes() == before
    assert len(after) == len(before)
    assert written.sha256 == hashlib.sha256(after).hexdigest()
    assert written.format == "dng"
    differing = {i for i, (x, y) in enumerate(zip(before, after, strict=True)) if x != y}
    place = _place(source, NEUTRAL)
    assert differing <= set(range(place.offset, place.offset + 24))
    old, new = tags_of(source), tags_of(tmp_path / "b.dng")
    assert {code for code in old if old[code] != new[code]} == {NEUTRAL}


def test_the_original_with_our_multipliers_is_neutral_too(sensor_file, tmp_path):
    light = xy_from_cct_duv(4200, 0.012)
    source = sensor_file(tmp_path / "a.dng", greys_under(light))
    m = raw.sensor_multipliers(raw.read_header(source), light)
    np.testing.assert_allclose(neutrals_in(source, user_wb=[*m, m[1]]), 1, atol=5e-3)


def test_what_is_kept_of_a_cast_is_kept_in_the_copy(sensor_file, tmp_path):
    """With a correction that goes to another white, the copy renders a neutral as the corrected pixels would."""
    light = xy_from_cct_duv(2950, 0.0)
    source = sensor_file(tmp_path / "a.dng", greys_under(light))
    correction = _correction(source, light, toward=xy_from_cct_duv(5000, 0.0))
    dng.rewrite_raw(source, tmp_path / "b.dng", correction)
    frame = raw.read(source)
    grey = frame.pixels[20:60, 50:70].reshape(-1, 3).mean(axis=0) @ correction.matrix.T
    copy = raw.read(tmp_path / "b.dng").pixels[20:60, 50:70].reshape(-1, 3).mean(axis=0)
    np.testing.assert_allclose(
        copy / copy[1], grey / grey[1], rtol=0.03
    )  # two models of adaptation meet here


def test_a_short_neutral_a_missing_one_and_a_white_point(sensor_file, tmp_path):
    light = xy_from_cct_duv(2950, 0.0)
    picture = greys_under(light)
    white = (WHITE_XY, 5, 2, [3457, 10000, 3585, 10000])
    cases = {
        "none": {"as_shot": None},
        "white": {"as_shot": None, "tags": [white]},
        "both": {"tags": [white]},
        "short": {"as_shot": None, "tags": [(NEUTRAL, "H", 3, (1, 2, 1))]},
        "tied": {"as_shot": (1.0, 1.0, 1.0), "tags": [(50727, 5, 3, [1_000_000, 1_000_000] * 3)]},
    }
    for name, options in cases.items():
        source = sensor_file(tmp_path / f"{name}.dng", picture, **options)
        target = tmp_path / f"{name}-copy.dng"
        dng.rewrite_raw(source, target, _correction(source, light))
        np.testing.assert_allclose(neutrals_in(target), 1, atol=5e-3, err_msg=name)
        old, new = tags_of(source), tags_of(target)
        assert WHITE_XY not in new
        assert new[NEUTRAL][:2] == (5, 3)
        assert {c for c in old | new if old.get(c) != new.get(c)} <= {NEUTRAL, WHITE_XY}, name
        with tifffile.TiffFile(source) as a, tifffile.TiffFile(target) as b:
            np.testing.assert_array_equal(a.asarray(), b.asarray())


def test_values_that_two_tags_share_are_not_patched_in_place(sensor_file, tmp_path):
    """Writers may store equal values once; changing one must not change the other."""
    light = xy_from_cct_duv(2950, 0.0)
    ones = [1_000_000, 1_000_000] * 3
    source = sensor_file(
        tmp_path / "a.dng", greys_under(light), as_shot=(1, 1, 1), tags=[(50727, 5, 3, ones)]
    )
    data = bytearray(source.read_bytes())
    shared, entry = _place(source, NEUTRAL).offset, _place(source, 50727).entry
    data[entry + 8 : entry + 12] = shared.to_bytes(4, "little")
    source.write_bytes(data)
    dng.rewrite_raw(source, tmp_path / "b.dng", _correction(source, light))
    new = tags_of(tmp_path / "b.dng")
    assert new[50727] == tags_of(source)[50727]
    assert new[NEUTRAL] != tags_of(source)[NEUTRAL]
    np.testing.assert_allclose(neutrals_in(tmp_path / "b.dng"), 1, atol=5e-3)


def test_an_analogue_balance_stays_in_the_neutral(sensor_file, tmp_path):
    light = xy_from_cct_duv(2950, 0.0)
    balance = [1_100_000, 1_000_000, 1_000_000, 1_000_000, 900_000, 1_000_000]
    source = sensor_file(tmp_path / "a.dng", greys_under(light), tags=[(50727, 5, 3, balance)])
    dng.rewrite_raw(source, tmp_path / "b.dng", _correction(source, light))
    header = raw.read_header(tmp_path / "b.dng")
    expected = 1 / raw.sensor_multipliers(raw.read_header(source), light)
    np.testing.assert_allclose(header.sensor.as_shot_neutral, expected, rtol=1e-3)


def test_what_cannot_be_copied_is_refused(sensor_file, tmp_path):
    light = xy_from_cct_duv(2950, 0.0)
    source = sensor_file(tmp_path / "a.dng", greys_under(light))
    correction = _correction(source, light)
    plain = tmp_path / "plain.tif"
    tifffile.imwrite(plain, np.zeros((40, 40, 3), np.uint16), photometric="rgb")
    with pytest.raises(UnsupportedFile, match="only a DNG"):
        dng.rewrite_raw(plain, tmp_path / "b.dng", correction)
    nothing = sensor_file(tmp_path / "m.dng", greys_under(light), matrix=None)
    with pytest.raises(UnsupportedFile, match="matrix"):
        dng.rewrite_raw(nothing, tmp_path / "b.dng", correction)
    with pytest.raises(MissingFile):
        dng.rewrite_raw(tmp_path / "no.dng", tmp_path / "b.dng", correction)
    with pytest.raises(WriteFailed, match="original"):
        dng.rewrite_raw(source, source, correction, overwrite=True)
    (tmp_path / "b.dng").write_bytes(b"already here")
    with pytest.raises(WriteFailed, match="exists"):
        dng.rewrite_raw(source, tmp_path / "b.dng", correction)
    assert (tmp_path / "b.dng").read_bytes() == b"already here"
    for bad in ((0.5, 0.0, 1.0), (np.nan, 1, 1), (np.inf, 1, 1), 0.5):
        with pytest.raises(ValueError, match="positive"):
            dng.rewrite_neutral(source, tmp_path / "c.dng", bad)
    assert not (tmp_path / "c.dng").exists()


def _correction(source, light, toward=D65_XY):
    return Correction(light, toward, correction_matrix(light, toward, raw.read_header(source)))


def _place(path, tag):
    with path.open("rb") as stream:
        structure = Structure(stream)
        return structure.directory(structure.first)[0][tag]
