"""Metadata of every kind of source in every kind of output, written and read back by exiv2 (through pyexiv2).

Tags as in CIPA DC-008 (Exif 2.32), IPTC-IIM 4.2 and ISO 16684-1 (XMP).
"""

import io
import struct

import numpy as np
import pyexiv2
import pytest
import tifffile
import tifftools
from PIL import Image

from grader import files
from grader.colour.spaces import SPACES
from grader.files import metadata
from grader.files.metadata_tree import Structure
from grader.model import Correction, Frame, Header, Metadata, Output, ReadLimits

NOTE = bytes(range(256)) + b"\x00\x01\x02\xff"
EXIF = {
    "Exif.Image.Make": "Lumo Works",
    "Exif.Image.Model": "Lumo K2",
    "Exif.Image.Orientation": 6,
    "Exif.Image.Artist": "A. Nobody",
    "Exif.Image.Copyright": "nobody 2031",
    "Exif.Image.ImageDescription": "Vases, first lot",
    "Exif.Image.DateTime": "2031:05:04 19:00:00",
    "Exif.Photo.DateTimeOriginal": "2031:05:04 18:30:09",
    "Exif.Photo.SubSecTimeOriginal": "250",
    "Exif.Photo.OffsetTimeOriginal": "+02:00",
    "Exif.Photo.ExposureTime": "1/250",
    "Exif.Photo.FNumber": "28/10",
    "Exif.Photo.ISOSpeedRatings": 1600,
    "Exif.Photo.Flash": 1,
    "Exif.Photo.FocalLength": "350/10",
    "Exif.Photo.LensModel": "Lumo 35/1.8",
    "Exif.Photo.LensSpecification": "35/1 35/1 18/10 18/10",
    "Exif.Photo.BodySerialNumber": "0042",
    "Exif.Photo.UserComment": "charset=Unicode lot 7",
    "Exif.Photo.MakerNote": " ".join(str(b) for b in NOTE),
    "Exif.Iop.InteroperabilityIndex": "R98",
    "Exif.GPSInfo.GPSVersionID": "2 3 0 0",
    "Exif.GPSInfo.GPSLatitudeRef": "N",
    "Exif.GPSInfo.GPSLatitude": "47/1 30/1 0/1",
    "Exif.GPSInfo.GPSLongitudeRef": "E",
    "Exif.GPSInfo.GPSLongitude": "19/1 3/1 0/1",
    "Exif.GPSInfo.GPSAltitude": "1200/10",
}
IPTC = {
    "Iptc.Application2.Headline": "Pottery auction",
    "Iptc.Application2.Keywords": ["vase", "auction"],
    "Iptc.Application2.Byline": ["A. Nobody"],
    "Iptc.Application2.City": "Nowhere",
}
XMP = {
    "Xmp.dc.creator": ["A. Nobody"],
    "Xmp.dc.subject": ["vase", "auction"],
    "Xmp.dc.title": {'lang="x-default"': "Vases & jugs <1>"},
    "Xmp.xmp.Rating": "4",
    "Xmp.tiff.Orientation": "6",
    "Xmp.exif.GPSLatitude": "47,30.0N",
    "Xmp.photoshop.City": "Nowhere",
}
SOURCES = ("jpeg", "png", "tiff", "big-endian tiff", "raw")
OUTPUTS = (".jpg", ".png", ".tif")
PACKET = b"""<rdf:RDF xmlns:rdf="http://www.w3.org/1999/02/22-rdf-syntax-ns#"><rdf:Description rdf:about=""
    xmlns:xmp="http://ns.adobe.com/xap/1.0/" xmp:Rating="3"/></rdf:RDF>"""
CORRECTION = Correction(
    (0.44, 0.41), (0.3127, 0.329), np.diag([0.9, 1.0, 1.7]), reason='grey & "card"', doubt_deg=1.234
)


