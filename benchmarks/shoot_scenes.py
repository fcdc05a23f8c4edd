"""Spectral scenes for simulated shoots: reflectances, lamps and sensors as spectra, rendered to working light.

Reflectances, lamps, daylight and the CIE 1931 observer come from colour-science; the two sensors are invented.
Scenes are overlapping leaves of chart reflectances, half of them near grey as in rooms and streets, with
shading, texture and gloss.  What a scene shows changes every few frames, so that neighbours err together.
"""

from __future__ import annotations

import functools
import warnings
from dataclasses import dataclass

import numpy as np

from grader.colour.spaces import REC2020_FROM_XYZ

with warnings.catch_warnings():
    warnings.simplefilter("ignore")  # it warns where matplotlib is absent
    import colour

NM = np.arange(400.0, 701.0, 5.0)
SHAPE = colour.SpectralShape(400, 700, 5)
HEIGHT, WIDTH = 64, 96
NATURAL = ("dark skin", "light skin", "orange yellow", "foliage", "foliage", "foliage", "blue sky")


@functools.cache
def observer():
    """Return the CIE 1931 colour matching functions, (61, 3)."""
    return _aligned(colour.MSDS_CMFS["CIE 1931 2 Degree Standard Observer"])


@functools.cache
def chart():
    """Return names and reflectances (24, 61) of the ISO 17321-1 chart."""
    spectra = colour.SDS_COLOURCHECKERS["ISO 17321-1"]
    return tuple(spectra), np.stack([_aligned(spectra[name]) for name in spectra])


@functools.cache
def lamp(name: str):
    """Return the spectral power of a CIE illuminant, mean 1, (61,)."""
    power = _aligned(colour.SDS_ILLUMINANTS[name])
    return power / power.mean()


def daylight(cct_k: float):
    """Return the spectral power of a phase of daylight, mean 1 (CIE 15)."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        xy = colour.temperature.CCT_to_xy_CIE_D(cct_k)
    power = _aligned(colour.sd_CIE_illuminant_D_series(xy, shape=SHAPE))
    return power / power.mean()


def black_body(cct_k: float):
    """Return the spectral power of a black body, mean 1."""
    metres = NM * 1e-9
    power = metres**-5 / np.expm1(1.4388e-2 / (metres * cct_k))
    return power / power.mean()


@dataclass(frozen=True)
class Sensor:
    """A body's spectral sensitivities (61, 3) and its matrix to working light, fitted on the chart under D65."""

    name: str
    sensitivities: np.ndarray
    rec2020_from_sensor: np.ndarray

    def light(self, power):
        """Return what this body makes of a perfect neutral under a lamp, in working light, (3,)."""
        return self.rec2020_from_sensor @ (power @ self.sensitivities)


def invented_sensor(name: str, peaks, widths) -> Sensor:
    """Return a sensor with bell-shaped sensitivities, its matrix by least squares as makers do it."""
    sensitivities = np.exp(-0.5 * ((NM[:, None] - peaks) / widths) ** 2)
    sensitivities += 0.04 * np.exp(-0.5 * ((NM[:, None] - [430.0, 620.0, 560.0]) / 40.0) ** 2)  # leaking dyes
    power = lamp("D65")
    sensitivities /= power @ sensitivities
    _, reflectances = chart()
    seen = (reflectances * power) @ sensitivities
    xyz = (reflectances * power) @ observer() / (power @ observer()[:, 1])
    target = xyz @ REC2020_FROM_XYZ.T
    matrix = np.linalg.lstsq(seen, target, rcond=None)[0].T
    return Sensor(name, sensitivities, matrix / matrix.sum(axis=1, keepdims=True))


@functools.cache
def sensors():
    """Return the two invented sensors."""
    return (
        invented_sensor("Tarnwick T1 TW00417", [602.0, 534.0, 458.0], [33.0, 41.0, 28.0]),
        invented_sensor("Quillon Q2 9083", [612.0, 527.0, 466.0], [27.0, 36.0, 24.0]),
    )


