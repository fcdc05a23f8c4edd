"""Profiles read and written: against LittleCMS, colour-science and the ICC specification."""

from __future__ import annotations

import io
import struct
from pathlib import Path

import colour
import imagecodecs
import numpy as np
import pytest
import tifffile
from PIL import ImageCms

from grader import files
from grader.colour import transfer
from grader.colour.spaces import SPACES
from grader.files import profile, profile_build
from grader.model import Curve, Output, Space
from tests.files import made_profiles as made
from tests.files.variants import picture

LITTLECMS_EXACT = 64 | 256  # no cache, no optimisation
NAMES = list(SPACES)


def by_littlecms(values: np.ndarray, icc: bytes) -> np.ndarray:
    """Return linear Rec.2020 of values (N, 3) or (N,), relative colorimetric, in floating point."""
    kind = "rgb" if values.ndim == 2 else "gray"
    return np.asarray(
        imagecodecs.cms_transform(
            np.ascontiguousarray(values[None], np.float32),
            icc,
            files.profile_bytes("linear Rec.2020"),
            colorspace=kind,
            planar=False,
            outcolorspace="rgb",
            outplanar=False,
            outdtype="float32",
            intent=1,
            flags=LITTLECMS_EXACT,
        )
    )[0]


def by_grader(values: np.ndarray, icc: bytes) -> np.ndarray:
    space = profile.space_from_parsed(profile.parse(icc), icc)
    light = np.stack([transfer.decode(space.curves[i], values[:, i]) for i in range(3)], axis=-1)
    return light @ space.rec2020_from_linear.T


def device_values(count: int = 400) -> np.ndarray:
    ramps = np.linspace(0, 1, 33)[:, None].repeat(3, axis=1)
    return np.concatenate([ramps, np.random.default_rng(4).random((count, 3))])


# --- written --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", NAMES)
def test_our_profiles_open_in_littlecms(name: str) -> None:
    opened = ImageCms.ImageCmsProfile(io.BytesIO(files.profile_bytes(name)))
    assert ImageCms.getProfileDescription(opened).strip() == name
    assert opened.profile.version == pytest.approx(4.4)
    assert opened.profile.is_matrix_shaper
    assert opened.profile.xcolor_space.strip() == "RGB"
    assert len(files.profile_bytes(name)) < 700


@pytest.mark.parametrize("name", NAMES)
def test_our_profiles_mean_the_published_spaces(name: str) -> None:
    """LittleCMS turns them into linear Rec.2020 as colour-science's matrices and curves do."""
    published = {
        "sRGB": "sRGB",
        "Display P3": "Display P3",
        "Rec.2020": "ITU-R BT.2020",
        "ROMM RGB": "ROMM RGB",
        "opRGB": "Adobe RGB (1998)",
        "linear Rec.2020": "ITU-R BT.2020",
        "linear Rec.709": "sRGB",
        "ACEScg": "ACEScg",
    }[name]
    values = device_values()
    theirs = colour.RGB_COLOURSPACES[published]
    wide = colour.RGB_COLOURSPACES["ITU-R BT.2020"]
    linear = values if name.startswith("linear") else theirs.cctf_decoding(values)
    expected = colour.RGB_to_RGB(linear, theirs, wide, chromatic_adaptation_transform="Bradford")
    tolerance = (
        4e-4 if name in ("ROMM RGB", "ACEScg", "opRGB", "sRGB", "linear Rec.709", "Rec.2020") else 1e-4
    )
    np.testing.assert_allclose(by_littlecms(values, files.profile_bytes(name)), expected, atol=tolerance)


@pytest.mark.parametrize("name", NAMES)
def test_our_profiles_come_back_as_the_same_space(name: str) -> None:
    icc = files.profile_bytes(name)
    space = profile.space_from_parsed(profile.parse(icc), icc)
    assert space.name == name
    assert space.icc == icc
    np.testing.assert_allclose(space.rec2020_from_linear, SPACES[name].rec2020_from_linear, atol=5e-5)
    np.testing.assert_allclose(space.rec2020_from_linear @ np.ones(3), 1, atol=1e-12)
    ramp = np.linspace(0, 1, 257)
    for mine, given in zip(space.curves, SPACES[name].curves, strict=True):
        np.testing.assert_allclose(transfer.decode(mine, ramp), transfer.decode(given, ramp), atol=3e-5)