def write_source(folder, kind, sensor_file):
    """Write a picture without metadata, then let exiv2 put them in."""
    pixels = np.random.default_rng(1).integers(0, 255, (40, 60, 3), dtype=np.uint8)
    if kind == "raw":
        path = sensor_file(folder / "s.dng", np.full((40, 60, 3), 0.3))
    elif "tiff" in kind:
        path = folder / "s.tif"
        order = ">" if kind.startswith("big") else "<"
        tifffile.imwrite(
            path, pixels * np.uint16(257), photometric="rgb", metadata=None, byteorder=order, software=False
        )
    else:
        path = folder / f"s.{kind}"
        Image.fromarray(pixels).save(path)
    with pyexiv2.Image(str(path)) as image:
        image.modify_exif(EXIF)
        image.modify_iptc(IPTC)
        image.modify_xmp(XMP)
    return path


def look(path):
    with pyexiv2.Image(str(path)) as image:
        return image.read_exif(), image.read_iptc(), image.read_xmp()


@pytest.mark.parametrize("kind", SOURCES)
def test_nothing_is_lost_but_what_describes_pixels(sensor_file, tmp_path, kind):
    source = write_source(tmp_path, kind, sensor_file)
    exif, iptc, xmp = look(source)
    frame = files.read(source)
    header = frame.header
    assert header.body == "Lumo K2 0042"
    assert header.taken_at == "2031-05-04T18:30:09.250+02:00"
    assert (header.exposure_time_s, header.f_number, header.iso, header.flash) == (1 / 250, 2.8, 1600, True)
    assert header.orientation == 6
    assert frame.metadata.notes == ()
    for suffix in OUTPUTS:
        target = tmp_path / f"out{suffix}"
        written = files.write(frame, target, Output(), correction=CORRECTION)
        assert not any("metadata" in note for note in written.notes)
        exif_out, iptc_out, xmp_out = look(target)
        told_otherwise = (
            {"Exif.Iop.InteroperabilityIndex"} if kind == "raw" else set()
        )  # says sRGB; it is not
        for tag in EXIF.keys() - told_otherwise:
            assert exif_out[tag] == exif[tag], (suffix, tag)
        assert exif_out["Exif.Image.Software"].startswith("grader ")
        assert exif_out["Exif.Photo.PixelXDimension"] == str(frame.pixels.shape[1])
        assert iptc_out == iptc
        assert {k: v for k, v in xmp_out.items() if "grader" not in k} == xmp
        assert ("Exif.Image.YCbCrPositioning" in exif_out) == (suffix == ".jpg")
        own = {k.removeprefix("Xmp.grader."): v for k, v in xmp_out.items() if "grader" in k}
        assert own["FromXY"] == "0.440000 0.410000"
        assert own["Matrix"].split()[8] == "1.700000"
        assert own["Reason"] == 'grey & "card"'
        assert own["DoubtDegrees"] == "1.23"
        assert own["SourceFile"] == source.name


@pytest.mark.parametrize("kind", SOURCES)
def test_the_place_can_be_left_out(sensor_file, tmp_path, kind):
    frame = files.read(write_source(tmp_path, kind, sensor_file))
    for suffix in OUTPUTS:
        target = tmp_path / f"out{suffix}"
        files.write(frame, target, Output(strip_location=True))
        exif, iptc, xmp = look(target)
        assert not [k for k in exif if "GPS" in k]
        assert not [k for k in xmp if "GPS" in k or "City" in k]
        assert "Iptc.Application2.City" not in iptc
        assert b"Nowhere" not in target.read_bytes()
        assert exif["Exif.Photo.LensModel"] == "Lumo 35/1.8"
        assert iptc["Iptc.Application2.Headline"] == "Pottery auction"
        assert xmp["Xmp.dc.subject"] == ["vase", "auction"]


