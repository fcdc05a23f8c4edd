"""What a TIFF header must say before its pixels are read: supported, plausible, whole."""

from __future__ import annotations

from math import ceil
from typing import Any, Final

from grader.errors import DamagedFile, UnsupportedFile
from grader.files.border import CONVERT_HINT, RECOPY_HINT
from grader.files.raster import check_size
from grader.model import ReadLimits

GREY_INVERTED, GREY, RGB, PALETTE, MASK, CMYK, YCBCR, LAB, ICC_LAB = 0, 1, 2, 3, 4, 5, 6, 8, 9
_COLOUR_SAMPLES: Final = {
    GREY_INVERTED: 1,
    GREY: 1,
    RGB: 3,
    PALETTE: 1,
    CMYK: 4,
    YCBCR: 3,
    LAB: 3,
    ICC_LAB: 3,
}
_REFUSED: Final = {
    4: "a transparency mask is not a photograph",
    10: "ITU Lab (fax) colours are not supported",
    32803: "this is sensor data without a camera's description",
    32844: "LogL pictures are not supported",
    32845: "LogLuv pictures are not supported",
    34892: "this is linear sensor data without a camera's description",
    51177: "a depth map is not a photograph",
}
UNCOMPRESSED: Final = 1
_COMPRESSIONS: Final = frozenset(
    {1, 5, 8, 32773, 32946, 34925, 50000}  # bytes: none, LZW, deflate, PackBits, deflate, LZMA, zstd
    | {7, 33007, 34892, 33003, 33004, 33005, 34712}  # JPEG, JPEG 2000
    | {34887, 34933, 50001, 50002, 52546}  # LERC, PNG, WebP, JPEG XL
)
"""Compressions that are read, by their number."""
_KNOWN: Final = {
    2: "fax", 3: "fax", 4: "fax", 6: "old-style JPEG (withdrawn from the standard)", 32809: "ThunderScan",
    32909: "PixarLog", 34661: "JBIG", 34676: "SGI log", 34677: "SGI log", 34934: "JPEG XR",
}  # fmt: skip
JPEG_KINDS: Final = (7, 34892, 33007)
"""Compressions whose decoder turns YCbCr into RGB."""
_MOST_EXPANSION: Final = {1: 1, 5: 2600, 8: 1040, 32946: 1040, 32773: 66}
"""Most bytes out per byte in: LZW 3,838 bytes from a 12-bit code, deflate 258 from 2 bits, PackBits 128 from 2."""


def colour_samples(page: Any) -> int:
    """Return how many of the samples of a pixel are colour."""
    return _COLOUR_SAMPLES[int(page.photometric)]


def check(page: Any, file_bytes: int, limits: ReadLimits) -> None:
    """Refuse what cannot be graded, and what cannot be whole, from the header alone.

    Raises
    ------
    UnsupportedFile
        Too large, or of a kind that is not graded.
    DamagedFile
        The header contradicts itself or the length of the file.
    """
    check_size(page.imagewidth, page.imagelength, limits)
    _supply_photometric(page)
    _check_kind(page)
    _check_samples(page)
    _check_compression(page)
    _check_segments(page, file_bytes, limits)


def _supply_photometric(page: Any) -> None:
    """Fill in the kind of colours where the tag is missing, by the number of channels, as libtiff does."""
    if 262 not in page.tags:
        page.photometric = RGB if page.samplesperpixel - len(page.extrasamples or ()) >= 3 else GREY


def _check_kind(page: Any) -> None:
    photometric = int(page.photometric)
    if photometric in _REFUSED:
        raise UnsupportedFile(_REFUSED[photometric], hint=CONVERT_HINT)
    if photometric not in _COLOUR_SAMPLES:
        raise UnsupportedFile(f"its colours are of an unknown kind ({photometric})", hint=CONVERT_HINT)
    if page.imagedepth > 1:
        raise UnsupportedFile("it is a volume, not a photograph", hint=CONVERT_HINT)
    if photometric == YCBCR and int(page.planarconfig) == 2:
        raise UnsupportedFile("its luma and chroma are stored in an unusual way", hint=CONVERT_HINT)
    if photometric == CMYK and int(page.tags.valueof(332, 1)) != 1:
        raise UnsupportedFile("its inks are not cyan, magenta, yellow and black", hint=CONVERT_HINT)