def test_profiles_are_the_same_bytes_every_time() -> None:
    first = profile_build.build(SPACES["Display P3"])
    assert first == profile_build.build(SPACES["Display P3"]) == files.profile_bytes("display-p3")


def test_header_facts_of_the_icc_specification() -> None:
    """ICC.1:2022, 7.2: signature at 36, D50 (0.9642, 1, 0.8249) at 68, identity by MD5 at 84, length at 0."""
    icc = files.profile_bytes("ROMM RGB")
    assert struct.unpack_from(">I", icc)[0] == len(icc)
    assert icc[36:40] == b"acsp"
    assert struct.unpack_from(">3i", icc, 68) == (63190, 65536, 54061)  # 0.9642 and 0.8249 in s15Fixed16
    colorants = np.array(
        [struct.unpack_from(">3i", profile.parse(icc).tags[t], 8) for t in (b"rXYZ", b"gXYZ", b"bXYZ")]
    )
    assert tuple(colorants.sum(axis=0)) == (63190, 65536, 54061)
    import hashlib

    zeroed = icc[:44] + bytes(4) + icc[48:64] + bytes(4) + icc[68:84] + bytes(16) + icc[100:]
    assert icc[84:100] == hashlib.md5(zeroed).digest()


def test_an_own_space_gets_a_profile_of_its_own() -> None:
    curve = Curve(samples=np.linspace(0, 1, 100) ** 2)
    space = Space("mine", SPACES["opRGB"].rec2020_from_linear, (curve, curve, curve))
    icc = profile_build.build(space)
    again = profile.space_from_parsed(profile.parse(icc), icc)
    assert again.name == "mine"
    np.testing.assert_allclose(again.curves[1].samples, curve.samples, atol=1e-5)
    full = Curve(g=2.2, a=0.9, b=0.1, c=0.3, d=0.2, e=0.005, f=0.001)
    icc = profile_build.build(Space("seven numbers", np.eye(3), (full, full, full)))
    values = device_values()
    np.testing.assert_allclose(by_littlecms(values, icc), by_grader(values, icc), atol=5e-5)


def test_a_grey_profile_is_built_for_grey_pictures() -> None:
    icc = profile_build.build(SPACES["sRGB"], grey=True)
    opened = ImageCms.ImageCmsProfile(io.BytesIO(icc))
    assert opened.profile.xcolor_space.strip() == "GRAY"
    ramp = np.linspace(0, 1, 65)
    expected = transfer.decode(SPACES["sRGB"].curves[0], ramp)
    np.testing.assert_allclose(by_littlecms(ramp, icc), expected[:, None].repeat(3, axis=1), atol=5e-5)


# --- read -----------------------------------------------------------------------------------------------

OPRGB = np.array([[0.6097, 0.2053, 0.1492], [0.3111, 0.6257, 0.0632], [0.0195, 0.0609, 0.7446]])
"""Colorants at D50, rounded to four places; their sum is D50 within 1e-3, as in profiles at large."""
CURVES = {
    "identity": struct.pack(">4sII", b"curv", 0, 0),
    "gamma 1.8": made.gamma_curve(1.8),
    "gamma 2.2": made.gamma_curve(2.2),
    "table of 1024": made.table_curve(np.linspace(0, 1, 1024) ** 2.1),
    "table of 16": made.table_curve(np.linspace(0, 1, 16) ** 1.7),
    "table with a flat foot": made.table_curve(np.maximum(np.linspace(0, 1, 256) - 0.02, 0) ** 2 / 0.98**2),
    "parametric 0": made.parametric_curve(0, 2.4),
    "parametric 1": made.parametric_curve(1, 2.2, 0.95, 0.05),
    "parametric 2": made.parametric_curve(2, 2.2, 0.9, 0.05, 0.02),
    "parametric 3": made.parametric_curve(3, 2.4, 1 / 1.055, 0.055 / 1.055, 1 / 12.92, 0.04045),
    "parametric 4": made.parametric_curve(4, 2.4, 0.94, 0.05, 0.08, 0.04, 0.01, 0.002),
}


