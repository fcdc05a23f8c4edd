"""Every kind of file in the matrix: read right, agreed on by other readers, written back as it was."""

from __future__ import annotations

import io
from pathlib import Path

import imagecodecs
import numpy as np
import pytest
import tifffile
from PIL import Image, ImageCms

from grader import files, pixels
from grader.colour import transfer
from grader.colour.spaces import SPACES
from grader.errors import UnsupportedFile
from grader.model import Correction, Frame, Output
from tests.files import made_profiles
from tests.files.variants import WIDTH, Variant, all_variants, lab_picture, picture, smooth

VARIANTS = all_variants()
READ = [v for v in VARIANTS if v.fate != "refused"]


def named(variants: list[Variant]) -> pytest.MarkDecorator:
    return pytest.mark.parametrize("variant", variants, ids=[v.name for v in variants])


def stored(variant: Variant, folder: Path) -> Path:
    path = folder / f"frame{variant.suffix}"
    path.write_bytes(variant.make())
    return path


def test_the_matrix_is_large_and_its_names_are_unique() -> None:
    assert len(READ) >= 150
    assert len({v.name for v in VARIANTS}) == len(VARIANTS)


@named(READ)
def test_reads_what_went_in(variant: Variant, tmp_path: Path) -> None:
    frame = files.read(stored(variant, tmp_path))
    assert ("grey" in frame.header.flags) == (frame.encoding["kind"] == "grey")
    told = set(frame.header.flags) - {"grey"}
    assert set(variant.flags) <= told <= {*variant.flags, "profile-assumed"}
    assert len(frame.header.notes) >= len(told)
    assert (frame.header.height_px, frame.header.width_px) == frame.pixels.shape[:2]
    if variant.expected is not None:
        assert frame.pixels.dtype == variant.expected.dtype
        np.testing.assert_array_equal(frame.pixels, variant.expected)
    assert (frame.alpha is None) == (variant.alpha is None)
    if variant.alpha is not None:
        np.testing.assert_array_equal(frame.alpha, variant.alpha)


@named([v for v in VARIANTS if v.fate == "refused"])
def test_refuses_with_a_reason_and_a_way_out(variant: Variant, tmp_path: Path) -> None:
    with pytest.raises(UnsupportedFile) as refusal:
        files.read(stored(variant, tmp_path))
    assert refusal.value.hint
    assert str(refusal.value).startswith(str(tmp_path))


@named([v for v in READ if v.fate == "kept" and v.suffix != ".jpg"])
def test_identity_gives_the_same_file_kind_and_samples(variant: Variant, tmp_path: Path) -> None:
    source = stored(variant, tmp_path)
    frame = files.read(source)
    target = tmp_path / f"out{variant.suffix}"
    files.write(frame, target)
    again = files.read(target)
    assert again.pixels.dtype == frame.pixels.dtype
    np.testing.assert_array_equal(again.pixels, frame.pixels)
    if frame.alpha is not None:
        np.testing.assert_array_equal(again.alpha, frame.alpha)
    assert again.space.name == frame.space.name
    for key, value in variant.facts.items():
        assert again.encoding[key] == value, key
    for key in (
        "kind",
        "bits",
        "sample",
        "byteorder",
        "bigtiff",
        "planar",
        "resolution",
        "tile",
        "rows_per_strip",
    ):
        assert again.encoding.get(key) == frame.encoding.get(key), key


@named(
    [
        v
        for v in READ
        if v.fate == "kept" and v.suffix == ".tif" and "luma" not in v.name and "JPEG " not in v.name
    ]
)
def test_a_written_tiff_stores_the_very_same_samples(variant: Variant, tmp_path: Path) -> None:
    """tifffile reads both files; what it finds is not what grader makes of it."""
    source = stored(variant, tmp_path)
    frame = files.read(source)
    files.write(frame, tmp_path / "out.tif")
    with tifffile.TiffFile(source) as before, tifffile.TiffFile(tmp_path / "out.tif") as after:
        pages = [p for page in before.pages for p in (page, *(page.pages or ()))]
        old = max(pages, key=lambda p: p.imagewidth)
        new = after.pages[0]
        assert new.bitspersample == old.bitspersample
        assert new.photometric == (old.photometric if 262 in old.tags else 2)
        if old.sampleformat == 3 or old.bitspersample > 24:
            np.testing.assert_allclose(new.asarray().astype(float), old.asarray().astype(float), rtol=2e-7)
        else:
            np.testing.assert_array_equal(new.asarray(), old.asarray())


