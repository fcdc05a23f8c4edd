"""The classical readings against their published formulas, worked in plain numpy."""

import numpy as np

from grader.cast.cells import cells_from_proxy
from grader.cast.proxy import build_proxy
from grader.cast.readings import read_lights
from grader.model import Frame

RNG = np.random.default_rng(11)
LIGHT = np.array([1.2, 1.0, 0.5])


def readings_of(pixels):
    frame = Frame.from_array(pixels.astype(np.float32), space="Rec.2020", linear=True, referred="scene")
    return read_lights(cells_from_proxy(build_proxy(frame)))


def test_every_reading_of_a_grey_scene_is_its_light():
    grey = RNG.uniform(0.05, 0.9, (30, 40, 1)) * LIGHT
    for light in readings_of(grey).values():
        np.testing.assert_allclose(light / light[1], LIGHT, rtol=1e-5)


def test_formulas():
    scene = RNG.uniform(0.05, 0.9, (30, 40, 3)).astype(np.float32).astype(np.float64)
    found = readings_of(scene)
    np.testing.assert_allclose(found["grey-world"], scene.mean((0, 1)))
    np.testing.assert_allclose(found["white-patch"], np.percentile(scene.reshape(-1, 3), 97, axis=0))
    np.testing.assert_allclose(found["shades-of-grey"], (scene**6).mean((0, 1)) ** (1 / 6))
    edges = np.abs(np.diff(scene, axis=0)).sum((0, 1)) + np.abs(np.diff(scene, axis=1)).sum((0, 1))
    np.testing.assert_allclose(found["grey-edge"], edges)