def test_coordinates_in_a_makers_own_xmp_go_too():
    packet = (
        b'<x:xmpmeta xmlns:x="adobe:ns:meta/"><rdf:RDF xmlns:rdf="http://www.w3.org/1999/02/22-rdf-syntax-ns#">'
        b'<rdf:Description rdf:about="" xmlns:fly="http://example.org/fly/" fly:GpsLatitude="47.5" fly:Speed="3">'
        b"<fly:Longitude>19.05</fly:Longitude></rdf:Description></rdf:RDF></x:xmpmeta>"
    )
    out = metadata.for_output(_frame(xmp=packet), "jpeg", Output(strip_location=True)).xmp
    assert b"47.5" not in out
    assert b"19.05" not in out
    assert b'fly:Speed="3"' in out


def test_orientation_says_how_the_pixels_are_stored_everywhere(tmp_path):
    """A tag that the pixels contradict would turn them twice."""
    packet = b"""<rdf:RDF xmlns:rdf="http://www.w3.org/1999/02/22-rdf-syntax-ns#"><rdf:Description rdf:about=""
        xmlns:tiff="http://ns.adobe.com/tiff/1.0/" tiff:Orientation="8"/></rdf:RDF>"""
    for suffix in OUTPUTS:
        target = tmp_path / f"o{suffix}"
        files.write(_frame(xmp=packet, orientation=3), target)
        exif, _, xmp = look(target)
        assert exif["Exif.Image.Orientation"] == "3" == xmp["Xmp.tiff.Orientation"]
    facts, _ = metadata.from_jpeg_info({"xmp": packet})
    assert facts["orientation"] == 8


def test_the_colour_space_tags_follow_the_output(tmp_path):
    for name, value, index in (("sRGB", "1", "R98"), ("opRGB", "65535", "R03"), ("ROMM RGB", "65535", None)):
        files.write(_frame(exif=_exif_with_interop(), space=name), tmp_path / "a.jpg", overwrite=True)
        exif = look(tmp_path / "a.jpg")[0]
        assert exif["Exif.Photo.ColorSpace"] == value
        assert exif.get("Exif.Iop.InteroperabilityIndex") == index


def test_a_maker_note_keeps_its_place_where_it_can(tmp_path):
    """Makers' notes hold offsets from the start of the Exif data: they are read right only where they stood."""
    for order in "<>":
        exif = _exif_with_note(order, 700)
        facts, carried = metadata.from_jpeg_info({"exif": b"Exif\0\0" + exif})
        assert facts["body"] == "Lumo K2"
        out = metadata.for_output(Frame(_pixels(), SPACES["sRGB"], Header(), carried), "jpeg", Output()).exif
        entry = tifftools.read_tiff(io.BytesIO(out))["ifds"][0]["tags"][0x8769]["ifds"][0][0]["tags"][0x927C]
        assert entry["offset"] == 700
        assert entry["data"] == NOTE
        target = tmp_path / "o.tif"
        files.write(Frame(_pixels(), SPACES["sRGB"], Header(), carried), target, overwrite=True)
        assert target.read_bytes()[:2] == (b"II" if order == "<" else b"MM")
        with tifffile.TiffFile(target) as file:
            assert file.pages[0].tags[0x8769].value["MakerNote"] == NOTE


