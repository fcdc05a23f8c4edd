"""Common LUT Format files, applied by OpenColorIO and compared with our own pixels."""

from __future__ import annotations

import json
from xml.etree import ElementTree as ET

import colour
import numpy as np
import PyOpenColorIO
import pytest
from colour.models.rgb.transfer_functions import exponent_function_monitor_curve
from hypothesis import given, settings
from hypothesis import strategies as st

from grader import clf, pixels
from grader.cast.correction import correction_for
from grader.colour.frames import frame_from_array
from grader.colour.spaces import SPACES, SRGB_CURVE
from grader.colour.transfer import decode, encode
from grader.errors import PresetError, WriteFailed
from grader.model import Correction, Header, Output, Recipe

NS = {"clf": clf.NAMESPACE}
TUNGSTEN = correction_for((0.4476, 0.4075), Header())
SLIGHT = correction_for((0.33, 0.35), Header(), Recipe(keep_yellow_blue=0.3))


def _by_opencolorio(path, picture):
    processor = PyOpenColorIO.Config.CreateRaw().getProcessor(PyOpenColorIO.FileTransform(str(path)))
    seen = np.array(picture, np.float32, order="C")
    processor.getDefaultCPUProcessor().applyRGB(seen)
    return seen


def _picture():
    """Colours of every kind, more of them dark; none near the file's white."""
    rng = np.random.default_rng(11)
    mixed = rng.uniform(0.0, 0.8, (60, 100, 3))
    mixed[:20] *= 0.05
    mixed[20:40] = rng.uniform(0.0, 0.8, (20, 100, 1)) + rng.uniform(0.0, 0.05, (20, 100, 3))
    return mixed.astype(np.float32)


@pytest.mark.parametrize("name", SPACES)
@pytest.mark.parametrize("correction", [TUNGSTEN, SLIGHT], ids=["tungsten", "slight"])
def test_opencolorio_agrees_with_our_pixels(tmp_path, name, correction):
    """OpenColorIO loads the file and gives our pixels where no highlight or gamut rule acts."""
    path = tmp_path / "made.clf"
    clf.write_clf(correction, name, path, title="made", description="for a test", exposure_ev=-0.5)
    picture = _picture()
    theirs = _by_opencolorio(path, picture)
    ours, _ = pixels.correct(frame_from_array(picture, space=name), correction, Output(exposure_ev=-0.5))
    plain = ((ours.pixels >= 0.0) & (ours.pixels <= 0.95)).all(axis=2)
    assert plain.mean() > 0.4
    assert np.abs(theirs - ours.pixels)[plain].max() < 2e-4


@pytest.mark.parametrize("name", [n for n in SPACES if n != "ROMM RGB"])
def test_values_beyond_white_and_below_black_are_carried(tmp_path, name):
    path = tmp_path / "made.clf"
    clf.write_clf(SLIGHT, name, path, title="made")
    picture = np.array([[[1.5, 1.2, 1.1], [-0.02, 0.1, 0.2], [0.0, 0.0, 0.0]]], np.float32)
    curve = SPACES[name].curves[0]
    expected = encode(curve, decode(curve, picture) @ clf.matrix_in_space(SLIGHT, SPACES[name]).T)
    assert _by_opencolorio(path, picture) == pytest.approx(expected, abs=5e-4)


def test_a_grey_under_the_light_becomes_neutral(tmp_path):
    """Light and encoding from colour-science: CIE illuminant A as sRGB sees it."""
    a_xy = colour.CCS_ILLUMINANTS["CIE 1931 2 Degree Standard Observer"]["A"]
    seen = colour.models.eotf_inverse_sRGB(colour.XYZ_to_RGB(colour.xy_to_XYZ(a_xy) * 0.3, "sRGB"))
    path = tmp_path / "a.clf"
    clf.write_clf(correction_for(tuple(a_xy), Header()), "sRGB", path, title="a")
    made = _by_opencolorio(path, np.broadcast_to(seen, (2, 2, 3)))
    assert np.ptp(made) < 2e-4


