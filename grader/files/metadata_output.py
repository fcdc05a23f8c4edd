"""Make a frame's metadata fit the file that is written from it."""

from __future__ import annotations

import io
import re
import struct
from typing import Final, Literal

from grader.files import xmp
from grader.files.metadata_build import tree_bytes
from grader.files.metadata_facts import MAKE, MODEL, ORIENTATION, SOFTWARE
from grader.files.metadata_segments import EXIF_ROOM, XMP_ROOM
from grader.files.metadata_tree import (
    MAKER_NOTE,
    BrokenStructure,
    Field,
    Tree,
    ascii_field,
    long_field,
    rational_field,
    read_tree,
    short_field,
)
from grader.model import Correction, Frame, Header, Metadata, Output

Kind = Literal["tiff", "jpeg", "png"]

_GEO_TAGS: Final = (0x830E, 0x8480, 0x8482, 0x85D8, 0x87AF, 0x87B0, 0x87B1, 0xC4F5)
"""Tags that place a TIFF on a map (OGC GeoTIFF 1.1)."""
_PLACE_DATASETS: Final = frozenset({26, 27, 90, 92, 95, 100, 101})
"""IPTC-IIM 4.2 record 2: content location, city, sublocation, state, country."""
_EXIF_VERSION, _COLOUR_SPACE, _WIDTH, _HEIGHT = 0x9000, 0xA001, 0xA002, 0xA003
_SRGB, _UNCALIBRATED = 1, 65_535
_NOT_IN_XML: Final = re.compile(r"[^\t\n\r\x20-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]")
_CHROMA_PLACE, _CENTRED = 0x0213, 1
"""YCbCrPositioning, which Exif asks of a JPEG; libjpeg's chroma samples lie centred."""


def for_output(frame: Frame, kind: Kind, output: Output, correction: Correction | None = None) -> Metadata:
    """Return the metadata to embed beside a frame's pixels.

    The orientation tag stays as the pixels are stored; pixel layout, sensor data and the old thumbnail (which
    shows the picture as it was) go; the software tags name grader; the correction is recorded in XMP.

    Parameters
    ----------
    frame : Frame
        The frame as it is written: its space is the output's.
    kind : {"tiff", "jpeg", "png"}
    output : Output
        ``strip_location`` drops coordinates and names of places from Exif, XMP and IPTC.
    correction : Correction, optional

    Returns
    -------
    Metadata
        ``notes`` tells what had to be left out.
    """
    notes: list[str] = []
    tree = _tree(frame.metadata.exif, notes)
    _fill_from_header(tree, frame.header)
    _state(tree, frame, kind)
    if output.strip_location:
        tree.gps = {}
        for tag in _GEO_TAGS:
            tree.ifd0.pop(tag, None)
    packet = _packet(frame.metadata.xmp, notes)
    _state_xmp(packet, frame, kind)
    if output.strip_location:
        packet.drop_location()
    if correction is not None:
        packet.record(_record(frame, output, correction))
    iptc = _without_places(frame.metadata.iptc) if output.strip_location else frame.metadata.iptc
    resources = frame.metadata.resources
    if kind == "jpeg":
        main, more = packet.split(XMP_ROOM)
        exif = _fitting(tree, notes)
        return Metadata(exif, main, iptc, resources, more, notes=tuple(notes))
    return Metadata(tree_bytes(tree), packet.to_bytes(), iptc, resources, notes=tuple(notes))


def software() -> str:
    """Return the name and version that go into software tags."""
    from grader import __version__  # noqa: PLC0415 - the package is complete by now

    return f"grader {__version__}"


def _tree(exif: bytes | None, notes: list[str]) -> Tree:
    if exif is None:
        return Tree()
    try:
        return read_tree(io.BytesIO(exif), len(exif))
    except BrokenStructure as problem:
        notes.append(f"the Exif metadata were left out: {problem}")
        return Tree()


def _packet(data: bytes | None, notes: list[str]) -> xmp.Packet:
    try:
        return xmp.Packet(data)
    except xmp.BrokenPacket as problem:
        notes.append(f"the XMP metadata were left out: {problem}")
        return xmp.Packet()


def _fill_from_header(tree: Tree, header: Header) -> None:
    """Give a frame whose file has no Exif data what is known of it otherwise."""
    if tree.exif or tree.ifd0.keys() & {MAKE, MODEL, 0x0132}:
        return
    if header.body:
        tree.ifd0[MODEL] = ascii_field(header.body)
    if header.taken_at:
        stamp = header.taken_at
        tree.exif[0x9003] = ascii_field(stamp[:10].replace("-", ":") + " " + stamp[11:19])
        fraction = stamp[20:].split("+")[0].split("-")[0] if stamp[19:20] == "." else ""
        if fraction.isdigit():
            tree.exif[0x9291] = ascii_field(fraction)
    for tag, value in ((0x829A, header.exposure_time_s), (0x829D, header.f_number)):
        if value is not None:
            tree.exif[tag] = rational_field([_fraction(value)], tree.order)
    if header.iso is not None and header.iso < _UNCALIBRATED:
        tree.exif[0x8827] = short_field(round(header.iso), tree.order)


def _fraction(value: float) -> tuple[int, int]:
    """Return a photographic fraction: 1/n for short times, else thousandths."""
    if value < 0.3 and abs(1 / value - round(1 / value)) < 0.02 / value:
        return 1, round(1 / value)
    return min(round(value * 1000), 0xFFFF_FFFF), 1000


