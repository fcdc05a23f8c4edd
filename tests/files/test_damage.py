"""Damaged, cut, absurd and mistaken files: one clear error, never a wrong picture, never anything else."""

from __future__ import annotations

import io
import os
import struct
import zlib
from pathlib import Path

import numpy as np
import pytest
import tifffile
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from PIL import Image

from grader import files
from grader.errors import DamagedFile, GraderError, MissingFile, UnsupportedFile
from grader.model import ReadLimits
from tests.files import tiff_writer
from tests.files.png_writer import chunk, png
from tests.files.variants import all_variants, picture, smooth

VARIANTS = all_variants()
BYTES = {v.name: v.make() for v in VARIANTS}
SUFFIX = {v.name: v.suffix for v in VARIANTS}
SMALL = ReadLimits(max_pixels=4_000_000)


def put(folder: Path, data: bytes, suffix: str = ".tif") -> Path:
    path = folder / f"frame{suffix}"
    path.write_bytes(data)
    return path


# --- mutations ------------------------------------------------------------------------------------------


@st.composite
def mutated(draw: st.DrawFn) -> tuple[str, bytes]:
    """Draw a variant and damage it: bytes changed, zeroed, cut out, put in, or the end cut off."""
    name = draw(st.sampled_from(sorted(BYTES)))
    data = bytearray(BYTES[name])
    way = draw(
        st.sampled_from(
            ["change", "change near the start", "change near the end", "zero", "cut", "insert", "end"]
        )
    )
    last = len(data) - 1
    if way.startswith("change"):
        reach = {
            "change": last,
            "change near the start": min(last, 300),
            "change near the end": min(last, 300),
        }[way]
        for _ in range(draw(st.integers(1, 6))):
            place = draw(st.integers(0, reach))
            data[last - place if way.endswith("end") else place] = draw(st.integers(0, 255))
        return name, bytes(data)
    place = draw(st.integers(0, last))
    length = draw(st.sampled_from([1, 2, 4, 12, 64, 600]))
    if way == "zero":
        data[place : place + length] = bytes(min(length, len(data) - place))
    elif way == "cut":
        del data[place : place + length]
    elif way == "insert":
        data[place:place] = draw(st.binary(min_size=length, max_size=length))
    else:
        del data[place:]
    return name, bytes(data)


@settings(
    max_examples=2000, deadline=None, database=None, derandomize=True, suppress_health_check=list(HealthCheck)
)
@given(damage=mutated())
def test_only_our_errors_come_out(
    damage: tuple[str, bytes], tmp_path_factory: pytest.TempPathFactory
) -> None:
    name, data = damage
    path = tmp_path_factory.getbasetemp() / f"fuzz{SUFFIX[name]}"
    path.write_bytes(data)
    try:
        frame = files.read(path, SMALL)
    except GraderError as error:
        problem = error
    else:
        assert frame.pixels.ndim == 3
        assert frame.pixels.dtype in (np.uint8, np.uint16, np.float32)
        return
    assert problem.path == str(path)
    assert problem.message


