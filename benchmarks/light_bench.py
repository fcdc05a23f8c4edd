"""Errors of each method on scenes rendered spectrally, so that the light is known exactly.

    light_bench.py

Published reflectances (ColorChecker N, Ohta 1997) under CIE illuminants (CIE 15:2018 tables) through the published
sensitivities of a Nikon D5100 (NPL), all from colour-science.  Figures are recovery angles in sensor RGB, in degrees.
The scenes are made of patches in shaded rectangles: harder than photographs, and each hard in one way.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass

import numpy as np

from grader.cast import build_proxy, measure_proxy
from grader.cast.cells import cells_from_proxy
from grader.cast.readings import read_lights
from grader.cast.vote import angle_deg
from grader.colour.spaces import REC2020_FROM_XYZ
from grader.colour.white import D65_XY, linear_from_xy, xyz_from_xy
from grader.model import Frame

with warnings.catch_warnings():
    warnings.simplefilter("ignore")
    import colour

SHAPE = colour.SpectralShape(400, 700, 10)
LIGHTS = (
    "A",
    "D50",
    "D65",
    "D75",
    "FL2",
    "FL4",
    "FL7",
    "FL11",
    "FL12",
    "LED-B1",
    "LED-B3",
    "LED-B5",
    "LED-RGB1",
    "LED-V1",
    "HP1",
    "HP4",
    "HP5",
)
DARK_SKIN, LIGHT_SKIN, SKY, FOLIAGE, RED, NEUTRALS = 0, 1, 2, 3, 14, tuple(range(18, 24))
HEIGHT, WIDTH = 120, 180


@dataclass(frozen=True)
class Scene:
    """Which patches fill a frame, and in what state the frame is."""

    main: tuple[int, ...]
    share: float
    exposure: float = 1.0
    noise: float = 0.002


SCENES = {
    "mostly grey": Scene(NEUTRALS, 0.7),
    "all patches": Scene(tuple(range(24)), 1.0),
    "a red wall": Scene((RED,), 0.85),
    "a lawn": Scene((FOLIAGE,), 0.85),
    "a blue sky": Scene((SKY,), 0.85),
    "a face": Scene((LIGHT_SKIN, DARK_SKIN), 0.85),
    "only a red wall": Scene((RED,), 1.0),
    "dark": Scene(NEUTRALS, 0.5, exposure=0.01, noise=0.0005),
    "clipped": Scene(NEUTRALS, 0.5, exposure=4.0),
    "noisy": Scene(NEUTRALS, 0.5, noise=0.05),
}


def spectra():
    """Return reflectances (24, n), sensitivities (n, 3) and the lights by name (n,)."""
    patches = colour.SDS_COLOURCHECKERS["ColorChecker N Ohta"]
    reflectances = np.array([sd.copy().align(SHAPE).values for sd in patches.values()])
    sensitivities = colour.MSDS_CAMERA_SENSITIVITIES["Nikon 5100 (NPL)"].copy().align(SHAPE).values
    lights = {name: colour.SDS_ILLUMINANTS[name].copy().align(SHAPE).values for name in {*LIGHTS, "D65"}}
    return reflectances, sensitivities, lights


def rec2020_from_sensor(reflectances, sensitivities, daylight):
    """Return the sensor balanced for D65, and the least-squares matrix to working light that keeps neutral."""
    white = daylight @ sensitivities
    seen = (reflectances * daylight) @ sensitivities / white
    cmf = colour.MSDS_CMFS["CIE 1931 2 Degree Standard Observer"].copy().align(SHAPE).values
    xyz = (reflectances * daylight) @ cmf / (daylight @ cmf)[1]
    xyz = xyz / ((daylight @ cmf) / (daylight @ cmf)[1]) * xyz_from_xy(D65_XY)
    target = xyz @ REC2020_FROM_XYZ.T
    free = np.linalg.lstsq(seen[:, :2] - seen[:, 2:], target - seen[:, 2:], rcond=None)[0]
    return white, np.vstack([free, 1 - free.sum(axis=0)]).T


def layout(scene, rng):
    """Return which patch each pixel shows (H, W), and how brightly it is lit (H, W)."""
    patch = np.full((HEIGHT, WIDTH), scene.main[0])
    area = 0
    while area < 4 * HEIGHT * WIDTH:
        h, w = rng.integers(8, 40, 2)
        y, x = rng.integers(0, HEIGHT - 4), rng.integers(0, WIDTH - 4)
        inside = rng.random() < scene.share
        patch[y : y + h, x : x + w] = rng.choice(scene.main) if inside else rng.integers(0, 24)
        area += h * w
    y, x = np.mgrid[:HEIGHT, :WIDTH]
    slope = rng.normal(0, 1, 2)
    shade = 1.0 + 0.3 * np.sin(3 * (slope[0] * y / HEIGHT + slope[1] * x / WIDTH) + rng.uniform(0, 6))
    facets = 0.7 + 0.3 * rng.random((HEIGHT // 12, WIDTH // 12)).repeat(12, 0).repeat(12, 1)
    return patch, shade * facets


def errors_of(scene, light, material, seed):
    reflectances, sensitivities, white, matrix = material
    rng = np.random.default_rng(seed)
    response = (reflectances * light) @ sensitivities / white
    truth = light @ sensitivities / white
    patch, shade = layout(scene, rng)
    sensor = 0.6 * scene.exposure * (response / truth[1])[patch] * shade[..., None]
    sensor = np.minimum(sensor + scene.noise * rng.standard_normal(sensor.shape), 1.0)
    frame = Frame.from_array(
        (sensor @ matrix.T).astype(np.float32), space="Rec.2020", linear=True, referred="scene"
    )
    proxy = build_proxy(frame)
    cast = measure_proxy(proxy)
    cells = cells_from_proxy(proxy)
    found = {"nothing": np.ones(3), **read_lights(cells), "vote": linear_from_xy(cast.white_xy)}
    back = np.linalg.inv(matrix)
    result = {
        name: float(angle_deg(np.maximum(back @ linear, 1e-9), truth)) for name, linear in found.items()
    }
    return result | {"doubt": cast.doubt_deg}


def main():
    reflectances, sensitivities, lights = spectra()
    white, matrix = rec2020_from_sensor(reflectances, sensitivities, lights["D65"])
    material = (reflectances, sensitivities, white, matrix)
    rows = {
        (scene, light): errors_of(SCENES[scene], lights[light], material, 7 * i + j)
        for i, scene in enumerate(SCENES)
        for j, light in enumerate(LIGHTS)
    }
    print_table("scene", SCENES, lambda scene: [rows[scene, light] for light in LIGHTS])
    print_table("light", LIGHTS, lambda light: [rows[scene, light] for scene in SCENES])


def print_table(head, names, of):
    first = of(next(iter(names)))[0]
    print(f"| {head} | " + " | ".join(first) + " |\n|" + "---|" * (len(first) + 1))
    for name in names:
        rows = of(name)
        print(
            f"| {name} | "
            + " | ".join(f"{np.mean([row[method] for row in rows]):.1f}" for method in first)
            + " |"
        )
    print()


if __name__ == "__main__":
    main()
