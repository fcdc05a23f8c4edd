"""Make the pictures of docs/HIGHLIGHTS.md: crops at 200 %, as the file has them, after the bare matrix, by grader.

Run from the project's root: ``python docs/make_highlight_pictures.py``.  The scenes are rendered here, in linear
light with values far above white, and clipped as a camera clips them; two are photographs that scikit-image and
scikit-learn package, re-lit.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from PIL import Image
from scipy.ndimage import gaussian_filter
from skimage import data
from sklearn.datasets import load_sample_image

from grader import pixels
from grader.cast.correction import correction_for
from grader.colour.frames import frame_from_array
from grader.colour.spaces import SPACES
from grader.colour.transfer import decode, encode
from grader.colour.white import linear_from_xy, planckian_xy
from grader.model import Header

FOLDER = Path(__file__).parent / "highlights"
HEIGHT, WIDTH = 130, 190
Y, X = np.mgrid[0:HEIGHT, 0:WIDTH].astype(float)
GAP = 8
SRGB = SPACES["sRGB"]
REC2020_FROM_SRGB = SRGB.rec2020_from_linear
SRGB_FROM_REC2020 = np.linalg.inv(REC2020_FROM_SRGB)
rng = np.random.default_rng(20)


def ramps() -> np.ndarray:
    """Six surfaces, from two stops below the light that clips them to four above."""
    surfaces = [
        (0.8, 0.8, 0.8),
        (0.62, 0.42, 0.32),
        (0.7, 0.6, 0.2),
        (0.35, 0.45, 0.6),
        (0.3, 0.5, 0.3),
        (0.65, 0.25, 0.2),
    ]
    exposure = np.exp2(np.linspace(-2, 3.5, WIDTH))
    rows = np.minimum((Y[:, 0] * len(surfaces) / HEIGHT).astype(int), len(surfaces) - 1)
    return np.array(surfaces)[rows][:, None] * exposure[:, None]


def window() -> np.ndarray:
    """Daylight through panes, beside a wall under lamps."""
    grain = gaussian_filter(rng.standard_normal((HEIGHT, WIDTH)), 2.5)
    wall = (0.17 + 0.1 * grain)[..., None] * np.array([0.9, 0.86, 0.8])
    sky = (1.1 + 3 * np.exp(-(((Y - 20) / 45) ** 2)))[..., None] * np.array([1.0, 1.15, 1.7])
    leaves = gaussian_filter((rng.random((HEIGHT, WIDTH)) > 0.6).astype(float), 4) > 0.43
    sky[leaves & (Y > 60)] *= np.array([0.12, 0.2, 0.08])
    panes = ((X > 60) & (X < 112) | (X > 120) & (X < 172)) & (Y > 14) & (Y < 108) & (abs(Y - 60) > 3)
    cover = gaussian_filter(panes.astype(float), 0.8)[..., None]
    scene = wall * (1 - cover) + sky * cover
    return 0.93 * scene + 0.07 * gaussian_filter(scene, (10, 10, 0))


def bottle() -> np.ndarray:
    """A green bottle with the lamp's reflections on it."""
    across = (X - 95) / 46
    round_ = np.sqrt(np.clip(1 - across**2, 0, 1))
    glass = np.array([0.05, 0.16, 0.07]) * (0.3 + 1.2 * round_)[..., None]
    scene = np.where(
        (abs(across) < 1)[..., None], glass, (0.2 + 0.12 * X / WIDTH)[..., None] * [0.8, 0.7, 0.6]
    )
    streak = 6 * np.exp(-(((X - 76 - 2 * np.sin(Y / 25)) / 4) ** 2) - ((Y - 62) / 46) ** 4)
    spot = 3 * np.exp(-(((X - 117) / 4) ** 2) - ((Y - 40) / 10) ** 2)
    scene = scene + (streak + spot)[..., None]
    return scene + 0.03 * gaussian_filter(scene, (7, 7, 0))


