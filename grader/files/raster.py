"""From decoded samples to a frame: depth, grey, alpha and colour, the same way for TIFF, JPEG and PNG."""

from __future__ import annotations

import io
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, Final, Literal

import numpy as np
from numpy.typing import NDArray

from grader.colour.spaces import SPACES
from grader.errors import UnsupportedFile
from grader.files import metadata_tree, profile, profile_convert
from grader.model import Frame, Header, Metadata, ReadLimits, Space

Kind = Literal["grey", "rgb", "cmyk", "lab"]
Pixels = NDArray[Any]
_CHANNELS: Final[dict[Kind, int]] = {"grey": 1, "rgb": 3, "cmyk": 4, "lab": 3}


@dataclass(slots=True, eq=False)
class Decoded:
    """The samples of one picture as the decoder gave them, and what its file says about them.

    ``samples`` is (H, W, channels); integers of ``bits`` significant bits, or floats with 1.0 = white.
    ``space`` is what the file says besides an ICC profile (a PNG chunk, an EXIF tag), or None.
    """

    samples: Pixels
    kind: Kind
    bits: int
    format: Literal["tiff", "jpeg", "png"]
    icc: bytes | None = None
    space: Space | None = None
    alpha: Pixels | None = None
    encoding: dict[str, Any] = field(default_factory=dict)
    flags: list[str] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    facts: dict[str, Any] = field(default_factory=dict)
    metadata: Metadata = field(default_factory=Metadata)

    def flag(self, code: str, note: str) -> None:
        """Add a flag once, and the plain words for the log."""
        if code not in self.flags:
            self.flags.append(code)
        self.notes.append(note)


def check_size(width_px: int, height_px: int, limits: ReadLimits) -> None:
    """Refuse a picture by what its header claims, before anything is allocated.

    Raises
    ------
    UnsupportedFile
        It has no pixels, or more than ``limits.max_pixels``.
    """
    if width_px < 1 or height_px < 1:
        raise UnsupportedFile(f"the picture has no pixels ({width_px} x {height_px})")
    if width_px * height_px > limits.max_pixels:
        megapixels = width_px * height_px / 1e6
        raise UnsupportedFile(
            f"the header claims {width_px} x {height_px} pixels ({megapixels:,.0f} MP), more than allowed",
            hint=f"raise the limit of {limits.max_pixels / 1e6:,.0f} MP (--max-pixels) if the picture is real",
        )


def frame(decoded: Decoded, path: Path, sha256: str) -> Frame:
    """Return the frame of decoded samples."""
    decoded.encoding |= {
        "kind": decoded.kind,
        "bits": decoded.bits,
        "sample": "float" if decoded.samples.dtype.kind == "f" else "uint",
    }
    pixels, space = _coloured(decoded)
    alpha = None
    if decoded.alpha is not None:
        alpha = scaled(decoded.alpha, decoded.bits)
        pixels = _unassociated(pixels, alpha, decoded)
        alpha = _like(alpha, pixels)
    header = Header(file=str(path), format=decoded.format, sha256=sha256)
    header = replace(header, **decoded.facts)
    header = replace(
        header,
        width_px=pixels.shape[1],
        height_px=pixels.shape[0],
        flags=(*header.flags, *decoded.flags),
        notes=(*header.notes, *decoded.notes),
    )
    return Frame(pixels, space, header, decoded.metadata, alpha, decoded.encoding)


def scaled(samples: Pixels, bits: int) -> Pixels:
    """Return samples at the depth of a frame: uint8, uint16 or float32.

    Integers of an odd depth are spread over the next larger one so that white stays white; `unscaled`
    gives the same integers back.  Integers of more than 16 bits become floats.

    Examples
    --------
    >>> scaled(np.array([0, 1, 15], np.uint8), 4)
    array([  0,  17, 255], dtype=uint8)
    >>> scaled(np.array([0, 2048, 4095], np.uint16), 12)
    array([    0, 32776, 65535], dtype=uint16)
    """
    if samples.dtype.kind == "f":
        with np.errstate(over="ignore"):
            return samples.astype(np.float32, copy=False)
    if bits > 16:
        return np.asarray(samples / (2.0**bits - 1), np.float32)
    whole = 8 if bits <= 8 else 16
    dtype = np.uint8 if whole == 8 else np.uint16
    if bits == whole:
        return samples.astype(dtype, copy=False)
    return _spread(2**bits - 1, 2**whole - 1, dtype)[samples]


