"""The space that explains a picture: its profile, what else it says, or an assumption that is told."""

from __future__ import annotations

import io
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader.colour.spaces import SPACES
from grader.files import metadata_tree, profile, profile_convert
from grader.files.raster import Decoded
from grader.files.raster_depth import scaled
from grader.model import Metadata, Space

Pixels = NDArray[Any]
_COLOUR_SPACE: Final = 0xA001
_FITTING: Final = {"grey": ("GRAY", "RGB"), "rgb": ("RGB",), "cmyk": ("CMYK",), "lab": ("Lab",)}
"""Colours of a profile by the colours of the picture; a grey picture may carry an RGB profile, as its neutral axis."""


def coloured(decoded: Decoded) -> tuple[Pixels, Space]:
    """Return (H, W, 3) pixels and the space that explains them."""
    parsed = _profile(decoded)
    if decoded.kind in ("cmyk", "lab"):
        return _converted(decoded, parsed)
    if parsed is not None and parsed.has_table:
        return _by_table(decoded, parsed, decoded.icc or b"")
    pixels = _three_channels(scaled(decoded.samples, decoded.bits))
    if parsed is not None and decoded.icc is not None:
        try:
            return pixels, profile.space_from_parsed(parsed, decoded.icc)
        except profile.ProfileProblem as problem:
            _broken(decoded, str(problem))
    space = decoded.space or _assumed(decoded)
    if (
        decoded.space is None or decoded.format == "png"
    ):  # PNG's own chunks are written again, Exif is not enough
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
    try:
        parsed = profile.parse(decoded.icc)
    except profile.ProfileProblem as problem:
        _broken(decoded, str(problem))
        return None
    if parsed.colours not in _FITTING[decoded.kind]:
        _broken(decoded, f"it is for {parsed.colours} colours")
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


def _by_table(decoded: Decoded, parsed: profile.Parsed, icc: bytes) -> tuple[Pixels, Space]:
    """Return the pixels of a profile with look-up tables: as they are where matrix and curves say the same."""
    try:
        space = profile.space_from_parsed(parsed, icc)
    except profile.ProfileProblem:
        space = None
    try:
        if space is not None and profile_convert.agrees(space, icc, parsed.colours):
            return _three_channels(scaled(decoded.samples, decoded.bits)), space
        samples = scaled(decoded.samples, decoded.bits)
        if parsed.colours == "RGB":
            samples = _three_channels(samples)
        pixels = profile_convert.wide_from_device(samples, icc)
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
    """Return opRGB where Exif says so, else None; many cameras say it in no other way.

    Either by the interoperability index R03 (DCF's optional colour space), or by a colour space of 2, which
    Exif does not define but some cameras write. (common practice)

    References
    ----------
    .. [1] CIPA DC-008-2023 (Exif 3.0), 4.6.3 and annex on interoperability; CIPA DC-009 (DCF 2.0).
    """
    if carried.exif is None:
        return None
    try:
        tree = metadata_tree.read_tree(io.BytesIO(carried.exif), len(carried.exif))
    except metadata_tree.BrokenStructure:
        return None
    stated = tree.exif.get(_COLOUR_SPACE)
    optional = stated is not None and metadata_tree.numbers(stated, tree.order)[:1] == [2]
    if optional or metadata_tree.text(tree.interop.get(1)) == "R03":
        return SPACES["opRGB"]
    return None
