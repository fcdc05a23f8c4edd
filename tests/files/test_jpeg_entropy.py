"""The walk over a JPEG's codes: silent on every sound file, loud on damage that decoders hide."""

from __future__ import annotations

import io
from itertools import product

import imagecodecs
import numpy as np
import pytest
from PIL import Image

from grader.errors import DamagedFile
from grader.files import jpeg_entropy, jpeg_markers
from grader.files.jpeg_huffman import STANDARD_TABLES
from tests.files.variants import smooth


def encoded(pixels: np.ndarray, **options: object) -> bytes:
    buffer = io.BytesIO()
    Image.fromarray(pixels).save(buffer, "JPEG", **options)
    return buffer.getvalue()


def walk(data: bytes) -> None:
    jpeg_entropy.check(data, jpeg_markers.parse(data))


@pytest.mark.parametrize("progressive", [False, True])
@pytest.mark.parametrize("optimize", [False, True])
@pytest.mark.parametrize("subsampling", [0, 1, 2])
def test_sound_files_pass(progressive: bool, optimize: bool, subsampling: int) -> None:
    rng = np.random.default_rng(8)
    for quality, restart, height, width in product((5, 60, 100), (0, 1, 7), (1, 17, 40), (8, 33)):
        pixels = rng.integers(0, 256, (height, width, 3)).astype(np.uint8)
        options: dict[str, object] = {"restart_marker_blocks": restart} if restart else {}
        options |= {"quality": quality, "progressive": progressive, "optimize": optimize}
        walk(encoded(pixels, subsampling=subsampling, **options))
        walk(encoded(pixels[..., 0], **options))
        walk(encoded(smooth()[:height, :width], subsampling=subsampling, **options))


@pytest.mark.parametrize("sampling", ["444", "422", "420", "411", "440"])
def test_other_samplings_pass(sampling: str) -> None:
    walk(bytes(imagecodecs.jpeg8_encode(smooth(), level=80, subsampling=sampling)))


def test_twelve_bits_pass() -> None:
    data = (smooth(1)[..., 0].astype(np.uint16) << 4) + 9
    walk(bytes(imagecodecs.jpeg8_encode(data, level=90, bitspersample=12)))


@pytest.mark.parametrize("progressive", [False, True])
def test_every_early_end_is_noticed(progressive: bool) -> None:
    data = encoded(np.kron(smooth(), np.ones((2, 2, 1), np.uint8)), quality=90, progressive=progressive)
    scan = jpeg_markers.parse(data).scans[-1]
    for cut in range(scan.start, scan.end - 1, 7):
        short = data[:cut].rstrip(b"\xff") + b"\xff\xd9"
        with pytest.raises(DamagedFile):
            walk(short)


def test_data_too_many_are_noticed() -> None:
    data = encoded(smooth(), quality=90)
    scan = jpeg_markers.parse(data).scans[0]
    with pytest.raises(DamagedFile, match="do not end"):
        walk(data[: scan.end] + b"\x55" * 40 + data[scan.end :])
    walk(data[: scan.end] + b"\0" * 4 + data[scan.end :])  # a little padding is a habit of some writers


def test_a_restart_marker_out_of_order_is_noticed() -> None:
    data = bytearray(encoded(smooth(), quality=90, subsampling=0, restart_marker_blocks=5))
    place = data.index(b"\xff\xd1")
    data[place + 1] = 0xD3
    with pytest.raises(DamagedFile, match="restart"):
        walk(bytes(data))


def test_impossible_brightness_is_noticed() -> None:
    """Differences that lead far out of the range of T.81, A.3.3."""
    flat = encoded(np.full((64, 64), 128, np.uint8), quality=50, optimize=False)
    layout = jpeg_markers.parse(flat)
    table = STANDARD_TABLES[0]
    assert layout.scans[0].huffman[0] == table
    # code 1111110 says nine bits follow; nine ones are +511; then 1010 ends the block: one block after another
    bits = ("1111110" + "1" * 9 + "1010") * 64
    body = bytes(int(bits[i : i + 8].ljust(8, "1"), 2) for i in range(0, len(bits), 8)).replace(
        b"\xff", b"\xff\0"
    )
    scan = layout.scans[0]
    with pytest.raises(DamagedFile, match="brightness"):
        walk(flat[: scan.start] + body + flat[scan.end :])


def test_files_without_their_tables_take_the_typical_ones() -> None:
    """T.81 annex K.3; motion pictures leave them out."""
    data = encoded(smooth(), quality=90, optimize=False)
    layout = jpeg_markers.parse(data)
    assert {k: layout.scans[0].huffman[k] for k in STANDARD_TABLES} == STANDARD_TABLES
    bare = data
    while (place := bare.find(b"\xff\xc4")) >= 0:
        length = int.from_bytes(bare[place + 2 : place + 4], "big")
        bare = bare[:place] + bare[place + 2 + length :]
    walk(bare)


def test_a_component_without_a_scan_is_noticed() -> None:
    data = encoded(smooth(), quality=90, progressive=True)
    layout = jpeg_markers.parse(data)
    layout.scans = [
        s for s in layout.scans if s.header[0] == 1 and s.header[1] == layout.components[0].identity
    ]
    with pytest.raises(DamagedFile):
        jpeg_entropy.check(data, layout)