def lamp() -> np.ndarray:
    """A lamp shade and its bulb, lit."""
    from_bulb = np.hypot(X - 95, Y - 52)
    room = np.array([0.3, 0.24, 0.18]) * (1.6 / (1 + (from_bulb / 30) ** 2))[..., None]
    shade = (abs(X - 95) < 24 + 0.35 * (Y - 26)) & (Y > 26) & (Y < 84)
    paper = np.array([1.0, 0.86, 0.62]) * (3.2 * np.exp(-((from_bulb / 26) ** 2)) + 0.5)[..., None]
    cover = gaussian_filter(shade.astype(float), 0.7)[..., None]
    scene = room * (1 - cover) + paper * cover
    scene = scene + (12 * np.exp(-((np.hypot(X - 95, Y - 90) / 6) ** 2)))[..., None]
    return scene + 0.05 * gaussian_filter(scene, (8, 8, 0))


def leds() -> np.ndarray:
    """Coloured lamps with clipped cores (light of their own: the room's light does not fall on them)."""
    lamps = [
        (1, 0.02, 0.02),
        (0.05, 1, 0.1),
        (0.03, 0.08, 1),
        (1, 0.05, 0.9),
        (1, 0.45, 0.02),
        (1, 0.8, 0.05),
    ]
    scene = np.full((HEIGHT, WIDTH, 3), 0.02)
    for place, colour in enumerate(lamps):
        away = np.hypot(X - 32 - 63 * (place % 3), Y - 33 - 64 * (place // 3))
        scene += (3 * np.exp(-((away / 10) ** 2)) + 0.4 / (1 + (away / 9) ** 2) ** 2)[..., None] * np.array(
            colour
        )
    return scene


def photograph(picture: np.ndarray, gain: float) -> np.ndarray:
    """Return a photograph's linear light, brighter, so that some of it clips."""
    return gain * decode(SRGB.curves[0], picture / 255)


def lit(scene: np.ndarray, light_k: float) -> np.ndarray:
    """Return a scene (linear sRGB primaries) under a light of this temperature."""
    light = linear_from_xy(tuple(planckian_xy(light_k)))
    return scene @ REC2020_FROM_SRGB.T * light @ SRGB_FROM_REC2020.T


def as_file(linear: np.ndarray) -> np.ndarray:
    """Return 8-bit codes, clipped."""
    return np.rint(255 * encode(SRGB.curves[0], np.clip(linear, 0, 1))).astype(np.uint8)


def bare(codes: np.ndarray, light_k: float) -> np.ndarray:
    """Return what the matrix alone makes of it, cut off at white."""
    matrix = (
        SRGB_FROM_REC2020 @ correction_for(tuple(planckian_xy(light_k)), Header()).matrix @ REC2020_FROM_SRGB
    )
    return as_file(decode(SRGB.curves[0], codes / 255) @ matrix.T)


def graded(codes: np.ndarray, light_k: float) -> np.ndarray:
    """Return what grader makes of it."""
    correction = correction_for(tuple(planckian_xy(light_k)), Header())
    return pixels.correct_frame(frame_from_array(codes), correction).pixels


def save(name: str, codes: np.ndarray, light_k: float) -> None:
    """Write file, bare matrix and grader side by side at 200 %."""
    codes = codes[:HEIGHT, :WIDTH]
    gap = np.full((HEIGHT, GAP // 2, 3), 255, np.uint8)
    row = np.concatenate([codes, gap, bare(codes, light_k), gap, graded(codes, light_k)], axis=1)
    picture = Image.fromarray(row).resize((2 * row.shape[1], 2 * row.shape[0]), Image.Resampling.NEAREST)
    picture.save(FOLDER / f"{name}.jpg", quality=88, subsampling=0)


def main() -> None:
    """Make them all."""
    FOLDER.mkdir(exist_ok=True)
    for name, scene in (("ramps", ramps()), ("window", window()), ("bottle", bottle()), ("lamp", lamp())):
        save(name, as_file(lit(scene, 2856)), 2856)
    save("leds", as_file(leds()), 4000)
    save("coffee", as_file(lit(photograph(data.coffee()[40:, 190:], 1.5), 2856)), 2856)
    save("temple", as_file(lit(photograph(load_sample_image("china.jpg")[95:, 140:], 1.3), 3400)), 3400)


if __name__ == "__main__":
    main()