def test_metadata_of_a_tiff_are_added_in_place(tmp_path):
    """Nothing that tifffile wrote moves; both byte orders, classic and BigTIFF, chunks and further pages."""
    pixels = np.arange(64 * 64 * 3, dtype=np.uint16).reshape(64, 64, 3)
    blob = Metadata(exif=_exif_with_note("<", 700), xmp=PACKET, iptc=b"\x1c\x02\x69\x00\x01a")
    for order in "<>":
        for big in (False, True):
            path = tmp_path / "a.tif"
            with tifffile.TiffWriter(path, bigtiff=big, byteorder=order) as file:
                file.write(pixels, tile=(16, 16), photometric="rgb", compression="zlib")
                file.write(pixels[:9, :9], photometric="rgb")
            before = path.read_bytes()
            metadata.write_into_tiff(path, blob)
            after = path.read_bytes()
            assert after[16:].startswith(before[16:])
            with tifffile.TiffFile(path) as file:
                assert len(file.pages) == 2
                np.testing.assert_array_equal(file.pages[0].asarray(), pixels)
                np.testing.assert_array_equal(file.pages[1].asarray(), pixels[:9, :9])
                assert file.pages[0].tags["Model"].value == "Lumo K2"
                assert file.pages[0].tags[700].value == blob.xmp
                assert file.pages[0].tags[0x8769].value["MakerNote"] == NOTE
            facts, again = metadata.from_tiff(path)
            assert facts["body"] == "Lumo K2"
            assert (again.iptc, again.xmp) == (blob.iptc, blob.xmp)


def test_long_xmp_is_cut_and_joined(tmp_path):
    """XMP specification part 3: what does not fit a segment goes into an extension named by its MD5 digest."""
    long = "cracked glaze " * 12_000
    packet = (
        '<x:xmpmeta xmlns:x="adobe:ns:meta/"><rdf:RDF xmlns:rdf="http://www.w3.org/1999/02/22-rdf-syntax-ns#">'
        '<rdf:Description rdf:about="" xmlns:dc="http://purl.org/dc/elements/1.1/" xmlns:p="http://example.org/p/"'
        f' p:small="kept" p:large="{long}"><p:notes>{long}</p:notes><dc:format>image/jpeg</dc:format>'
        "</rdf:Description></rdf:RDF></x:xmpmeta>"
    ).encode()
    target = tmp_path / "a.jpg"
    written = files.write(_frame(xmp=packet), target, correction=CORRECTION)
    assert written.notes == ()
    with Image.open(target) as image:
        main = image.info["xmp"]
    assert len(main) < 65_503
    assert b'p:small="kept"' in main
    assert b"HasExtendedXMP" in main
    again = files.read(target).metadata.xmp
    assert again.count(long.strip().encode()) == 2
    assert b"HasExtendedXMP" not in again
    files.write(files.read(target), tmp_path / "b.png")
    assert look(tmp_path / "b.png")[2]["Xmp.dc.format"] == "image/png"


def test_clipping_paths_are_carried(tmp_path):
    """Image resources 2000 to 2997 hold outlines that stay true; the old thumbnail (1036) does not."""
    path = b"8BIM\x07\xd0\x04vase\x00" + (26).to_bytes(4, "big") + bytes(range(26))
    thumbnail = b"8BIM\x04\x0c\x00\x00" + (3).to_bytes(4, "big") + b"old\x00"
    body = b"Photoshop 3.0\0" + thumbnail + path
    data = io.BytesIO()
    Image.fromarray(_pixels()).save(
        data, "JPEG", extra=b"\xff\xed" + (len(body) + 2).to_bytes(2, "big") + body
    )
    source = tmp_path / "s.jpg"
    source.write_bytes(data.getvalue())
    frame = files.read(source)
    for suffix in OUTPUTS:
        files.write(frame, tmp_path / f"o{suffix}")
        again = files.read(tmp_path / f"o{suffix}").metadata
        assert again.resources == path
        assert again.iptc is None