@pytest.mark.parametrize(
    "name", sorted(n for n, v in zip(BYTES, VARIANTS, strict=True) if v.fate != "refused")
)
def test_a_cut_file_is_refused_or_whole(name: str, tmp_path: Path) -> None:
    """Whatever remains of a picture whose end is missing is not shown; only trailing metadata may be missing."""
    data = BYTES[name]
    whole = files.read(put(tmp_path, data, SUFFIX[name])).pixels
    for share in (0.5, 0.8, 0.95, 0.99):
        path = put(tmp_path, data[: int(len(data) * share)], SUFFIX[name])
        try:
            frame = files.read(path)
        except GraderError:
            continue
        np.testing.assert_array_equal(frame.pixels, whole)
    path = put(tmp_path, data[: len(data) // 2], SUFFIX[name])
    with pytest.raises((DamagedFile, UnsupportedFile)):
        files.read(path)


# --- JPEG entropy data ----------------------------------------------------------------------------------


def jpeg_bytes(**options: object) -> bytes:
    buffer = io.BytesIO()
    ramp = np.kron(smooth(), np.ones((4, 4, 1), np.uint8))
    Image.fromarray(ramp).save(buffer, "JPEG", quality=92, **options)
    return buffer.getvalue()


@pytest.mark.parametrize("progressive", [False, True])
@pytest.mark.parametrize("share", [0.3, 0.6, 0.9, 0.999])
def test_a_jpeg_cut_short_and_closed_again_is_refused(
    progressive: bool, share: float, tmp_path: Path
) -> None:
    """Decoders call this picture whole and fill the rest with grey; Pillow does here."""
    data = jpeg_bytes(progressive=progressive)
    cut = data[: int(len(data) * share)].rstrip(b"\xff") + b"\xff\xd9"
    if not progressive:
        assert np.asarray(Image.open(io.BytesIO(cut))).shape == (180, 268, 3)
    with pytest.raises(DamagedFile):
        files.read(put(tmp_path, cut, ".jpg"))


@pytest.mark.parametrize("progressive", [False, True])
def test_zeros_within_a_jpeg_are_noticed(progressive: bool, tmp_path: Path) -> None:
    data = bytearray(jpeg_bytes(progressive=progressive))
    middle = len(data) // 2
    data[middle : middle + 300] = bytes(300)
    with pytest.raises(DamagedFile):
        files.read(put(tmp_path, bytes(data), ".jpg"))


def test_a_jpeg_without_its_end_marker_is_whole(tmp_path: Path) -> None:
    data = jpeg_bytes()
    frame = files.read(put(tmp_path, data[:-2], ".jpg"))
    np.testing.assert_array_equal(frame.pixels, np.asarray(Image.open(io.BytesIO(data))))
    assert "end marker" in " ".join(frame.header.notes)


def test_a_progressive_jpeg_without_its_last_scans_is_refused(tmp_path: Path) -> None:
    data = jpeg_bytes(progressive=True)
    last = data.rindex(b"\xff\xda")
    with pytest.raises(DamagedFile):
        files.read(put(tmp_path, data[:last], ".jpg"))


def test_a_damaged_jpeg_within_a_tiff_is_refused(tmp_path: Path) -> None:
    name = "tiff JPEG 4:2:0"
    data = bytearray(BYTES[name])
    with tifffile.TiffFile(io.BytesIO(data)) as tif:
        offset, count = tif.pages[0].dataoffsets[0], tif.pages[0].databytecounts[0]
    data[offset + count // 2 : offset + count // 2 + 100] = bytes(100)
    with pytest.raises(DamagedFile):
        files.read(put(tmp_path, bytes(data)))


# --- absurd headers -------------------------------------------------------------------------------------


def huge_tiff(**changes: object) -> bytes:
    return tiff_writer.tiff(
        tiff_writer.rgb_tags(100_000, 100_000) | dict(changes.get("tags", {})), [b"\0" * 64]
    )


def test_ten_thousand_million_pixels_are_refused_by_the_header(tmp_path: Path) -> None:
    header = struct.pack(">IIBBBBB", 100_000, 100_000, 8, 2, 0, 0, 0)
    bomb = (
        b"\x89PNG\r\n\x1a\n"
        + chunk(b"IHDR", header)
        + chunk(b"IDAT", zlib.compress(bytes(100)))
        + chunk(b"IEND", b"")
    )
    for data, suffix in ((huge_tiff(), ".tif"), (bomb, ".png")):
        with pytest.raises(UnsupportedFile, match="100000 x 100000") as refusal:
            files.read(put(tmp_path, data, suffix))
        assert "--max-pixels" in str(refusal.value)


def test_the_limit_is_the_callers(tmp_path: Path) -> None:
    path = put(tmp_path, BYTES["tiff 8 bit none"])
    with pytest.raises(UnsupportedFile, match="more than allowed"):
        files.read(path, ReadLimits(max_pixels=1000))
    assert files.read(path, ReadLimits(max_pixels=45 * 67)).pixels.size


def test_a_header_that_claims_more_than_the_file_can_hold(tmp_path: Path) -> None:
    for compression in (1, 5, 8, 32773):
        tags = tiff_writer.rgb_tags(20_000, 20_000) | {259: ("H", (compression,))}
        with pytest.raises(DamagedFile):
            files.read(put(tmp_path, tiff_writer.tiff(tags, [b"\0" * 4000])))


def test_an_inflating_profile_chunk_is_bounded(tmp_path: Path) -> None:
    bomb = b"p\0\0" + zlib.compress(bytes(40 << 20), 1)
    data = png(picture(8), 8, extra=[(b"iCCP", bomb)])()
    frame = files.read(put(tmp_path, data, ".png"))
    assert "profile-broken" in frame.header.flags


def test_a_piece_larger_than_its_place(tmp_path: Path) -> None:
    inner = png(np.zeros((600, 600, 3), np.uint8), 8)()
    tags = tiff_writer.rgb_tags(16, 16) | {259: ("H", (34933,))}
    with pytest.raises(DamagedFile, match="600 x 600"):
        files.read(put(tmp_path, tiff_writer.tiff(tags, [inner])))


# --- writers' mistakes that cost nothing ------------------------------------------------------------------


def test_wrong_or_missing_byte_counts_of_plain_data(tmp_path: Path) -> None:
    data = picture(8)
    tags = tiff_writer.rgb_tags(data.shape[1], data.shape[0])
    for counts in (("I", (0,)), None, ("I", (7,)), ("I", (10**9,))):
        path = put(tmp_path, tiff_writer.tiff(tags | {279: counts}, [data.tobytes()]))
        np.testing.assert_array_equal(files.read(path).pixels, data)


def test_rows_per_strip_beyond_the_picture(tmp_path: Path) -> None:
    data = picture(8)
    for rows in (("I", (0xFFFFFFFF,)), None):
        tags = tiff_writer.rgb_tags(data.shape[1], data.shape[0]) | {278: rows}
        np.testing.assert_array_equal(
            files.read(put(tmp_path, tiff_writer.tiff(tags, [data.tobytes()]))).pixels, data
        )


def test_a_missing_piece_is_not_black(tmp_path: Path) -> None:
    data = picture(8)
    tags = tiff_writer.rgb_tags(data.shape[1], data.shape[0]) | {
        278: ("I", (15,)),
        273: ("I", (8, 0, 8)),
        279: ("I", (3015, 0, 3015)),
    }
    with pytest.raises(DamagedFile, match="missing"):
        files.read(put(tmp_path, tiff_writer.tiff(tags, [data.tobytes()])))


def test_a_directory_that_leads_back_to_itself(tmp_path: Path) -> None:
    data = bytearray(BYTES["tiff 8 bit none"])
    (start,) = struct.unpack_from("<I", data, 4)
    (count,) = struct.unpack_from("<H", data, start)
    struct.pack_into("<I", data, start + 2 + 12 * count, start)
    np.testing.assert_array_equal(files.read(put(tmp_path, bytes(data))).pixels, picture(8))


def test_picture_data_that_end_early_behind_sound_checksums(tmp_path: Path) -> None:
    for bits in (4, 8, 16):
        for interlaced in (False, True):
            data = png(picture(bits, 1)[:20, :20, 0], bits, interlaced=interlaced)()
            length = int.from_bytes(data[33:37], "big")
            body, rest = data[41 : 41 + length], data[41 + length + 4 :]
            for damaged in (
                body[: length // 2],
                body[:-4] + b"last",
                zlib.compress(zlib.decompress(body)[:110]),
            ):
                assert rest.endswith(chunk(b"IEND", b""))
                cut = data[:33] + chunk(b"IDAT", damaged) + chunk(b"IEND", b"")
                with pytest.raises(DamagedFile):
                    files.read(put(tmp_path, cut, ".png"))


@pytest.mark.parametrize("suffix", [".tif", ".png", ".jpg"])
def test_the_widest_panoramas(suffix: str, tmp_path: Path) -> None:
    """65,500 pixels is the most that libjpeg takes."""
    wide = np.tile(smooth(), (1, 1000, 1))[:8, :65_500]
    Image.fromarray(wide).save(tmp_path / f"wide{suffix}")
    frame = files.read(tmp_path / f"wide{suffix}")
    assert frame.pixels.shape == (8, 65_500, 3)
    assert files.read_reduced(tmp_path / f"wide{suffix}").pixels.shape[1] <= 600
    files.write(frame, tmp_path / f"out{suffix}")
    again = files.read(tmp_path / f"out{suffix}")
    assert np.abs(again.pixels.astype(int) - frame.pixels).mean() < 2


# --- not pictures ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("data", "error", "words"),
    [
        (b"", DamagedFile, "empty"),
        (bytes(5000), DamagedFile, "only zeros"),
        (b"Dear all, the pictures follow tomorrow.\n" * 50, UnsupportedFile, "not a picture"),
        (b"GIF89a" + bytes(50), UnsupportedFile, "GIF"),
        (b"RIFF\x10\0\0\0WEBPVP8 " + bytes(50), UnsupportedFile, "WebP"),
        (b"\0\0\0\x20ftypheic" + bytes(50), UnsupportedFile, "HEIF"),
        (b"%PDF-1.7" + bytes(50), UnsupportedFile, "PDF"),
        (b"\x89PNG\n\x1a\n" + bytes(50), DamagedFile, "first bytes"),
        (b"\xff\xd8\xff", DamagedFile, "before the picture"),
        (b"II*\0" + bytes(4), DamagedFile, "."),
        (b"II*\0\xff\xff\xff\xff", DamagedFile, "."),
        (b"MM\0+" + bytes(12), DamagedFile, "."),
    ],
)
@pytest.mark.parametrize("suffix", [".tif", ".jpg", ".png", ".dng"])
def test_what_a_file_is_decides_not_its_name(
    data: bytes, error: type[GraderError], words: str, suffix: str, tmp_path: Path
) -> None:
    with pytest.raises(error, match=words):
        files.read(put(tmp_path, data, suffix))


def test_a_picture_under_a_wrong_name_is_read(tmp_path: Path) -> None:
    for name in ("tiff 16 bit lzw", "png 8 bit", "jpeg 4:2:0"):
        frame = files.read(put(tmp_path, BYTES[name], ".dat"))
        assert frame.header.format == name.split()[0]


def test_paths_that_lead_nowhere(tmp_path: Path) -> None:
    with pytest.raises(MissingFile, match="no such file"):
        files.read(tmp_path / "nothing.tif")
    with pytest.raises(MissingFile, match="folder"):
        files.read(tmp_path)
    with pytest.raises(MissingFile):
        files.read(tmp_path / ("n" * 300 + ".tif"))
    (tmp_path / "loop.tif").symlink_to(tmp_path / "loop.tif")
    with pytest.raises(MissingFile):
        files.read(tmp_path / "loop.tif")


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="no named pipes here")
def test_a_pipe_is_refused_without_waiting(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe.tif")
    with pytest.raises(UnsupportedFile, match="regular"):
        files.read(tmp_path / "pipe.tif")


def test_originals_are_never_changed(tmp_path: Path) -> None:
    for name in ("tiff 16 bit lzw", "png 8 bit", "jpeg 4:2:0"):
        path = put(tmp_path, BYTES[name], SUFFIX[name])
        path.chmod(0o444)
        before = path.stat().st_mtime_ns
        files.read(path)
        files.read_reduced(path, target_px=20)
        assert path.read_bytes() == BYTES[name]
        assert path.stat().st_mtime_ns == before
        path.chmod(0o644)