@pytest.mark.parametrize("version", [2, 4])
@pytest.mark.parametrize("kind", CURVES)
def test_matrix_profiles_mean_what_littlecms_says(kind: str, version: int) -> None:
    icc = made.matrix_profile(OPRGB, (CURVES[kind],) * 3, version=version)
    values = device_values()
    np.testing.assert_allclose(by_grader(values, icc), by_littlecms(values, icc), atol=8e-4)
    neutral = by_grader(np.ones((1, 3)), made.matrix_profile(OPRGB, (CURVES["gamma 2.2"],) * 3))
    np.testing.assert_allclose(neutral, 1, atol=1e-12)


def test_three_different_curves() -> None:
    icc = made.matrix_profile(OPRGB, (CURVES["gamma 1.8"], CURVES["table of 16"], CURVES["parametric 3"]))
    values = device_values()
    np.testing.assert_allclose(by_grader(values, icc), by_littlecms(values, icc), atol=8e-4)


@pytest.mark.parametrize("kind", ["gamma 2.2", "table of 1024", "parametric 3"])
@pytest.mark.parametrize("connection", [b"XYZ ", b"Lab "])
def test_grey_profiles_mean_what_littlecms_says(kind: str, connection: bytes) -> None:
    icc = made.grey_profile(CURVES[kind], connection=connection)
    ramp = np.linspace(0, 1, 65)
    mine = by_grader(ramp[:, None].repeat(3, axis=1), icc)
    np.testing.assert_allclose(mine, by_littlecms(ramp, icc), atol=3e-4)
    np.testing.assert_allclose(mine[:, 0], mine[:, 2], atol=1e-12)


def test_a_profile_of_littlecms_itself_is_srgb() -> None:
    icc = imagecodecs.cms_profile("srgb")
    assert profile.space_from_parsed(profile.parse(icc), icc).name == "sRGB"
    icc = ImageCms.ImageCmsProfile(ImageCms.createProfile("sRGB")).tobytes()
    assert profile.space_from_parsed(profile.parse(icc), icc).name == "sRGB"


# --- in files -------------------------------------------------------------------------------------------


def tagged(folder: Path, icc: bytes, data: np.ndarray | None = None) -> Path:
    path = folder / "tagged.tif"
    data = picture(16) if data is None else data
    photometric = "rgb" if data.ndim == 3 else "minisblack"
    tifffile.imwrite(path, data, photometric=photometric, iccprofile=icc, metadata=None)
    return path


@pytest.mark.parametrize("suffix", [".tif", ".png", ".jpg"])
def test_an_embedded_profile_is_kept_byte_for_byte(suffix: str, tmp_path: Path) -> None:
    icc = made.matrix_profile(OPRGB, (CURVES["table of 1024"],) * 3)
    frame = files.read(tagged(tmp_path, icc))
    assert not frame.header.flags
    assert frame.space.name == "made for a test"
    files.write(frame, tmp_path / f"out{suffix}")
    assert files.read(tmp_path / f"out{suffix}").space.icc == icc


def test_a_known_space_is_called_by_its_name(tmp_path: Path) -> None:
    frame = files.read(tagged(tmp_path, files.profile_bytes("Rec.2020")))
    assert frame.space.name == "Rec.2020"


@pytest.mark.parametrize("connection", [b"XYZ ", b"Lab "])
def test_grey_pictures_keep_their_grey_profile(connection: bytes, tmp_path: Path) -> None:
    icc = made.grey_profile(CURVES["gamma 1.8"], connection=connection)
    frame = files.read(tagged(tmp_path, icc, picture(16, 1)[..., 0]))
    files.write(frame, tmp_path / "out.tif")
    again = files.read(tmp_path / "out.tif")
    assert again.space.icc == icc
    assert again.encoding["kind"] == "grey"