def test_directories_kept_in_boxes():
    """ISO/IEC 14496-12 boxes: size, kind, contents; a size of 1 means a long one, of 0 the rest of the file."""

    def box(kind, body, long=False):
        head = (
            struct.pack(">I4sQ", 1, kind, 16 + len(body))
            if long
            else struct.pack(">I4s", 8 + len(body), kind)
        )
        return head + body

    first = _exif([(0x010F, 2, 5, b"Lumo\0"), (0x0110, 2, 8, b"Lumo K3\0")])
    exif = _exif([(0x9003, 2, 20, b"2031:05:04 18:30:09\0"), (0xA431, 2, 5, b"0043\0")], ">")
    gps = _exif([(1, 2, 2, b"N\0")])
    own = box(
        b"uuid",
        bytes(16) + box(b"CNCV", b"x") + box(b"CMT1", first) + box(b"CMT2", exif) + box(b"CMT4", gps, True),
    )
    whole = (
        box(b"ftyp", b"crx ") + box(b"moov", own + box(b"mvhd", bytes(9))) + struct.pack(">I4s", 0, b"mdat")
    )
    facts, carried = metadata.from_boxes(io.BytesIO(whole))
    assert facts["body"] == "Lumo K3 0043"
    assert facts["taken_at"] == "2031-05-04T18:30:09"
    tags = tifftools.read_tiff(io.BytesIO(carried.exif))["ifds"][0]["tags"]
    assert tags[0x8825]["ifds"][0][0]["tags"][1]["data"] == "N"
    for cut in range(0, len(whole), 7):
        metadata.from_boxes(io.BytesIO(whole[:cut]))


def test_what_a_jpeg_cannot_hold_is_left_out_with_a_note(tmp_path):
    carried = Metadata(exif=_exif_with_note("<", 70_000, note=bytes(90_000)))
    frame = Frame(_pixels(), SPACES["sRGB"], Header(), carried)
    written = files.write(frame, tmp_path / "a.jpg")
    assert any("maker note" in note for note in written.notes)
    assert look(tmp_path / "a.jpg")[0]["Exif.Image.Model"] == "Lumo K2"
    files.write(frame, tmp_path / "a.tif")
    assert "Exif.Photo.MakerNote" in look(tmp_path / "a.tif")[0]


def test_a_frame_without_exif_gets_what_is_known(tmp_path):
    header = Header(
        body="Lumo K2 7", taken_at="2031-05-04T18:30:09.25", exposure_time_s=0.004, f_number=2.8, iso=800
    )
    files.write(Frame(_pixels(), SPACES["sRGB"], header), tmp_path / "a.jpg")
    exif = look(tmp_path / "a.jpg")[0]
    assert exif["Exif.Photo.DateTimeOriginal"] == "2031:05:04 18:30:09"
    assert exif["Exif.Photo.SubSecTimeOriginal"] == "25"
    assert exif["Exif.Photo.ExposureTime"] == "1/250"
    assert exif["Exif.Photo.ISOSpeedRatings"] == "800"
    assert files.read(tmp_path / "a.jpg").header.taken_at == header.taken_at


def test_grading_a_graded_file_records_the_last_correction_only(tmp_path):
    files.write(_frame(), tmp_path / "a.jpg", correction=CORRECTION)
    second = Correction((0.3, 0.3), (0.3127, 0.329), np.eye(3), reason="again")
    files.write(files.read(tmp_path / "a.jpg"), tmp_path / "b.jpg", correction=second)
    with Image.open(tmp_path / "b.jpg") as image:
        assert image.info["xmp"].count(b"grader:Reason") == 1
    assert look(tmp_path / "b.jpg")[2]["Xmp.grader.Reason"] == "again"


@pytest.mark.parametrize(
    "packet",
    [
        b'<!DOCTYPE x [<!ENTITY a "aaaa"><!ENTITY b "&a;&a;&a;">]><x>&b;</x>',
        b'<!DOCTYPE x [<!ENTITY a SYSTEM "file:///etc/passwd">]><x>&a;</x>',
        b"<x><y></x>",
        b"<x/>",
        b"\xff\xfe\x00",
        b"<a>" * 5_000 + b"</a>" * 5_000,
        b"<?xml version='1.0' encoding='no-such'?><x/>",
    ],
)
def test_broken_xmp_is_left_out_with_a_note(packet):
    facts, carried = metadata.from_jpeg_info({"xmp": packet})
    assert carried.xmp is None
    assert any("XMP" in note for note in facts["notes"])
    out = metadata.for_output(_frame(xmp=packet), "tiff", Output())
    assert any("XMP" in note for note in out.notes)
    assert b"ENTITY" not in out.xmp


