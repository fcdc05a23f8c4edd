"""The sample photographs: complete, readable by LibRaw, tifffile and Pillow, and made by the script beside them."""

import json
import sys
from datetime import datetime
from pathlib import Path

import colour
import numpy as np
import pytest
import rawpy
import tifffile
from PIL import Image

from grader.colour.white import cct_duv_from_xy, xy_from_linear

FOLDER = Path(__file__).parent.parent / "sample_images"
sys.path.insert(0, str(FOLDER))

import dng_writer  # noqa: E402 - they live with the pictures
import make_samples  # noqa: E402
import spectra  # noqa: E402

TRUTH = json.loads((FOLDER / "truth.json").read_text(encoding="utf-8"))
PICTURES = sorted(p for p in FOLDER.iterdir() if p.suffix in {".dng", ".tif", ".jpg"})
RAW = [p for p in PICTURES if p.suffix == ".dng"]


def decode(path):
    """Decode as linear Rec.2020 with the file's own balance."""
    with rawpy.imread(str(path)) as raw:
        return raw.postprocess(
            gamma=(1, 1),
            no_auto_bright=True,
            adjust_maximum_thr=0.0,
            use_camera_wb=True,
            output_bps=16,
            output_color=rawpy.ColorSpace.Rec2020,
            user_flip=0,
        )


def test_there_is_an_evening_of_two_bodies_in_five_lights():
    assert [p.name for p in PICTURES] == sorted(TRUTH)
    assert len(PICTURES) >= 16
    assert sum(p.stat().st_size for p in FOLDER.iterdir() if p.is_file()) < 15_000_000
    assert {p.suffix for p in PICTURES} == {".dng", ".tif", ".jpg"}
    assert len({t["body"] for t in TRUTH.values()}) == 2
    assert {t["light"] for t in TRUTH.values()} == {"window", "tungsten", "fluorescent", "led", "stage"}
    assert sum(t["coloured"] for t in TRUTH.values()) == 1


def test_truth_is_what_the_script_says():
    assert json.loads(json.dumps(make_samples.truth())) == TRUTH


def test_times_run_through_one_evening():
    moments = [datetime.fromisoformat(t["taken_at"]) for t in TRUTH.values()]
    assert moments == sorted(moments)
    assert len({m.date() for m in moments}) == 1
    assert all(m.tzinfo and m.microsecond for m in moments)


@pytest.mark.parametrize("path", PICTURES, ids=lambda p: p.name)
def test_times_and_bodies_stand_in_the_files(path):
    if path.suffix == ".jpg":
        with Image.open(path) as image:
            tags, exif = dict(image.getexif()), image.getexif().get_ifd(34665)
        make, model = tags[271], tags[272]
        found = (exif[36867], exif[37521], exif[36881], exif[42033])
    else:
        with tifffile.TiffFile(path) as file:
            page = file.pages[0].tags
            make, model, exif = page[271].value, page[272].value, page[34665].value
        names = ("DateTimeOriginal", "SubsecTimeOriginal", "OffsetTimeOriginal", "BodySerialNumber")
        found = tuple(exif[name] for name in names)
    moment = datetime.fromisoformat(TRUTH[path.name]["taken_at"])
    assert found[0] == moment.strftime("%Y:%m:%d %H:%M:%S")
    assert float("0." + found[1]) == pytest.approx(moment.microsecond / 1e6)
    assert found[2] == moment.strftime("%:z") if sys.version_info >= (3, 12) else found[2] == "+01:00"
    assert f"{make} {model} {found[3]}" == TRUTH[path.name]["body"]


@pytest.mark.parametrize("path", RAW, ids=lambda p: p.name)
def test_libraw_opens_each_raw_frame_as_a_picture(path):
    with rawpy.imread(str(path)) as raw:
        assert raw.color_desc == b"RGBG"
        as_shot = 1 / np.array(raw.camera_whitebalance[:3])
        mosaic = raw.raw_image.astype(float)
        white = raw.white_level
    neutral = np.array(TRUTH[path.name]["as_shot_neutral"])
    np.testing.assert_allclose(as_shot / as_shot.max(), neutral / neutral.max(), rtol=1e-4)
    assert np.quantile(mosaic, 0.99) > 3 * np.quantile(mosaic, 0.05)
    assert (mosaic >= white).mean() < 0.25


