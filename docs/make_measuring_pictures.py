"""Make the pictures of docs/MEASURING.md from a sample frame: the evidence maps, the posterior, before and after.

Run from the project's root: ``python docs/make_measuring_pictures.py``.
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
from PIL import Image, ImageDraw

import grader
from grader.cast import build_proxy, measure_proxy, plane, vote
from grader.cast.cells import cells_from_proxy
from grader.colour.spaces import SPACES
from grader.colour.transfer import encode
from grader.colour.white import linear_from_xy, planckian_xy

HERE = Path(__file__).parent
SAMPLES = HERE.parent / "sample_images"
FRAME = "TWK_0112.dng"
SCALE = 4
MARGIN = 22


def linear_to_image(linear, light):
    """Return a picture balanced for a light, by von Kries in cones, as sRGB."""
    to_cones = plane.LMS_FROM_REC2020
    balanced = (linear @ to_cones.T / (to_cones @ light) * (to_cones @ np.ones(3))) @ np.linalg.inv(
        to_cones
    ).T
    srgb = balanced @ np.linalg.inv(SPACES["sRGB"].rec2020_from_linear).T
    srgb = srgb / np.percentile(srgb, 99)
    encoded = encode(SPACES["sRGB"].curves[0], np.clip(srgb, 0, 1))
    return Image.fromarray(np.rint(255 * encoded).astype(np.uint8))


def map_image(log_values, title, marks):
    """Return a map over the candidates: yellow to the right, magenta upward, brighter is likelier."""
    values = np.exp(log_values - log_values.max())
    grid = np.full(plane.A_BINS * plane.B_BINS, -1.0)
    grid[plane.candidate_bins()] = values**0.5
    grid = grid.reshape(plane.A_BINS, plane.B_BINS)[::-1]
    grey = np.where(grid < 0, 46, 60 + 195 * np.maximum(grid, 0))[..., None].repeat(3, axis=2)
    picture = Image.fromarray(grey.astype(np.uint8)).resize(
        (plane.B_BINS * SCALE, plane.A_BINS * SCALE), Image.Resampling.NEAREST
    )
    sheet = Image.new("RGB", (picture.width, picture.height + MARGIN), "white")
    sheet.paste(picture, (0, MARGIN))
    draw = ImageDraw.Draw(sheet)
    draw.text((4, 5), title, fill="black")
    locus = [place(plane.ab_from_xy(planckian_xy(1e6 / mired))) for mired in range(80, 620, 10)]
    draw.line(locus, fill=(230, 150, 40), width=1)
    for radius, (ab, colour) in zip((9, 5), marks, strict=True):
        x, y = place(ab)
        draw.ellipse((x - radius, y - radius, x + radius, y + radius), outline=colour, width=2)
    return sheet


def place(ab):
    x = (ab[1] - plane.B_START) / plane.STEP * SCALE
    y = (plane.A_BINS - (ab[0] - plane.A_START) / plane.STEP) * SCALE + MARGIN
    return float(x), float(y)


def side_by_side(pictures, gap=8):
    width = sum(p.width for p in pictures) + gap * (len(pictures) - 1)
    sheet = Image.new("RGB", (width, max(p.height for p in pictures)), "white")
    x = 0
    for picture in pictures:
        sheet.paste(picture, (x, 0))
        x += picture.width + gap
    return sheet


def stacked(rows, gap=8):
    sheet = Image.new(
        "RGB", (max(r.width for r in rows), sum(r.height for r in rows) + gap * (len(rows) - 1)), "white"
    )
    y = 0
    for row in rows:
        sheet.paste(row, (0, y))
        y += row.height + gap
    return sheet


def main():
    proxy = build_proxy(grader.read(SAMPLES / FRAME))
    cells, cast = cells_from_proxy(proxy), measure_proxy(proxy)
    ballot = vote.cast_vote(cells, "scene")
    truth = json.loads((SAMPLES / "truth.json").read_text())[FRAME]["white_xy"]
    marks = [(plane.ab_from_xy(truth), (40, 140, 255)), (plane.ab_from_xy(cast.white_xy), (220, 40, 40))]
    maps = [
        map_image(values, title, marks)
        for title, values in (
            ("grey cells", ballot.parts[0]),
            ("surface colours", ballot.parts[1]),
            ("edge colours", ballot.parts[2]),
            ("prior: daylight and lamps", ballot.log_prior),
            ("all together", np.log(ballot.weights + 1e-300)),
        )
    ]
    blank = Image.new("RGB", maps[0].size, "white")
    draw = ImageDraw.Draw(blank)
    for line, (words, colour) in enumerate(
        (
            ("red: measured light", (220, 40, 40)),
            ("blue: true light", (40, 140, 255)),
            ("orange: Planck's lights", (200, 120, 20)),
        )
    ):
        draw.text((12, 60 + 22 * line), words, fill=colour)
    stacked([side_by_side(maps[:3]), side_by_side([*maps[3:], blank])]).quantize(64).save(
        HERE / "pictures" / "measuring-maps.png", optimize=True
    )
    pictures = [
        linear_to_image(proxy.linear.astype(float), light)
        for light in (np.ones(3), linear_from_xy(cast.white_xy))
    ]
    small = [p.resize((380, round(380 * p.height / p.width)), Image.Resampling.LANCZOS) for p in pictures]
    side_by_side(small).save(HERE / "pictures" / "measuring-before-after.jpg", quality=88)


if __name__ == "__main__":
    main()