class Scenes:
    """An endless walk past things: each call gives the reflectances of one frame's leaves and their layout."""

    def __init__(self, random: np.random.Generator, situation_frames: float = 1.5):
        self.random, self.stay = random, 1.0 - 1.0 / situation_frames
        self.palette = self._new_palette()

    def frame(self, power: np.ndarray, sensor: Sensor) -> np.ndarray:
        """Return one frame in working light, (HEIGHT, WIDTH, 3) float32, its 99.5th percentile at 1."""
        if self.random.random() > self.stay:
            self.palette = self._new_palette()
        leaves = self._leaves()
        colours = (self.palette * power) @ sensor.sensitivities @ sensor.rec2020_from_sensor.T
        which = self.random.integers(len(colours), size=leaves.max() + 1)
        level = self.random.lognormal(-0.3, 0.5, leaves.max() + 1)
        picture = (colours[which] * level[:, None])[leaves] * self._shade()[..., None]
        picture = picture + self._gloss(leaves)[..., None] * sensor.light(power)
        picture = picture / np.percentile(picture.max(axis=-1), 99.5)
        noise = self.random.normal(0.0, 1.0, picture.shape) * np.sqrt(np.maximum(picture, 0.0) * 2e-5 + 1e-7)
        return (picture + noise).astype(np.float32)

    def _new_palette(self):
        """Return 8 to 20 reflectances: half near grey, a third natural colours, the rest anything."""
        kinds = self.random.choice(3, self.random.integers(8, 21), p=[0.53, 0.4, 0.07])
        return np.stack([self._reflectance(kind) for kind in kinds])

    def _reflectance(self, kind):
        names, reflectances = chart()
        level = self.random.uniform(0.05, 0.6)
        if kind == 0:  # paint, stone, cloth, wood: a smooth tilt, toward warm on average
            phase = np.outer([1.0, 2.0], (NM - 550.0) / 150.0 * np.pi / 2.0)
            return level * (1.0 + self.random.normal([0.08, -0.03], [0.05, 0.02]) @ np.sin(phase))
        which = names.index(str(self.random.choice(NATURAL))) if kind == 1 else self.random.integers(18)
        strength = (0.75 if kind == 1 else 1.0) * self.random.uniform(0.5, 1.0)
        return level * (1.0 - strength + strength * reflectances[which] / reflectances[which].mean())

    def _leaves(self):
        """Return the number of the leaf that each cell shows; later leaves lie on top."""
        rows, columns = np.mgrid[:HEIGHT, :WIDTH]
        leaves = np.zeros((HEIGHT, WIDTH), np.intp)
        count = int(self.random.integers(40, 140))
        for number in range(1, count):
            y, x = self.random.uniform(0, HEIGHT), self.random.uniform(0, WIDTH)
            size = 2.5 / self.random.power(1.5) ** 1.0
            tall = size * self.random.uniform(0.6, 1.7)
            inside = np.abs(rows - y) / tall + np.abs(columns - x) / size < 1.0
            if self.random.random() < 0.5:
                inside = (np.abs(rows - y) < tall) & (np.abs(columns - x) < size)
            leaves[inside] = number
        return leaves

    def _shade(self):
        """Return how brightly each cell is lit: a slope, soft shadows, texture."""
        y, x = np.mgrid[-1 : 1 : HEIGHT * 1j, -1 : 1 : WIDTH * 1j]
        slope = 0.25 * self.random.normal(size=2)
        soft = sum(
            0.15 * self.random.normal() * np.cos(k * np.pi * (x * np.cos(t) + y * np.sin(t)) + p)
            for k, t, p in zip(
                (1, 2, 3), self.random.uniform(0, 3, 3), self.random.uniform(0, 6, 3), strict=True
            )
        )
        texture = self.random.normal(0.0, 0.08, (HEIGHT, WIDTH))
        return np.exp(slope[0] * x + slope[1] * y + soft + texture)

    def _gloss(self, leaves):
        """Return how much of the lamp itself each cell mirrors: on a few leaves, in spots."""
        glossy = self.random.random(leaves.max() + 1) < 0.15
        spots = np.maximum(self.random.normal(0.0, 1.0, leaves.shape) - 1.2, 0.0)
        return 0.08 * glossy[leaves] * spots


def _aligned(spectrum):
    """Return a spectrum's values on the common wavelengths."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return np.asarray(spectrum.copy().align(SHAPE).values)