def test_the_window_panes_are_clipped():
    with rawpy.imread(str(FOLDER / "TWK_0103.dng")) as raw:
        assert (raw.raw_image >= raw.white_level).mean() > 0.05


@pytest.mark.parametrize("letter", ["A", "B"])
@pytest.mark.parametrize("light", ["window", "tungsten", "fluorescent", "led"])
@pytest.mark.parametrize("cfa", [dng_writer.RGGB, dng_writer.GBRG])
def test_libraw_decodes_a_grey_card_to_grey(tmp_path, letter, light, cfa):
    """At the light's own balance R = G = B; at the daylight balance the light's colour is the one in truth.json."""
    body = spectra.BODIES[letter]
    neutral = spectra.sensor_neutral(body, light)
    neutral = neutral / neutral.max()
    card = np.broadcast_to(0.4 * neutral, (64, 96, 3))
    values = dng_writer.mosaic_of(card, cfa) * (body.white - body.black) + body.black
    for balance in (neutral, spectra.sensor_neutral(body, "d65")):
        dng_writer.write_dng(
            tmp_path / "card.dng",
            np.round(values).astype(np.uint16),
            colour_matrix=spectra.colour_matrix(body),
            as_shot_neutral=balance / balance.max(),
            levels=(body.black, body.white),
            cfa=cfa,
        )
        middle = decode(tmp_path / "card.dng")[16:48, 16:80].reshape(-1, 3).mean(axis=0)
        if balance is neutral:
            np.testing.assert_allclose(middle / middle[1], 1, atol=0.005)
    [true_xy] = {
        tuple(t["white_xy"])
        for t in TRUTH.values()
        if (t["body"], t["light"], t["referred"]) == (body.name, light, "scene")
    }
    np.testing.assert_allclose(xy_from_linear(middle), true_xy, atol=0.001)


def test_true_lights_are_the_published_ones():
    """CIE 15:2004 and CIE 015:2018 as colour-science tabulates them."""
    published = colour.CCS_ILLUMINANTS["CIE 1931 2 Degree Standard Observer"]
    for light, name in (("tungsten", "A"), ("fluorescent", "FL6"), ("led", "LED-B3")):
        [xy] = {tuple(t["light_xy"]) for t in TRUTH.values() if t["light"] == light}
        np.testing.assert_allclose(xy, published[name], atol=3e-4)
    [window_xy] = {tuple(t["light_xy"]) for t in TRUTH.values() if t["light"] == "window"}
    assert cct_duv_from_xy(window_xy)[0] == pytest.approx(6000, rel=0.001)


def test_colour_matrices_serve_their_sensors():
    """Chart patches through sensor and matrix, against the CIE observer: mean Delta E 2000 below 1.5 under D65."""
    daylight, patches = spectra.lights()["d65"], spectra.chart_reflectances()
    observer = spectra.observer()
    white = daylight @ observer
    reference = colour.XYZ_to_Lab((patches * daylight) @ observer / white[1], colour.XYZ_to_xy(white))
    for body in spectra.BODIES.values():
        sensor = (patches * daylight) @ body.sensitivities()
        xyz = sensor @ np.linalg.inv(spectra.colour_matrix(body)).T / (daylight @ body.sensitivities()).max()
        lab = colour.XYZ_to_Lab(xyz, colour.XYZ_to_xy(white))
        assert colour.difference.delta_E_CIE2000(lab, reference).mean() < 1.5


@pytest.mark.parametrize("number", [1, 20])
def test_the_script_makes_these_very_frames(number):
    """A window of the picture, traced again; a last bit may differ between processors."""
    take = make_samples.TAKES[number - 1]
    left, top, right, bottom = window = (320, 220, 344, 236)
    again = make_samples.mosaic(take, window).astype(int)
    with rawpy.imread(str(FOLDER / take.file)) as raw:
        stored = raw.raw_image[top:bottom, left:right].astype(int)
    assert again.shape == (bottom - top, right - left)
    assert (np.abs(again - stored) <= 1).mean() > 0.99