@named(READ)
def test_an_identity_correction_returns_the_source_pixels(variant: Variant, tmp_path: Path) -> None:
    frame = files.read(stored(variant, tmp_path))
    nothing = Correction(from_xy=None, toward_xy=(0.3127, 0.329), matrix=np.eye(3))
    graded, counts = pixels.correct(frame, nothing)
    np.testing.assert_array_equal(graded.pixels, frame.pixels)
    assert counts.clipped_fraction == counts.out_of_gamut_fraction == 0
    target = tmp_path / f"out{variant.suffix}"
    written = files.write(graded, target, correction=nothing)
    if variant.suffix != ".jpg":
        np.testing.assert_array_equal(files.read(target).pixels, frame.pixels)
    assert written.space == frame.space.name


# --- other readers --------------------------------------------------------------------------------------


def by_libtiff(data: bytes) -> np.ndarray:
    return np.asarray(imagecodecs.tiff_decode(data))


LIBTIFF_CANNOT = (
    "packed",
    "24 bit",
    "float16",
    "16 bit float",
    "preview",
    "sub-picture",
    "JPEG",
    "PNG",
    "luma",
    "WebP",
    "LERC",
)


@named(
    [
        v
        for v in READ
        if v.suffix == ".tif" and v.fate == "kept" and not any(w in v.name for w in LIBTIFF_CANNOT)
    ]
)
def test_libtiff_agrees(variant: Variant, tmp_path: Path) -> None:
    """libtiff (4.7, through imagecodecs) is an implementation of its own."""
    frame = files.read(stored(variant, tmp_path))
    other = by_libtiff(variant.make())
    other = np.moveaxis(other, 0, -1) if frame.encoding["planar"] and other.ndim == 3 else other
    other = other[..., None] if other.ndim == 2 else other
    if frame.encoding["alpha" if "alpha" in frame.encoding else "kind"] == "associated":
        pytest.skip("libtiff gives the stored, multiplied colours")
    colours = 1 if frame.encoding["kind"] == "grey" else 3
    if frame.encoding["min_is_white"]:
        other = np.iinfo(other.dtype).max - other
    if frame.encoding["bits"] == 32 and frame.encoding["sample"] == "uint":
        other = other / (2.0**32 - 1)
    np.testing.assert_allclose(
        frame.pixels[..., :colours], other[..., :colours], atol=0 if other.dtype.kind == "u" else 1e-7
    )


@named(
    [
        v
        for v in READ
        if "luma" in v.name
        or (
            "JPEG " in v.name and v.suffix == ".tif" and "JPEG 2000" not in v.name and "JPEG XL" not in v.name
        )
    ]
)
def test_libtiff_agrees_on_luma_and_chroma(variant: Variant, tmp_path: Path) -> None:
    """Its conversion to RGB, in integers, within one code value."""
    frame = files.read(stored(variant, tmp_path))
    other = np.asarray(imagecodecs.tiff_decode(variant.make(), asrgb=True))[..., :3]
    whole = WIDTH // 4 * 4 if "4x4" in variant.name else WIDTH  # libtiff misplaces the rest of such rows
    within = np.abs(frame.pixels.astype(int) - other)[:, :whole]
    assert np.count_nonzero(within > 1) <= (0.02 * within.size if "4:2:0" in variant.name else 0)


@named([v for v in READ if v.suffix == ".png"])
def test_another_png_reader_agrees(variant: Variant, tmp_path: Path) -> None:
    """Pillow's own reader (of 16 bits in colour it keeps the upper 8), libpng for what we read with Pillow."""
    frame = files.read(stored(variant, tmp_path))
    by_pillow = any(word in variant.name for word in ("palette", "2 bit", "4 bit", "animated"))
    if by_pillow:
        other = np.asarray(imagecodecs.png_decode(variant.make()))
    else:
        other = np.asarray(Image.open(io.BytesIO(variant.make())))
    mine = frame.pixels >> 8 if (frame.pixels.dtype, other.dtype) == (np.uint16, np.uint8) else frame.pixels
    other = other[..., None] if other.ndim == 2 else other
    colours = 1 if other.shape[2] < 3 else 3
    np.testing.assert_array_equal(mine[..., :colours], other[..., :colours])
    if frame.alpha is not None and other.shape[2] in (2, 4) and other.dtype == frame.alpha.dtype:
        np.testing.assert_array_equal(frame.alpha, other[..., -1])


