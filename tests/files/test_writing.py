"""Writing: whole or not at all, with the cause; beside other readers."""

from __future__ import annotations

import errno
import hashlib
import os
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import tifffile
from PIL import Image

from grader import files
from grader.colour.frames import frame_from_array
from grader.errors import PresetError, WriteFailed
from grader.files import writing
from grader.model import Frame, Header, Output
from tests.files.variants import picture, smooth


@pytest.fixture
def frame() -> Frame:
    return frame_from_array(picture(16), space="Rec.2020", linear=False, referred="display")


def leftovers(folder: Path) -> list[str]:
    return sorted(p.name for p in folder.iterdir() if p.name.startswith("."))


def test_what_is_told_of_the_output_is_true(frame: Frame, tmp_path: Path) -> None:
    for suffix, kind in ((".tif", "tiff"), (".png", "png"), (".jpg", "jpeg")):
        target = tmp_path / f"out{suffix}"
        written = files.write(frame, target)
        data = target.read_bytes()
        assert (written.file, written.format, written.space) == (str(target), kind, "Rec.2020")
        assert written.bytes == len(data)
        assert written.sha256 == hashlib.sha256(data).hexdigest()
        assert files.read(target).header.sha256 == written.sha256
    assert not leftovers(tmp_path)


def test_the_same_frame_gives_the_same_bytes(frame: Frame, tmp_path: Path) -> None:
    for suffix in (".tif", ".png", ".jpg"):
        digests = {files.write(frame, tmp_path / f"{i}{suffix}").sha256 for i in range(2)}
        assert len(digests) == 1


def test_the_umask_decides_who_may_read(frame: Frame, tmp_path: Path) -> None:
    before = os.umask(0o027)
    try:
        files.write(frame, tmp_path / "out.tif")
    finally:
        os.umask(before)
    assert (tmp_path / "out.tif").stat().st_mode & 0o777 == 0o640


def test_an_existing_file_stays_unless_told(frame: Frame, tmp_path: Path) -> None:
    target = tmp_path / "out.tif"
    target.write_text("mine")
    with pytest.raises(WriteFailed, match="exists") as refusal:
        files.write(frame, target)
    assert refusal.value.path == str(target)
    assert target.read_text() == "mine"
    files.write(frame, target, overwrite=True)
    assert files.read(target).pixels.dtype == np.uint16


