import io

import numpy as np
import pytest
from PIL import Image

from grader.report import write_contact_sheet
from grader.report.contact import drawable


def test_pages_hold_every_frame_before_over_after(tmp_path, lines):
    target, red, blue = tmp_path / "sheet.jpg", flat(200, 60, 60), flat(60, 60, 200)
    pages = write_contact_sheet(lines[:51], target, thumbnails=lambda record: (red, blue))
    assert [page.name for page in pages] == ["sheet.jpg", "sheet-2.jpg", "sheet-3.jpg"]
    found = sum(count_pairs(page) for page in pages)
    assert found == 50


def flat(*colour):
    buffer = io.BytesIO()
    Image.new("RGB", (90, 60), colour).save(buffer, "JPEG", quality=95)
    return buffer.getvalue()


def count_pairs(page):
    """Count the places of the page's grid where a red picture stands over a blue one."""
    with Image.open(page) as image:
        assert image.format == "JPEG"
        pixels = np.asarray(image.convert("RGB"), int)
    red = (pixels[..., 0] > 150) & (pixels[..., 2] < 110)
    blue = (pixels[..., 2] > 150) & (pixels[..., 0] < 110)
    over = red[:-8] & blue[8:]
    lines = np.flatnonzero(np.diff(over.any(axis=1).astype(int)) == 1)
    return sum(int((np.diff(over[line + 4].astype(int)) == 1).sum()) for line in lines)


def test_frames_without_pictures_and_failed_ones_are_told(tmp_path, lines):
    (page,) = write_contact_sheet(lines[:9], tmp_path / "a.jpg", thumbnails=lambda record: (None, None))
    with Image.open(page) as image:
        assert image.size[0] > 2000
    assert len(write_contact_sheet([], tmp_path / "b.jpg", thumbnails=lambda record: (None, None))) == 1


@pytest.mark.parametrize(
    ("name", "drawn"),
    [
        ("plain-1.tif", "plain-1.tif"),
        ("Fête.tif", "Fete.tif"),
        ("写.tif", "\\u5199.tif"),
        ("3\u20132", "3-2"),
    ],
)
def test_names_that_the_font_cannot_draw(name, drawn):
    assert drawable(name) == drawn


def test_more_frames_than_anyone_looks_at_are_sampled(tmp_path, lines, monkeypatch):
    monkeypatch.setattr("grader.report.contact.MOST_FRAMES", 30)
    pages = write_contact_sheet(lines, tmp_path / "s.jpg", thumbnails=lambda record: (None, None))
    assert len(pages) == 2