@pytest.mark.parametrize(
    ("name", "exponent", "offset"), [("sRGB", 2.4, 0.055), ("Rec.2020", 1 / 0.45, 0.09929682680944)]
)
def test_monitor_curves_are_the_spaces_curves(name, exponent, offset):
    """The Academy's monitor curve from colour-science."""
    x = np.linspace(0.0, 1.5, 5001)
    ours = SPACES[name].curves[0]
    theirs = exponent_function_monitor_curve(x, exponent, offset, "monCurveFwd")
    assert np.abs(theirs - decode(ours, x)).max() < 2e-6
    theirs = exponent_function_monitor_curve(x, exponent, offset, "monCurveRev")
    assert np.abs(theirs - encode(ours, x)).max() < 1.1e-5
    node = ET.fromstring(clf.clf_text(SLIGHT, name, title="x")).find("clf:Exponent/clf:ExponentParams", NS)
    assert float(node.get("exponent")) == pytest.approx(exponent)
    assert float(node.get("offset")) == pytest.approx(offset, abs=1e-12)
    assert SRGB_CURVE.g == 2.4


def test_file_has_what_readers_of_both_standards_look_for():
    """Attributes and elements of SMPTE ST 2136-1:2024 and of Academy S-2014-006 v3."""
    root = ET.fromstring(clf.clf_text(TUNGSTEN, "sRGB", title="hall", description="Grey card."))
    assert root.tag == f"{{{clf.NAMESPACE}}}ProcessList"
    assert root.get("compCLFversion") == "3.0"
    assert root.get("id") == root.find("clf:Id", NS).text
    assert root.get("id").startswith("urn:uuid:")
    assert [d.text for d in root.findall("clf:Description", NS)] == ["hall", "Grey card.", clf.LIMITS_NOTE]
    assert root.find("clf:InputDescriptor", NS).text == "sRGB"
    kinds = [node.tag.partition("}")[2] for node in root if node.get("inBitDepth")]
    assert kinds == ["Exponent", "Matrix", "Exponent"]


def test_linear_spaces_hold_the_bare_matrix_in_full_precision():
    root = ET.fromstring(clf.clf_text(TUNGSTEN, "linear Rec.2020", title="x"))
    assert root.find("clf:Exponent", NS) is None
    numbers = np.array([float(v) for v in root.find("clf:Matrix/clf:Array", NS).text.split()])
    assert numbers.reshape(3, 3) == pytest.approx(TUNGSTEN.matrix, abs=1e-15)


def test_same_correction_same_bytes_another_correction_another_id():
    text = clf.clf_text(TUNGSTEN, "ROMM RGB", title="x")
    assert text == clf.clf_text(TUNGSTEN, "romm rgb", title="x")
    ids = {ET.fromstring(t).get("id") for t in (text, clf.clf_text(SLIGHT, "ROMM RGB", title="x"))}
    assert len(ids) == 2


@settings(max_examples=60, deadline=None)
@given(title=st.text(max_size=40), description=st.text(max_size=40))
def test_any_words_make_well_formed_xml(title, description):
    text = clf.clf_text(SLIGHT, "sRGB", title=title, description=description)
    root = ET.fromstring(text.encode("utf-8"))
    assert len(root.get("name")) <= len(title)


def test_bad_requests(tmp_path):
    with pytest.raises(PresetError, match="no colour space"):
        clf.clf_text(TUNGSTEN, "sGRB", title="x")
    path = tmp_path / "a.clf"
    clf.write_clf(TUNGSTEN, "sRGB", path, title="x")
    with pytest.raises(WriteFailed, match="exists already"):
        clf.write_clf(TUNGSTEN, "sRGB", path, title="x")
    clf.write_clf(SLIGHT, "sRGB", path, title="x", overwrite=True)
    assert [p.name for p in tmp_path.iterdir()] == ["a.clf"]


def test_matrix_as_json():
    told = clf.matrix_json(TUNGSTEN, "display p3", exposure_ev=1.0)
    again = json.loads(json.dumps(told, allow_nan=False))
    assert again == told
    assert np.array(told["matrix"]) == pytest.approx(2.0 * TUNGSTEN.matrix)
    assert told["space"] == "Display P3"
    p3 = SPACES["Display P3"].rec2020_from_linear
    assert p3 @ np.array(told["matrix_in_space"]) == pytest.approx(np.array(told["matrix"]) @ p3)
    unknown = Correction(None, (0.3127, 0.3290), np.eye(3))
    assert clf.matrix_json(unknown)["from_xy"] is None
    assert "space" not in clf.matrix_json(unknown)