def test_line_ends_inside_attributes_survive():
    packet = b"""<rdf:RDF xmlns:rdf="http://www.w3.org/1999/02/22-rdf-syntax-ns#"><rdf:Description rdf:about=""
        xmlns:p="http://example.org/p/" p:lines="one&#10;two&#9;&quot;&lt;"/></rdf:RDF>"""
    out = metadata.for_output(_frame(xmp=packet), "tiff", Output()).xmp
    assert b'p:lines="one&#10;two&#9;&quot;&lt;"' in out


def test_directories_in_a_circle_end():
    head = b"II*\0" + struct.pack("<I", 8)
    circle = head + struct.pack("<HHHII", 1, 0x8769, 4, 1, 8) + struct.pack("<I", 8)
    facts, carried = metadata.from_jpeg_info({"exif": b"Exif\0\0" + circle})
    assert facts.get("notes", ()) == ()
    assert carried.exif is None
    many = (
        head
        + struct.pack("<HHHII", 1, 0x014A, 4, 3, 30)
        + struct.pack("<I", 8)
        + struct.pack("<III", 8, 8, 8)
    )
    assert len(list(Structure(io.BytesIO(many)).walk())) == 1


def test_absurd_counts_and_offsets_are_left_out():
    entries = [
        struct.pack("<HHII", 0x010E, 2, 0xFFFFFFFF, 8),
        struct.pack("<HHII", 0x010F, 2, 64, 0xFFFFFFF0),
        struct.pack("<HHII", 0x0110, 99, 4, 0),
        struct.pack("<HHII", 0x0131, 2, 4, 0x41414141),
    ]
    data = b"II*\0" + struct.pack("<IH", 8, len(entries)) + b"".join(entries) + bytes(4)
    facts, carried = metadata.from_jpeg_info({"exif": data})
    assert "3 unreadable metadata values" in facts["notes"][0]
    assert b"AAAA" in carried.exif


def test_metadata_stay_within_their_limit():
    big = Metadata(exif=_exif_with_note("<", 700, note=bytes(5_000)))
    limits = ReadLimits(max_metadata_bytes=3_000)
    facts, carried = metadata.from_jpeg_info({"exif": big.exif, "xmp": bytes(4_000)}, limits)
    assert carried.exif is None is carried.xmp
    assert len([n for n in facts["notes"] if "too large" in n]) == 2
    stream = io.BytesIO(big.exif)
    facts, carried = metadata.from_tiff(stream, limits)
    assert facts["body"] == "Lumo K2"
    assert len(carried.exif) < 3_000


def test_hostile_metadata_end_in_notes():
    """Bytes of sound metadata changed at random: a result always comes back, and can be written."""
    rng = np.random.default_rng(11)
    sound = _exif_with_note("<", 300)
    for i in range(600):
        data = bytearray(sound)
        for at in rng.integers(0, len(data), rng.integers(1, 8)):
            data[at] = rng.integers(0, 256)
        facts, carried = metadata.from_jpeg_info({"exif": bytes(data)})
        assert set(facts) <= {
            "body",
            "taken_at",
            "exposure_time_s",
            "f_number",
            "iso",
            "flash",
            "orientation",
            "notes",
        }
        if i % 10 == 0:
            frame = Frame(_pixels(), SPACES["sRGB"], Header(**facts), carried)
            out = metadata.for_output(frame, "jpeg", Output(), CORRECTION)
            assert metadata.from_jpeg_info({"exif": out.exif, "xmp": out.xmp})[1].exif is not None


