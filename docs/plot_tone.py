"""Draw docs/tone.png: the tone curve that raw frames get.  Run: python docs/plot_tone.py."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw, ImageFont

from grader.colour import tone
from grader.colour.spaces import SRGB_CURVE
from grader.colour.transfer import encode

Array = NDArray[np.float64]
SIZE, MARGIN, SCALE = 460, 70, 2
INK, GRID, CURVE, PLAIN, MARK = "#222222", "#d8d8d8", "#b3541e", "#7a8b99", "#2d6a4f"


def panel(
    image: Image.Image, left: int, title: str, ticks: list[tuple[float, str]], place: Callable[[Array], Array]
) -> Callable[[Array, Array, str, int], None]:
    """Draw a square panel whose x axis is ``place`` (0 to 1) of scene light; return a function that draws a line."""
    draw = ImageDraw.Draw(image)
    font = ImageFont.load_default(13 * SCALE)
    x0, y0, side = (left + MARGIN) * SCALE, MARGIN * SCALE // 2, SIZE * SCALE
    for value, label in ticks:
        x = x0 + float(place(np.array(value))) * side
        draw.line([x, y0, x, y0 + side], GRID, SCALE)
        draw.text((x, y0 + side + 6 * SCALE), label, INK, font, anchor="ma")
    for level in (0, 64, 118, 192, 255):
        y = y0 + side * (1 - level / 255)
        draw.line([x0, y, x0 + side, y], GRID, SCALE)
        draw.text((x0 - 6 * SCALE, y), str(level), INK, font, anchor="rm")
    draw.rectangle([x0, y0, x0 + side, y0 + side], outline=INK, width=SCALE)
    draw.text((x0 + side / 2, y0 + side + 26 * SCALE), title, INK, font, anchor="ma")

    def line(scene: Array, level: Array, colour: str, width: int) -> None:
        x = x0 + place(scene) * side
        y = y0 + side * (1 - level)
        draw.line(list(zip(x.tolist(), y.tolist(), strict=True)), colour, width * SCALE, joint="curve")

    return line


def main() -> None:
    """Draw both panels and save them beside this script."""
    image = Image.new("RGB", ((2 * (SIZE + MARGIN) + 40) * SCALE, (SIZE + 2 * MARGIN - 16) * SCALE), "white")
    stops = [(float(tone.GREY_SCENE * 2.0**ev), f"{ev:+d}" if ev else "grey") for ev in range(-6, 3)]
    linear = panel(
        image,
        0,
        "scene light, share of the file's white",
        [(v, f"{v:g}") for v in (0, 0.25, 0.5, 0.75, 1)],
        lambda x: x,
    )
    low, high = np.log2(stops[0][0] / 2), np.log2(2.0)
    stretch = panel(
        image,
        SIZE + MARGIN,
        "stops from a metered 18 % grey",
        stops,
        lambda x: (np.log2(x) - low) / (high - low),
    )
    for line, start in ((linear, 0.0), (stretch, float(2.0**low))):
        x = np.linspace(start, 1, 800) if start == 0 else np.geomspace(start, 1, 800)
        line(x, encode(SRGB_CURVE, x), PLAIN, 2)
        line(x, encode(SRGB_CURVE, tone.apply(x)), CURVE, 3)
        grey = tone.GREY_SCENE
        line(np.array([grey, grey]), np.array([0.0, 118 / 255]), MARK, 2)
    draw = ImageDraw.Draw(image)
    font = ImageFont.load_default(13 * SCALE)
    for row, (text, colour) in enumerate(
        (("standard", CURVE), ("linear", PLAIN), ("18 % grey at 118", MARK))
    ):
        draw.text(((MARGIN + 24) * SCALE, (MARGIN // 2 + 14 + 20 * row) * SCALE), text, colour, font)
    draw.text((14 * SCALE, MARGIN * SCALE // 4), "8-bit sRGB value", INK, font, anchor="lm")
    image.resize((image.width // SCALE, image.height // SCALE), Image.Resampling.LANCZOS).quantize(64).save(
        Path(__file__).parent / "tone.png", optimize=True
    )


if __name__ == "__main__":
    main()