@named([v for v in READ if v.suffix == ".jpg" and v.fate == "kept"])
def test_another_jpeg_reader_agrees(variant: Variant, tmp_path: Path) -> None:
    """Pillow, within one code value."""
    frame = files.read(stored(variant, tmp_path))
    other = np.asarray(Image.open(io.BytesIO(variant.make())))
    other = other[..., None] if other.ndim == 2 else other
    assert np.abs(frame.pixels.astype(int) - other).max() <= 1


@named([v for v in READ if v.suffix == ".jpg" and v.fate == "kept"])
def test_a_written_jpeg_is_at_least_as_fine(variant: Variant, tmp_path: Path) -> None:
    source = stored(variant, tmp_path)
    frame = files.read(source)
    files.write(frame, tmp_path / "out.jpg")
    before, after = frame.encoding, files.read(tmp_path / "out.jpg").encoding
    assert after["progressive"] == before["progressive"]
    assert len(after["quantisation"]) == len(before["quantisation"])
    for old, new in zip(before["quantisation"], after["quantisation"], strict=True):
        assert np.all(np.asarray(new) <= np.asarray(old))
    assert after["stored_rgb"] == before["stored_rgb"]
    if before["sampling"] in (((1, 1),) * 3, ((2, 1), (1, 1), (1, 1)), ((2, 2), (1, 1), (1, 1))):
        assert after["sampling"] == before["sampling"]
        assert after["quantisation"] == before["quantisation"]
    again = files.read(tmp_path / "out.jpg")
    assert np.abs(frame.pixels.astype(int) - again.pixels).mean() < 1.5


# --- conversions ----------------------------------------------------------------------------------------


RELATIVE = ImageCms.Intent.RELATIVE_COLORIMETRIC
EVERY_VALUE = ImageCms.Flags.NOOPTIMIZE | ImageCms.Flags.NOCACHE
"""Else LittleCMS interpolates in a table that it makes for speed: off by up to 8 code values here."""


def to_srgb_8(frame: Frame) -> np.ndarray:
    """Return 8-bit sRGB of a frame, by the published matrices, clipped."""
    top = np.iinfo(frame.pixels.dtype).max
    light = transfer.decode(frame.space.curves[0], frame.pixels / top) @ frame.space.rec2020_from_linear.T
    linear = light @ np.linalg.inv(SPACES["sRGB"].rec2020_from_linear).T
    return np.round(transfer.encode(SPACES["sRGB"].curves[0], np.clip(linear, 0, 1)) * 255).astype(int)


def in_gamut(frame: Frame) -> np.ndarray:
    top = np.iinfo(frame.pixels.dtype).max
    light = transfer.decode(frame.space.curves[0], frame.pixels / top)
    linear = light @ np.linalg.inv(SPACES["sRGB"].rec2020_from_linear).T
    inside = (linear > 0.001) & (linear < 0.999)
    return inside.all(axis=2) & (frame.pixels.min(axis=2) > 0) & (frame.pixels.max(axis=2) < top)


@pytest.mark.parametrize("suffix", [".tif", ".jpg"])
def test_inks_agree_with_littlecms_at_8_bits(suffix: str, tmp_path: Path) -> None:
    """Pillow's ImageCms (another build of LittleCMS, 8 bits, relative colorimetric) within one code value."""
    profile = made_profiles.table_profile(b"CMYK", made_profiles.lab_of_inks)
    name = "tiff 8 bit CMYK" if suffix == ".tif" else "jpeg CMYK with a profile"
    variant = next(v for v in READ if v.name == name)
    frame = files.read(stored(variant, tmp_path))
    if suffix == ".tif":
        inks = Image.frombytes("CMYK", frame.pixels.shape[1::-1], picture(8, 4).tobytes())
    else:
        inks = Image.open(io.BytesIO(variant.make()))
    source = ImageCms.ImageCmsProfile(io.BytesIO(profile))
    other = ImageCms.profileToProfile(
        inks, source, ImageCms.createProfile("sRGB"), RELATIVE, "RGB", flags=EVERY_VALUE
    )
    inside = in_gamut(frame)
    assert inside.mean() > 0.2
    difference = np.abs(to_srgb_8(frame) - np.asarray(other).astype(int))[inside]
    assert difference.max() <= 1