def test_a_name_taken_in_the_meantime_stays(
    frame: Frame, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    target = tmp_path / "out.tif"
    monkeypatch.setattr(writing, "_check_target", lambda *_, **__: target.write_text("mine"))
    with pytest.raises(WriteFailed, match="exists"):
        files.write(frame, target)
    assert target.read_text() == "mine"
    assert not leftovers(tmp_path)


def test_without_links_the_name_is_reserved(
    frame: Frame, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def no_links(*_: object) -> None:
        raise OSError(errno.EPERM, "no links on this file system")

    monkeypatch.setattr(os, "link", no_links)
    files.write(frame, tmp_path / "out.tif")
    assert files.read(tmp_path / "out.tif").pixels.shape == frame.pixels.shape
    with pytest.raises(WriteFailed, match="exists"):
        files.write(frame, tmp_path / "out.tif")


def test_the_original_is_never_replaced(tmp_path: Path) -> None:
    source = tmp_path / "frame.tif"
    tifffile.imwrite(source, picture(8), photometric="rgb")
    before = source.read_bytes()
    frame = files.read(source)
    (tmp_path / "link.tif").symlink_to(source)
    for target in (source, tmp_path / "link.tif"):
        with pytest.raises(WriteFailed, match="original"):
            files.write(frame, target, overwrite=True)
    assert source.read_bytes() == before


@pytest.mark.parametrize(
    ("number", "words"),
    [
        (errno.ENOSPC, "disk is full"),
        (errno.EDQUOT, "quota"),
        (errno.EROFS, "read-only"),
        (errno.EIO, "write error"),
        (errno.EFBIG, "larger than"),
        (errno.ENXIO, "cannot be written"),
    ],
)
@pytest.mark.parametrize("call", ["fsync", "open"])
def test_causes_in_words_and_nothing_left_behind(
    number: int, words: str, call: str, frame: Frame, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def fails(*_: object, **__: object) -> None:
        raise OSError(number, os.strerror(number))

    with monkeypatch.context() as patch:
        patch.setattr(os, call, fails)
        with pytest.raises(WriteFailed, match=words) as failure:
            files.write(frame, tmp_path / "out.tif")
    assert failure.value.path == str(tmp_path / "out.tif")
    assert list(tmp_path.iterdir()) == []


def test_a_full_disk_while_encoding(frame: Frame, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def fails(*_: object, **__: object) -> None:
        raise OSError(errno.ENOSPC, "full")

    monkeypatch.setattr(tifffile.TiffWriter, "write", fails)
    with pytest.raises(WriteFailed, match="disk is full"):
        files.write(frame, tmp_path / "out.tif")
    assert list(tmp_path.iterdir()) == []


def test_places_that_cannot_be_written(frame: Frame, tmp_path: Path) -> None:
    with pytest.raises(WriteFailed, match="folder is not there"):
        files.write(frame, tmp_path / "nowhere" / "out.tif")
    with pytest.raises(WriteFailed, match="too long"):
        files.write(frame, tmp_path / ("n" * 300 + ".tif"))
    (tmp_path / "taken.tif").mkdir()
    with pytest.raises(WriteFailed, match="folder of that name"):
        files.write(frame, tmp_path / "taken.tif", overwrite=True)
    (tmp_path / "file").write_text("")
    with pytest.raises(WriteFailed):
        files.write(frame, tmp_path / "file" / "out.tif")
    with pytest.raises(PresetError):
        files.write(frame, tmp_path / "out.dng", Output(format="dng"))
    assert sorted(p.name for p in tmp_path.iterdir()) == ["file", "taken.tif"]


def test_a_long_but_legal_name(frame: Frame, tmp_path: Path) -> None:
    name = "n" * 251 + ".tif"
    files.write(frame, tmp_path / name)
    assert (tmp_path / name).exists()


# --- formats and suffixes -------------------------------------------------------------------------------


def test_suffixes() -> None:
    for file, format_, output, suffix in (
        ("a.TIFF", "tiff", Output(), ".TIFF"),
        ("a.dat", "tiff", Output(), ".tif"),
        ("a.jpeg", "jpeg", Output(), ".jpeg"),
        ("a.dng", "raw", Output(), ".tif"),
        ("a.dng", "raw", Output(format="jpeg"), ".jpg"),
        ("a.dng", "raw", Output(format="dng"), ".dng"),
        ("a.JPG", "jpeg", Output(format="png"), ".png"),
        (None, "array", Output(), ".tif"),
    ):
        assert files.suffix_for(Header(file=file, format=format_), output) == suffix


def test_the_suffix_decides_for_the_format_same_and_the_format_else(frame: Frame, tmp_path: Path) -> None:
    assert files.write(frame, tmp_path / "a.png").format == "png"
    assert files.write(frame, tmp_path / "a.xyz").format == "tiff"
    assert files.write(frame, tmp_path / "b.png", Output(format="jpeg")).format == "jpeg"


def test_a_raw_frame_becomes_a_16_bit_tiff(tmp_path: Path) -> None:
    frame = frame_from_array(picture(16), space="ROMM RGB", linear=False, referred="scene")
    frame = replace(frame, header=replace(frame.header, file="a.dng", format="raw"))
    files.write(frame, tmp_path / "a.tif")
    with tifffile.TiffFile(tmp_path / "a.tif") as tif:
        page = tif.pages[0]
        assert (page.bitspersample, page.compression, page.predictor) == (16, 8, 2)
        np.testing.assert_array_equal(page.asarray(), frame.pixels)
        assert bytes(page.iccprofile) == files.profile_bytes("ROMM RGB")


def test_sixteen_bits_are_rounded_to_eight(tmp_path: Path) -> None:
    """To the nearest, as Rec. ITU-R BT.2100 note 5f rounds; not cut off."""
    values = np.arange(65536, dtype=np.uint16).reshape(256, 256)
    frame = frame_from_array(np.dstack([values] * 3), space="sRGB", linear=False, referred="display")
    files.write(frame, tmp_path / "a.jpg")
    from grader.files.raster_depth import to_eight_bits

    exact = np.floor(values / 65535 * 255 + 0.5).astype(np.uint8)
    np.testing.assert_array_equal(to_eight_bits(values), exact)
    with Image.open(tmp_path / "a.jpg") as image:
        assert np.abs(np.asarray(image.convert("L")).astype(int) - exact).mean() < 1


def test_floats_become_integers_where_the_format_has_none(tmp_path: Path) -> None:
    light = np.array([[[-0.1, 0.5, 1.7], [np.nan, 0.0, 1.0]]], np.float32)
    frame = frame_from_array(light, space="sRGB", linear=False, referred="display")
    files.write(frame, tmp_path / "a.png")
    expected = [[[0, 32768, 65535], [0, 0, 65535]]]
    np.testing.assert_array_equal(files.read(tmp_path / "a.png").pixels, expected)
    files.write(frame, tmp_path / "a.tif")
    np.testing.assert_array_equal(files.read(tmp_path / "a.tif").pixels, light)


def test_alpha_goes_where_the_format_has_it(tmp_path: Path) -> None:
    source = tmp_path / "alpha.tif"
    alpha = picture(16, 4)[..., 3]
    tifffile.imwrite(source, np.dstack([picture(16), alpha]), photometric="rgb", extrasamples=["unassalpha"])
    frame = files.read(source)
    files.write(frame, tmp_path / "a.png")
    np.testing.assert_array_equal(files.read(tmp_path / "a.png").alpha, alpha)
    written = files.write(frame, tmp_path / "a.jpg")
    assert "alpha" in " ".join(written.notes)


def test_resolution_goes_along_between_formats(tmp_path: Path) -> None:
    source = tmp_path / "a.tif"
    tifffile.imwrite(source, smooth(), photometric="rgb", resolution=(300, 300), resolutionunit=2)
    frame = files.read(source)
    files.write(frame, tmp_path / "a.jpg")
    files.write(frame, tmp_path / "a.png")
    assert dpi(tmp_path / "a.jpg") == (300, 300)
    assert dpi(tmp_path / "a.png") == pytest.approx((300, 300), abs=0.1)
    files.write(files.read(tmp_path / "a.jpg"), tmp_path / "b.tif")
    assert dpi(tmp_path / "b.tif") == (300, 300)
    files.write(files.read(tmp_path / "a.png"), tmp_path / "c.jpg")
    assert dpi(tmp_path / "c.jpg") == pytest.approx((300, 300), abs=1)


def dpi(path: Path) -> tuple[float, float]:
    with Image.open(path) as image:
        return image.info["dpi"]


@pytest.mark.parametrize("progressive", [False, True])
def test_noise_at_the_finest_tables_is_written(progressive: bool, tmp_path: Path) -> None:
    """More than two bytes a pixel: Pillow alone fails on such progressive or optimised files."""
    noise = np.random.default_rng(1).integers(0, 256, (300, 400, 3)).astype(np.uint8)
    frame = frame_from_array(noise, space="sRGB", linear=False, referred="display")
    finest = {"quantisation": ((1,) * 64,) * 3, "sampling": ((1, 1),) * 3, "progressive": progressive}
    written = files.write(replace(frame, encoding=finest), tmp_path / "a.jpg")
    assert np.abs(files.read(tmp_path / "a.jpg").pixels.astype(int) - noise).max() <= 4
    assert bool(written.notes) == progressive


def test_what_was_assumed_is_embedded_where_another_format_would_assume_otherwise(tmp_path: Path) -> None:
    light = (picture(16) / 65535).astype(np.float32)
    tifffile.imwrite(tmp_path / "light.tif", light, photometric="rgb")
    frame = files.read(tmp_path / "light.tif")
    for suffix in (".png", ".jpg"):
        files.write(frame, tmp_path / f"a{suffix}")
        assert files.read(tmp_path / f"a{suffix}").space.name == "linear Rec.709"
    files.write(frame, tmp_path / "a.tif")
    again = files.read(tmp_path / "a.tif")
    assert again.space.name == "linear Rec.709"
    assert again.space.icc is None


@pytest.mark.parametrize(
    ("suffix", "colour_space", "index"), [(".jpg", 0xFFFF, "R03"), (".jpg", 2, None), (".tif", 2, None)]
)
def test_the_optional_space_of_dcf_is_understood(
    suffix: str, colour_space: int, index: str | None, tmp_path: Path
) -> None:
    """Exif interoperability index R03 (CIPA DC-008 and DC-009), or colour space 2: opRGB, without any profile."""
    exif = Image.Exif()
    exif.get_ifd(0x8769)[0xA001] = colour_space
    if index is not None:
        exif.get_ifd(0x8769)[0xA005] = {1: index}
    Image.fromarray(smooth()).save(tmp_path / f"camera{suffix}", exif=exif.tobytes())
    frame = files.read(tmp_path / f"camera{suffix}")
    assert frame.space.name == "opRGB"
    assert not frame.header.flags
    files.write(frame, tmp_path / "a.jpg")
    assert files.read(tmp_path / "a.jpg").space.name == "opRGB"
    files.write(frame, tmp_path / "a.tif")
    assert files.read(tmp_path / "a.tif").space.icc == files.profile_bytes("opRGB")