def _state(tree: Tree, frame: Frame, kind: Kind) -> None:
    """Say in Exif what the written file is."""
    order = tree.order
    tree.ifd0[ORIENTATION] = short_field(frame.header.orientation, order)
    tree.ifd0[SOFTWARE] = ascii_field(software())
    height, width = frame.pixels.shape[:2]
    srgb = frame.space.name == "sRGB"
    tree.exif.setdefault(_EXIF_VERSION, Field(7, 4, b"0232"))
    tree.exif[_COLOUR_SPACE] = short_field(_SRGB if srgb else _UNCALIBRATED, order)
    tree.exif[_WIDTH] = long_field(width, order)
    tree.exif[_HEIGHT] = long_field(height, order)
    if kind == "jpeg":
        tree.ifd0[_CHROMA_PLACE] = short_field(_CENTRED, order)
    if tree.interop:  # Exif 2.32: R98 = sRGB, R03 = its optional wide space
        name = {"sRGB": b"R98\0", "opRGB": b"R03\0"}.get(frame.space.name)
        if name is None:
            tree.interop = {}
        else:
            tree.interop[1] = Field(2, 4, name)


def _state_xmp(packet: xmp.Packet, frame: Frame, kind: Kind) -> None:
    """Keep XMP's copies of Exif values in step; an extension it may name is part of it by now."""
    packet.drop_extension_name()
    height, width = frame.pixels.shape[:2]
    colour = _SRGB if frame.space.name == "sRGB" else _UNCALIBRATED
    for namespace, name, value in (
        (xmp.TIFF, "Orientation", frame.header.orientation),
        (xmp.TIFF, "Software", software()),
        (xmp.TIFF, "ImageWidth", width),
        (xmp.TIFF, "ImageLength", height),
        (xmp.EXIF, "PixelXDimension", width),
        (xmp.EXIF, "PixelYDimension", height),
        (xmp.EXIF, "ColorSpace", colour),
        (xmp.DC, "format", f"image/{kind}"),
        (xmp.PHOTOSHOP, "ICCProfile", frame.space.name),
    ):
        packet.replace(namespace, name, str(value))


def _record(frame: Frame, output: Output, correction: Correction) -> dict[str, str]:
    """Return the correction as properties of our namespace."""
    values = {
        "Software": software(),
        "SourceFile": (frame.header.file or "").replace("\\", "/").rsplit("/", 1)[-1],
        "TowardXY": _numbers(correction.toward_xy),
        "Matrix": _numbers(float(v) for v in correction.matrix.ravel()),
        "Adaptation": correction.transform,
        "Degree": f"{correction.degree:g}",
        "KeepYellowBlue": f"{correction.keep_yellow_blue:g}",
        "KeepGreenMagenta": f"{correction.keep_green_magenta:g}",
        "Reason": correction.reason,
    }
    if correction.from_xy is not None:
        values["FromXY"] = _numbers(correction.from_xy)
    if correction.doubt_deg is not None:
        values["DoubtDegrees"] = f"{correction.doubt_deg:.3g}"
    if frame.header.referred == "scene":
        values["Tone"] = output.tone
        values["ExposureEV"] = f"{output.exposure_ev:g}"
    return {name: _legal(value) for name, value in values.items() if value}


def _legal(text: str) -> str:
    r"""Return text as XML can hold it (XML 1.0, 2.2 "Characters"): what it cannot, file names may have.

    Examples
    --------
    >>> _legal("caf\udce9\x1b.tif")
    'caf\\xe9\\x1b.tif'
    """
    named = text.encode("utf-8", "surrogateescape").decode("utf-8", "backslashreplace")
    return _NOT_IN_XML.sub(lambda found: found[0].encode("unicode_escape").decode("ascii"), named)


def _numbers(values: object) -> str:
    return " ".join(f"{float(v):.6f}" for v in values)  # type: ignore[attr-defined]


def _without_places(iptc: bytes | None) -> bytes | None:
    """Return IPTC-IIM records without the datasets that name a place."""
    if iptc is None:
        return None
    kept, at = [], 0
    while at + 5 <= len(iptc) and iptc[at] == 0x1C:
        record, dataset, length = struct.unpack(">BBH", iptc[at + 1 : at + 5])
        if length & 0x8000:  # an extended dataset: the length's length
            return None
        if not (record == 2 and dataset in _PLACE_DATASETS):
            kept.append(iptc[at : at + 5 + length])
        at += 5 + length
    return b"".join(kept) or None


def _fitting(tree: Tree, notes: list[str]) -> bytes:
    """Return Exif data that fit a JPEG segment: where they are too long, the maker note goes, then the largest values."""
    exif = tree_bytes(tree)
    while len(exif) > EXIF_ROOM:
        directory, tag = _largest(tree)
        name = "the maker note" if tag == MAKER_NOTE else f"the metadata tag {tag:#06x}"
        notes.append(f"{name} is too large for a JPEG and was left out")
        del directory[tag]
        exif = tree_bytes(tree)
    return exif


def _largest(tree: Tree) -> tuple[dict[int, Field], int]:
    if MAKER_NOTE in tree.exif and len(tree.exif[MAKER_NOTE].data) > 4096:
        return tree.exif, MAKER_NOTE
    everything = [(len(v.data), tag, d) for d in (tree.ifd0, tree.exif, tree.gps) for tag, v in d.items()]
    _, tag, directory = max(everything, key=lambda item: item[:2])
    return directory, tag
