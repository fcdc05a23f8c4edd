import base64
import io

import numpy as np
import pytest
from PIL import Image
from skimage import data

from grader.report.pictures import open_picture, picture_pairs, small_uri, spread_evenly
from grader.report.recount import read_shoot


def decoded(uri):
    head, content = uri.split(",")
    assert head == "data:image/webp;base64"
    return Image.open(io.BytesIO(base64.b64decode(content)))


def jpeg(picture):
    buffer = io.BytesIO()
    picture.save(buffer, "JPEG", quality=92)
    return buffer.getvalue()


@pytest.mark.parametrize("side_px", [96, 320])
def test_a_small_picture_keeps_the_cast(side_px):
    # photograph packaged by scikit-image, reddened by a known factor
    photograph = data.coffee()
    means = []
    for factor in (1.0, 0.7):
        picture = Image.fromarray((photograph * (1.0, factor, factor)).astype(np.uint8))
        small = decoded(small_uri(open_picture(jpeg(picture)), side_px))
        assert max(small.size) == side_px
        means.append(np.asarray(small.convert("RGB"), float).mean((0, 1)))
    assert means[1] / means[0] == pytest.approx((1.0, 0.7, 0.7), abs=0.02)


def test_a_small_picture_is_not_blown_up():
    assert decoded(small_uri(Image.new("RGB", (30, 20)), 320)).size == (30, 20)


@pytest.mark.parametrize("content", [None, b"", b"no picture", jpeg(Image.new("RGB", (9, 9)))[:40]])
def test_what_is_no_picture_is_none(content):
    assert open_picture(content) is None


@pytest.mark.parametrize("budget", [200_000, 60_000, 10_000, 0, -5])
def test_pictures_stay_within_the_budget(budget):
    noise = np.random.default_rng(1).integers(0, 255, (200, 300, 3), np.uint8)
    busy, calm = jpeg(Image.fromarray(noise)), jpeg(Image.new("RGB", (300, 200), (90, 90, 90)))
    rows = read_shoot({"kind": "frame", "file": str(k)} for k in range(40)).frames

    def thumbnails(record):
        return (busy, calm) if int(record["file"]) % 5 else (busy, busy)

    pairs = picture_pairs(rows, thumbnails, large=[], first=[3], budget=budget)
    assert sum(len(uri) for pair in pairs.values() for uri in pair if uri) <= max(budget, 0)
    assert set(picture_pairs(rows, thumbnails, large=[7], first=[], budget=0)) == {7}


def test_spread():
    assert spread_evenly(range(10), 20) == list(range(10))
    assert spread_evenly(range(10), 1) == [0]
    assert spread_evenly([], 3) == []
    assert spread_evenly(range(101), 5) == [0, 25, 50, 75, 100]