def _check_samples(page: Any) -> None:
    bits, samples = page.bitspersample, page.samplesperpixel
    if not isinstance(bits, int):
        raise UnsupportedFile(f"its channels differ in depth {tuple(bits)}", hint=CONVERT_HINT)
    if samples > 4:
        raise UnsupportedFile(f"it has {samples} channels; at most 4 can be graded", hint=CONVERT_HINT)
    extra = samples - colour_samples(page)
    if extra < 0:
        raise DamagedFile(f"it has {samples} channels, too few for its kind of colour")
    if extra > 1:
        raise UnsupportedFile(f"it has {extra} channels besides its colours", hint=CONVERT_HINT)
    sample_format = int(page.sampleformat)
    if sample_format in (5, 6):
        raise UnsupportedFile("its samples are complex numbers", hint=CONVERT_HINT)
    if sample_format == 2 and int(page.photometric) not in (LAB, ICC_LAB):
        raise UnsupportedFile(
            "its samples are signed: where black and white lie is unknown", hint=CONVERT_HINT
        )
    if bits == 1 and int(page.photometric) != PALETTE:
        raise UnsupportedFile(
            "it is black and white without greys (1 bit)", hint="nothing here can be graded"
        )
    if page.dtype is None or not 1 <= bits <= 64:
        raise UnsupportedFile(
            f"its samples ({bits} bits, format {sample_format}) are not supported", hint=CONVERT_HINT
        )


def _check_compression(page: Any) -> None:
    compression = int(page.compression)
    if compression not in _COMPRESSIONS:
        name = _KNOWN.get(compression, f"number {compression}")
        raise UnsupportedFile(f"its compression is not supported: {name}", hint=CONVERT_HINT)


def _check_segments(page: Any, file_bytes: int, limits: ReadLimits) -> None:
    """Every strip or tile must be there, inside the file, and of a size that its picture explains."""
    expected = _pieces(page, limits)
    _require(expected, len(page.dataoffsets))
    if int(page.compression) == UNCOMPRESSED and not page.is_subsampled:
        _complete_counts(page, expected)
    _require(expected, len(page.databytecounts))
    offsets, counts = page.dataoffsets[:expected], page.databytecounts[:expected]
    if min(offsets) <= 0 or min(counts) <= 0:
        raise DamagedFile("a piece of the picture is missing", hint=RECOPY_HINT)
    if max(offset + count for offset, count in zip(offsets, counts, strict=True)) > file_bytes:
        raise DamagedFile("the file ends before the picture does", hint=RECOPY_HINT)
    _check_expansion(page, sum(counts))


def _pieces(page: Any, limits: ReadLimits) -> int:
    """Return how many strips or tiles the picture takes."""
    planes = page.samplesperpixel if int(page.planarconfig) == 2 else 1
    if not page.is_tiled:
        if page.rowsperstrip < 1:
            raise DamagedFile("its strips have no rows")
        return int(ceil(page.imagelength / page.rowsperstrip) * planes)
    if page.tilewidth < 1 or page.tilelength < 1:
        raise DamagedFile("its tiles have no size")
    check_size(page.tilewidth, page.tilelength, limits)
    return int(ceil(page.imagewidth / page.tilewidth) * ceil(page.imagelength / page.tilelength) * planes)


def _require(expected: int, found: int) -> None:
    if found < expected:
        raise DamagedFile(
            f"{expected - found} of {expected} pieces of the picture are missing", hint=RECOPY_HINT
        )


def _complete_counts(page: Any, expected: int) -> None:
    """Replace byte counts that are missing or wrong by what uncompressed pieces take: some writers get them wrong."""
    samples = 1 if int(page.planarconfig) == 2 else page.samplesperpixel
    if page.is_tiled:
        pieces = [(page.tilelength, page.tilewidth)] * expected
    else:
        starts = range(0, page.imagelength, page.rowsperstrip)
        strips = [(min(page.rowsperstrip, page.imagelength - top), page.imagewidth) for top in starts]
        pieces = strips * (expected // len(strips))
    needed = tuple(rows * ceil(columns * samples * page.bitspersample / 8) for rows, columns in pieces)
    if len(page.databytecounts) < expected or any(
        n != c for n, c in zip(needed, page.databytecounts, strict=False)
    ):
        page.databytecounts = needed


def _check_expansion(page: Any, stored: int) -> None:
    needed = page.imagewidth * page.imagelength * page.samplesperpixel * page.bitspersample // 8
    most = _MOST_EXPANSION.get(int(page.compression))
    if most is not None and needed > stored * most and not page.is_subsampled:
        raise DamagedFile("it holds too few bytes for the picture that its header claims")