def test_a_grey_picture_that_became_coloured_gets_a_colour_profile(tmp_path: Path) -> None:
    from dataclasses import replace

    frame = files.read(tagged(tmp_path, made.grey_profile(CURVES["gamma 1.8"]), picture(16, 1)[..., 0]))
    toned = frame.pixels.copy()
    toned[..., 2] //= 2
    files.write(replace(frame, pixels=toned), tmp_path / "out.tif")
    again = files.read(tmp_path / "out.tif")
    assert again.encoding["kind"] == "rgb"
    assert again.space.icc[16:20] == b"RGB "
    np.testing.assert_array_equal(again.pixels, toned)
    ramp = np.linspace(0, 1, 17)
    np.testing.assert_allclose(transfer.decode(again.space.curves[0], ramp), ramp ** (461 / 256), atol=2e-5)


def test_a_grey_picture_may_carry_a_colour_profile(tmp_path: Path) -> None:
    frame = files.read(tagged(tmp_path, files.profile_bytes("opRGB"), picture(8, 1)[..., 0]))
    assert frame.header.flags == ("grey",)
    assert frame.space.name == "opRGB"


BROKEN = {
    "cut short": files.profile_bytes("sRGB")[:300],
    "not a profile": b"profile" * 100,
    "for inks": made.table_profile(b"CMYK", made.lab_of_inks),
    "without curves": made.assemble({b"desc": made.desc("x")}, b"RGB ", connection=b"XYZ ", kind=b"mntr"),
    "of one primary": made.matrix_profile(np.ones((3, 3)) / 3, (CURVES["gamma 2.2"],) * 3),
    "with a falling curve": made.matrix_profile(OPRGB, (made.table_curve(np.linspace(1, 0, 64)),) * 3),
    "with an absurd curve": made.matrix_profile(OPRGB, (made.parametric_curve(0, 0.0),) * 3),
}


@pytest.mark.parametrize("kind", BROKEN)
def test_a_broken_profile_is_replaced_and_told(kind: str, tmp_path: Path) -> None:
    frame = files.read(tagged(tmp_path, BROKEN[kind], picture(8)))
    assert frame.header.flags == ("profile-broken",)
    assert frame.space.name == "sRGB"
    assert "cannot be used" in frame.header.notes[0]
    files.write(frame, tmp_path / "out.tif")
    assert not files.read(tmp_path / "out.tif").header.flags


def test_a_table_that_says_what_the_matrix_says_changes_nothing(tmp_path: Path) -> None:
    """Some profiles hold both; the pixels can then stay as they are."""
    matrix = profile.parse(files.profile_bytes("sRGB"))

    def lab_of_srgb(device: np.ndarray) -> np.ndarray:
        xyz = colour.sRGB_to_XYZ(device)
        d65, d50 = colour.sRGB_to_XYZ(np.ones(3)), np.array(made.D50)
        adapted = colour.chromatic_adaptation(xyz, d65, d50, transform="Bradford")
        return colour.XYZ_to_Lab(adapted, colour.XYZ_to_xy(d50))

    more = {
        name.decode(): matrix.tags[name] for name in (b"rXYZ", b"gXYZ", b"bXYZ", b"rTRC", b"gTRC", b"bTRC")
    }
    icc = made.table_profile(b"RGB ", lab_of_srgb, steps=33, **more)
    frame = files.read(tagged(tmp_path, icc, picture(8)))
    assert not frame.header.flags
    np.testing.assert_array_equal(frame.pixels, picture(8))
    other = made.table_profile(b"RGB ", made.lab_of_rgb, **more)
    assert files.read(tagged(tmp_path, other, picture(8))).header.flags == ("converted",)


def test_the_profile_of_the_output_space_is_embedded(tmp_path: Path) -> None:
    from dataclasses import replace

    frame = files.read(tagged(tmp_path, files.profile_bytes("sRGB")))
    graded = replace(frame, space=SPACES["Display P3"])
    for suffix in (".tif", ".png", ".jpg"):
        written = files.write(graded, tmp_path / f"out{suffix}", Output(space="Display P3"))
        assert written.space == "Display P3"
        assert files.read(tmp_path / f"out{suffix}").space.icc == files.profile_bytes("Display P3")