def unscaled(pixels: Pixels, bits: int) -> Pixels:
    """Return integer samples of ``bits`` bits from a frame's pixels: the inverse of `scaled`."""
    if pixels.dtype == np.float32:
        dtype = np.uint32 if bits <= 32 else np.uint64
        top = 2.0**bits - 1
        whole = np.round(np.clip(np.nan_to_num(pixels, nan=0.0), 0.0, 1.0).astype(np.float64) * top)
        return np.where(whole >= top, np.array(2**bits - 1, dtype), whole.astype(dtype))
    whole_bits = 8 * pixels.dtype.itemsize
    if bits == whole_bits:
        return pixels
    dtype_out = np.uint8 if bits <= 8 else np.uint16
    return _spread(2**whole_bits - 1, 2**bits - 1, dtype_out)[pixels]


def _spread(top_from: int, top_to: int, dtype: Any) -> Pixels:
    """Return the table that carries 0 .. top_from onto 0 .. top_to, rounded to the nearest."""
    return ((np.arange(top_from + 1, dtype=np.int64) * top_to * 2 + top_from) // (2 * top_from)).astype(dtype)


def to_eight_bits(pixels: Pixels) -> NDArray[np.uint8]:
    """Return 8-bit pixels, rounded to the nearest.

    Examples
    --------
    >>> to_eight_bits(np.array([0, 128, 129, 65535], np.uint16))
    array([  0,   0,   1, 255], dtype=uint8)
    """
    if pixels.dtype == np.uint8:
        return pixels
    if pixels.dtype == np.uint16:
        return ((pixels.astype(np.uint32) + 128) // 257).astype(np.uint8)
    return np.round(np.clip(np.nan_to_num(pixels, nan=0.0), 0.0, 1.0) * 255).astype(np.uint8)


def to_sixteen_bits(pixels: Pixels) -> NDArray[np.uint16]:
    """Return 16-bit pixels, rounded to the nearest."""
    if pixels.dtype == np.uint16:
        return pixels
    if pixels.dtype == np.uint8:
        return pixels.astype(np.uint16) * np.uint16(257)
    return np.round(np.clip(np.nan_to_num(pixels, nan=0.0), 0.0, 1.0).astype(np.float64) * 65535).astype(
        np.uint16
    )


def _like(alpha: Pixels, pixels: Pixels) -> Pixels:
    """Return alpha at the pixels' type."""
    if alpha.dtype == pixels.dtype:
        return alpha
    if pixels.dtype == np.uint16:
        return to_sixteen_bits(alpha)
    return np.asarray(alpha, np.float32)


# --- colour ---------------------------------------------------------------------------------------------


def _coloured(decoded: Decoded) -> tuple[Pixels, Space]:
    """Return (H, W, 3) pixels and the space that explains them."""
    parsed = _profile(decoded)
    if decoded.kind in ("cmyk", "lab"):
        return _converted(decoded, parsed)
    if parsed is not None and parsed.has_table:
        return _by_table(decoded, parsed)
    pixels = _three_channels(scaled(decoded.samples, decoded.bits))
    if parsed is not None and decoded.icc is not None:
        try:
            return pixels, profile.space_from_parsed(parsed, decoded.icc)
        except profile.ProfileProblem as problem:
            _broken(decoded, str(problem))
    space = decoded.space or _assumed(decoded)
    decoded.encoding["untagged"] = space.name
    return pixels, space


def _three_channels(samples: Pixels) -> Pixels:
    if samples.shape[2] == 3:
        return samples
    return np.repeat(samples, 3, axis=2)


def _profile(decoded: Decoded) -> profile.Parsed | None:
    """Return the embedded profile if it is sound and of the picture's kind of colour."""
    if not decoded.icc:
        return None
    fitting = {"grey": ("GRAY", "RGB"), "rgb": ("RGB",), "cmyk": ("CMYK",), "lab": ("Lab",)}[decoded.kind]
    try:
        parsed = profile.parse(decoded.icc)
        if parsed.colours not in fitting:
            raise profile.ProfileProblem(f"it is for {parsed.colours} colours")
    except profile.ProfileProblem as problem:
        _broken(decoded, str(problem))
        return None
    return parsed


def _broken(decoded: Decoded, why: str) -> None:
    decoded.flag("profile-broken", f"the colour profile in the file cannot be used: {why}")
    decoded.icc = None


def _assumed(decoded: Decoded) -> Space:
    """Return the space of a picture that does not name one."""
    if decoded.samples.dtype.kind == "f":
        decoded.flag("profile-assumed", "no colour profile: taken as linear light with Rec.709 primaries")
        return SPACES["linear Rec.709"]
    if decoded.bits > 8:
        decoded.flag("profile-assumed", "no colour profile: taken as sRGB")
    return SPACES["sRGB"]


def _by_table(decoded: Decoded, parsed: profile.Parsed) -> tuple[Pixels, Space]:
    """Return the pixels of a profile with look-up tables: as they are where matrix and curves say the same."""
    assert decoded.icc is not None
    try:
        space = profile.space_from_parsed(parsed, decoded.icc)
    except profile.ProfileProblem:
        space = None
    try:
        if space is not None and profile_convert.agrees(space, decoded.icc, parsed.colours):
            return _three_channels(scaled(decoded.samples, decoded.bits)), space
        samples = scaled(decoded.samples, decoded.bits)
        if parsed.colours == "RGB":
            samples = _three_channels(samples)
        pixels = profile_convert.wide_from_device(samples, decoded.icc)
    except profile.ProfileProblem as problem:
        _broken(decoded, str(problem))
        return _three_channels(scaled(decoded.samples, decoded.bits)), _assumed(decoded)
    what = parsed.description or "unnamed"
    decoded.flag("converted", f"the colour profile ({what}) is a look-up table: converted to 16-bit Rec.2020")
    return pixels, SPACES["Rec.2020"]


def _converted(decoded: Decoded, parsed: profile.Parsed | None) -> tuple[Pixels, Space]:
    """Return the pixels of a CMYK or CIELAB picture as RGB."""
    samples = decoded.samples
    decoded.bits = min(decoded.bits, 16)
    if decoded.kind == "lab":
        decoded.flag("converted", "CIELAB colours were converted to 16-bit Rec.2020")
        return profile_convert.wide_from_lab(samples), SPACES["Rec.2020"]
    samples = scaled(samples, decoded.bits)
    if parsed is not None and decoded.icc is not None:
        try:
            pixels = profile_convert.wide_from_device(samples, decoded.icc)
        except profile.ProfileProblem as problem:
            _broken(decoded, str(problem))
        else:
            decoded.flag("converted", "CMYK colours were converted to 16-bit Rec.2020")
            return pixels, SPACES["Rec.2020"]
    decoded.flag("profile-assumed", "CMYK without a usable profile: inks taken as ideal")
    decoded.flag("converted", "CMYK colours were converted to 16-bit sRGB")
    return profile_convert.srgb_from_ideal_inks(samples), SPACES["sRGB"]


def space_by_exif(carried: Metadata) -> Space | None:
    """Return opRGB where Exif says so (DCF's optional colour space, interoperability index R03), else None.

    Many cameras say it in no other way.

    References
    ----------
    .. [1] CIPA DC-008-2023 (Exif 3.0), 4.6.3 and annex on interoperability; CIPA DC-009 (DCF 2.0).
    """
    if carried.exif is None:
        return None
    try:
        index = metadata_tree.read_tree(io.BytesIO(carried.exif), len(carried.exif)).interop.get(1)
    except metadata_tree.BrokenStructure:
        return None
    return SPACES["opRGB"] if metadata_tree.text(index) == "R03" else None


def is_grey(frame: Frame) -> bool:
    """Return whether the file was grey and the frame still is: equal channels, and one curve for them."""
    if frame.encoding.get("kind") != "grey":
        return False
    pixels = frame.pixels
    return all(
        bool(np.array_equal(pixels[start : start + 256, :, 0], pixels[start : start + 256, :, channel]))
        for start in range(0, len(pixels), 256)
        for channel in (1, 2)
    )


# --- alpha ----------------------------------------------------------------------------------------------


def _unassociated(pixels: Pixels, alpha: Pixels, decoded: Decoded) -> Pixels:
    """Divide associated (premultiplied) colour by its alpha, so that the frame holds the colours themselves.

    `associated` gives the same integers back: the quotient is off by at most a half, times alpha / white,
    which rounding undoes.  Where a colour exceeds its alpha no quotient exists, and it stays as it is.
    """
    if decoded.encoding.get("alpha") != "associated":
        return pixels
    if decoded.kind in ("cmyk", "lab") or pixels.dtype != alpha.dtype:
        decoded.encoding["alpha"] = "kept-associated"
        return pixels
    if pixels.dtype.kind == "u" and bool(np.any(pixels.max(axis=2) > alpha)):
        decoded.encoding["alpha"] = "kept-associated"
        decoded.notes.append("colours exceed their alpha: graded as they stand, still multiplied")
        return pixels
    return _rescaled(pixels, alpha, divide=True)


def associated(pixels: Pixels, alpha: Pixels) -> Pixels:
    """Multiply colours by their alpha, for a file whose alpha is associated."""
    return _rescaled(pixels, alpha, divide=False)


def _rescaled(pixels: Pixels, alpha: Pixels, *, divide: bool) -> Pixels:
    top = 1.0 if pixels.dtype.kind == "f" else float(np.iinfo(pixels.dtype).max)
    result = np.empty_like(pixels)
    for start in range(0, len(pixels), 256):
        rows = slice(start, start + 256)
        share = np.asarray(alpha[rows], np.float64)[..., None] / top
        share = np.where(share == 0.0, 1.0, share)
        values = pixels[rows] / share if divide else pixels[rows] * share
        result[rows] = values if pixels.dtype.kind == "f" else np.floor(values + 0.5)
    return result