def test_hostile_xmp_ends_in_a_note_or_a_packet():
    rng = np.random.default_rng(12)
    for _ in range(400):
        data = bytearray(PACKET)
        for at in rng.integers(0, len(data), rng.integers(1, 5)):
            data[at] = rng.choice(np.frombuffer(b"<>&;/:\"'= !x\0\xff\xc3", np.uint8))
        facts, carried = metadata.from_jpeg_info({"xmp": bytes(data)})
        assert (carried.xmp is None) == any("XMP" in note for note in facts.get("notes", ()))
        out = metadata.for_output(_frame(xmp=bytes(data)), "png", Output(strip_location=True), CORRECTION).xmp
        assert metadata.from_jpeg_info({"xmp": out})[1].xmp == out


def test_xmp_in_utf_16():
    text = PACKET.decode().replace('xmp:Rating="3"', 'xmp:Label="v\u00e1za"')
    out = metadata.for_output(_frame(xmp=text.encode("utf-16")), "tiff", Output()).xmp
    assert "v\u00e1za".encode() in out


def test_not_bytes_at_all():
    assert metadata.from_jpeg_info({"exif": "text", "xmp": None})[1].exif is None
    facts, carried = metadata.from_png_info({"Raw profile type exif": "\nexif\n 4\n zz", "exif": b"short"})
    assert carried.exif is None
    assert facts["notes"]


def test_times_that_are_none():
    for stamp in (b"0000:00:00 00:00:00\0", b"    :  :     :  :  \0", b"2031:13:40 25:61:61\0", b"soon\0"):
        tree = _exif([(0x0132, 2, len(stamp), stamp)])
        assert "taken_at" not in metadata.from_jpeg_info({"exif": tree})[0]


def test_times_from_xmp_where_exif_has_none():
    packet = b"""<rdf:RDF xmlns:rdf="http://www.w3.org/1999/02/22-rdf-syntax-ns#"><rdf:Description rdf:about=""
        xmlns:exif="http://ns.adobe.com/exif/1.0/" exif:DateTimeOriginal="2031-05-04T18:30:09.50+02:00"/></rdf:RDF>"""
    assert metadata.from_jpeg_info({"xmp": packet})[0]["taken_at"] == "2031-05-04T18:30:09.50+02:00"


def _pixels():
    return np.full((16, 24, 3), 99, np.uint8)


def _frame(exif=None, xmp=None, orientation=1, space="sRGB"):
    header = Header(orientation=orientation, format="jpeg")
    return Frame(_pixels(), SPACES[space], header, Metadata(exif=exif, xmp=xmp))


def _exif(entries, order="<"):
    """Return a TIFF structure of one directory with values (tag, type, count, bytes) after it."""
    at = 8 + 2 + 12 * len(entries) + 4
    body, values = struct.pack(order + "H", len(entries)), b""
    for tag, kind, count, data in entries:
        body += struct.pack(order + "HHI", tag, kind, count)
        if len(data) <= 4:
            body += data.ljust(4, b"\0")
        else:
            body += struct.pack(order + "I", at + len(values))
            values += data + b"\0" * (len(data) % 2)
    mark = b"II" if order == "<" else b"MM"
    return mark + struct.pack(order + "HI", 42, 8) + body + bytes(4) + values


def _exif_with_note(order, at, note=NOTE):
    """Return Exif data whose maker note stands at an offset."""
    sub = 100
    first = _exif([(0x0110, 2, 8, b"Lumo K2\0"), (0x8769, 4, 1, struct.pack(order + "I", sub))], order)
    inner = struct.pack(order + "HHHII", 1, 0x927C, 7, len(note), at) + bytes(4)
    return (first.ljust(sub, b"\0") + inner).ljust(at, b"\0") + note


def _exif_with_interop():
    inner = struct.pack("<HHHI4s", 1, 1, 2, 4, b"R98\0") + bytes(4)
    sub = struct.pack("<HHHII", 1, 0xA005, 4, 1, 200) + bytes(4)
    first = _exif([(0x8769, 4, 1, struct.pack("<I", 100))])
    return (first.ljust(100, b"\0") + sub).ljust(200, b"\0") + inner