def test_a_table_profile_agrees_with_littlecms_at_8_bits(tmp_path: Path) -> None:
    variant = next(v for v in READ if v.name == "tiff 8 bit table profile")
    frame = files.read(stored(variant, tmp_path))
    profile = made_profiles.table_profile(b"RGB ", made_profiles.lab_of_rgb)
    source = ImageCms.ImageCmsProfile(io.BytesIO(profile))
    other = ImageCms.profileToProfile(
        Image.fromarray(picture(8)),
        source,
        ImageCms.createProfile("sRGB"),
        RELATIVE,
        "RGB",
        flags=EVERY_VALUE,
    )
    inside = in_gamut(frame)
    assert inside.mean() > 0.2
    assert np.abs(to_srgb_8(frame) - np.asarray(other).astype(int))[inside].max() <= 1


@pytest.mark.parametrize("kind", ["CIELAB", "ICC Lab"])
@pytest.mark.parametrize("bits", [8, 16])
def test_lab_agrees_with_colour_science(kind: str, bits: int, tmp_path: Path) -> None:
    """The inverse of CIE 1976 L*a*b* as colour-science has it, relative to D50, adapted by its Bradford matrix."""
    import colour

    frame = files.read(stored(next(v for v in READ if v.name == f"tiff {bits} bit {kind}"), tmp_path))
    d50 = np.array([0.9642, 1.0, 0.8249])
    white = (
        colour.xy_to_xy(colour.CCS_ILLUMINANTS["cie_2_1931"]["D65"]) if hasattr(colour, "xy_to_xy") else None
    )
    white = colour.CCS_ILLUMINANTS["CIE 1931 2 Degree Standard Observer"]["D65"] if white is None else white
    xyz = colour.Lab_to_XYZ(lab_picture(), colour.XYZ_to_xy(d50))
    xyz = colour.chromatic_adaptation(xyz, d50, colour.xy_to_XYZ(white), transform="Bradford")
    linear = xyz @ np.linalg.inv(colour.RGB_COLOURSPACES["ITU-R BT.2020"].matrix_RGB_to_XYZ).T
    inside = ((linear > 0) & (linear < 1)).all(axis=2)
    mine = transfer.decode(SPACES["Rec.2020"].curves[0], frame.pixels / 65535)
    assert np.abs(mine - linear)[inside].max() < (0.02 if bits == 8 else 2e-4)


@pytest.mark.parametrize(
    "name", ["tiff palette none", "png 8 bit palette", "tiff 16 bit CMYK", "jpeg CMYK", "jpeg YCCK"]
)
def test_converted_kinds_are_written_as_rgb(name: str, tmp_path: Path) -> None:
    variant = next(v for v in READ if v.name == name)
    frame = files.read(stored(variant, tmp_path))
    target = tmp_path / f"out{variant.suffix}"
    files.write(frame, target, Output())
    again = files.read(target)
    assert again.encoding["kind"] == "rgb"
    assert "converted" not in again.header.flags
    if variant.suffix != ".jpg":
        np.testing.assert_array_equal(again.pixels, frame.pixels)
    assert again.space.name == frame.space.name


def test_ycck_is_read_like_cmyk(tmp_path: Path) -> None:
    """Both store the same inks; luma, chroma and rounding lie between."""
    plain, luma = (
        files.read(stored(next(v for v in READ if v.name == f"jpeg {k}"), tmp_path)) for k in ("CMYK", "YCCK")
    )
    assert np.abs(plain.pixels.astype(int) - luma.pixels).mean() / 257 < 4
    inks = smooth(4) / 255.0
    ideal = (1 - inks[..., :3]) * (1 - inks[..., 3:])
    assert np.abs(plain.pixels / 65535 - ideal).mean() < 0.02
