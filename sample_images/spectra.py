"""Spectra of the invented evening: published reflectances and illuminants, two invented sensors.

Everything is sampled at 31 bands, 400 to 700 nm in 10 nm steps, each band the triangular mean of the
tables around it, so that narrow lines keep their energy.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

with warnings.catch_warnings():
    warnings.filterwarnings("ignore", message='.*"Matplotlib" related API features.*')
    import colour

Array = NDArray[np.float64]

BANDS_NM: Array = np.arange(400.0, 701.0, 10.0)
_CHART = colour.SDS_COLOURCHECKERS["BabelColor Average"]
_OBSERVER = colour.MSDS_CMFS["CIE 1931 2 Degree Standard Observer"]

# Every surface is a mixture of patches of the measured 24-patch chart that colour-science ships.
_MIXTURES: dict[str, dict[str, float]] = {
    "terracotta": {"dark skin": 0.45, "orange": 0.40, "light skin": 0.15},
    "buff clay": {"light skin": 0.55, "neutral 5 (.70 D)": 0.25, "orange yellow": 0.20},
    "dark clay": {"dark skin": 0.7, "black 2 (1.5 D)": 0.3},
    "white glaze": {"white 9.5 (.05 D)": 0.95, "blue sky": 0.05},
    "cream glaze": {"white 9.5 (.05 D)": 0.68, "orange yellow": 0.17, "neutral 6.5 (.44 D)": 0.15},
    "celadon": {"bluish green": 0.42, "neutral 6.5 (.44 D)": 0.38, "white 9.5 (.05 D)": 0.20},
    "cobalt": {"blue": 0.42, "purplish blue": 0.23, "neutral 3.5 (1.05 D)": 0.35},
    "tenmoku": {"black 2 (1.5 D)": 0.80, "dark skin": 0.20},
    "oxblood": {"red": 0.40, "dark skin": 0.42, "black 2 (1.5 D)": 0.18},
    "ochre": {"orange yellow": 0.34, "dark skin": 0.50, "light skin": 0.16},
    "copper green": {"green": 0.22, "foliage": 0.46, "neutral 3.5 (1.05 D)": 0.32},
    "turquoise": {"cyan": 0.34, "bluish green": 0.26, "neutral 6.5 (.44 D)": 0.40},
    "rose glaze": {"moderate red": 0.24, "light skin": 0.46, "white 9.5 (.05 D)": 0.30},
    "pale wood": {"light skin": 0.50, "dark skin": 0.30, "orange yellow": 0.20},
    "brown wood": {"dark skin": 0.75, "orange": 0.10, "black 2 (1.5 D)": 0.15},
    "dark wood": {"dark skin": 0.45, "black 2 (1.5 D)": 0.55},
    "plaster": {"white 9.5 (.05 D)": 0.66, "neutral 8 (.23 D)": 0.24, "orange yellow": 0.10},
    "old plaster": {"neutral 6.5 (.44 D)": 0.60, "light skin": 0.25, "white 9.5 (.05 D)": 0.15},
    "sage paint": {"foliage": 0.40, "neutral 6.5 (.44 D)": 0.40, "bluish green": 0.20},
    "blue paint": {"blue sky": 0.55, "neutral 5 (.70 D)": 0.45},
    "linen": {"white 9.5 (.05 D)": 0.55, "neutral 6.5 (.44 D)": 0.30, "light skin": 0.15},
    "indigo cloth": {"purplish blue": 0.40, "neutral 3.5 (1.05 D)": 0.60},
    "madder cloth": {"moderate red": 0.50, "dark skin": 0.50},
    "curtain": {"red": 0.28, "purple": 0.27, "black 2 (1.5 D)": 0.45},
    "card": {"white 9.5 (.05 D)": 1.0},
    "ink": {"black 2 (1.5 D)": 1.0},
    "slate": {"neutral 3.5 (1.05 D)": 0.80, "blue sky": 0.20},
    "grey": {"neutral 5 (.70 D)": 1.0},
    "enamel": {"green": 0.25, "foliage": 0.25, "black 2 (1.5 D)": 0.50},
}
SURFACES: tuple[str, ...] = tuple(_MIXTURES)


@dataclass(frozen=True)
class Body:
    """An invented camera body and its sensor."""

    letter: str
    make: str
    model: str
    serial: str
    prefix: str
    black: int
    white: int
    electrons_at_iso_100: float
    read_noise_electrons: float
    peaks: tuple[tuple[tuple[float, float, float], ...], ...]
    """Per channel: (height, centre nm, width nm) of Gaussian lobes."""

    @property
    def name(self) -> str:
        """Make, model and serial, as grader joins them."""
        return f"{self.make} {self.model} {self.serial}"

    def sensitivities(self) -> Array:
        """Return (31, 3) sensitivities, behind an infrared filter."""
        lobes = [
            sum(h * np.exp(-0.5 * ((BANDS_NM - c) / w) ** 2) for h, c, w in channel) for channel in self.peaks
        ]
        infrared_filter = 1 / (1 + np.exp((BANDS_NM - 668) / 11)) / (1 + np.exp((408 - BANDS_NM) / 6))
        return np.stack(lobes, axis=1) * infrared_filter[:, None]


BODIES = {
    "A": Body(
        "A", "Tarnwick", "T1", "TW00417", "TWK_", 512, 15600, 200_000, 3.5,
        (
            ((0.78, 603, 32), (0.05, 440, 22), (0.10, 555, 26)),
            ((1.00, 531, 36), (0.07, 600, 30)),
            ((0.86, 459, 26), (0.05, 520, 24)),
        ),
    ),
    "B": Body(
        "B", "Quillon", "Q20", "2260981", "QLN", 1024, 16383, 170_000, 4.5,
        (
            ((0.70, 612, 35), (0.09, 430, 26), (0.06, 540, 22)),
            ((0.96, 540, 42), (0.09, 480, 24)),
            ((0.80, 450, 30), (0.03, 545, 26)),
        ),
    ),
}  # fmt: skip


def _banded(spectrum: colour.SpectralDistribution) -> Array:
    """Return the triangular mean over +-10 nm around each band."""
    wavelengths_nm = np.arange(390.0, 711.0, 1.0)
    values = np.interp(wavelengths_nm, spectrum.wavelengths, spectrum.values)
    weights = np.maximum(1 - np.abs(wavelengths_nm[None] - BANDS_NM[:, None]) / 10, 0)
    return np.asarray(weights @ values / weights.sum(axis=1))


def reflectances() -> Array:
    """Return (surfaces, 31) reflectances, in the order of `SURFACES`."""
    patches = {name: _banded(sd) for name, sd in _CHART.items()}
    return np.array([sum(w * patches[n] for n, w in mix.items()) for mix in _MIXTURES.values()])


def chart_reflectances() -> Array:
    """Return (24, 31): the chart's patches themselves."""
    return np.array([_banded(sd) for sd in _CHART.values()])


def _stage_blue(_: None = None) -> colour.SpectralDistribution:
    """Return the stage light: a blue and a weak red emitter, narrow Gaussians (invented)."""
    nm = np.arange(380.0, 781.0, 1.0)
    blue, red = (np.exp(-0.5 * ((nm - c) / w) ** 2) for c, w in ((456, 11), (634, 9)))
    return colour.SpectralDistribution(blue + 0.32 * red, nm)


def _light_tables() -> dict[str, colour.SpectralDistribution]:
    d60_xy = colour.temperature.CCT_to_xy_CIE_D(6000)
    return {
        "window": colour.sd_CIE_illuminant_D_series(d60_xy),
        "tungsten": colour.SDS_ILLUMINANTS["A"],
        "fluorescent": colour.SDS_ILLUMINANTS["FL6"],
        "led": colour.SDS_ILLUMINANTS["LED-B3"],
        "stage": _stage_blue(),
        "d65": colour.SDS_ILLUMINANTS["D65"],
    }


LIGHT_WORDS = {
    "window": "window, CIE daylight of 6000 K",
    "tungsten": "hall lamps, CIE illuminant A",
    "fluorescent": "side room tubes, CIE illuminant FL6",
    "led": "stage panels, CIE illuminant LED-B3",
    "stage": "coloured stage light, narrow blue with some red",
}


def lights() -> dict[str, Array]:
    """Return each light's (31,) spectrum, scaled so that a white gives Y = 1."""
    y_bar = observer()[:, 1]
    spectra = {name: _banded(sd) for name, sd in _light_tables().items()}
    return {name: spectrum / (spectrum @ y_bar) for name, spectrum in spectra.items()}


def light_xy() -> dict[str, tuple[float, float]]:
    """Return each light's CIE 1931 xy, from its full table."""
    out = {}
    nm = np.arange(380.0, 781.0, 5.0)
    matching = np.stack([np.interp(nm, _OBSERVER.wavelengths, c) for c in _OBSERVER.values.T], axis=1)
    for name, sd in _light_tables().items():
        xyz = np.interp(nm, sd.wavelengths, sd.values) @ matching
        x, y = xyz[:2] / xyz.sum()
        out[name] = (float(x), float(y))
    return out


def observer() -> Array:
    """Return the (31, 3) CIE 1931 colour-matching functions in the bands."""
    nm = _OBSERVER.wavelengths
    return np.stack(
        [_banded(colour.SpectralDistribution(_OBSERVER.values[:, i], nm)) for i in range(3)], axis=1
    )


def colour_matrix(body: Body) -> Array:
    """Return the body's (3, 3) sensor-from-XYZ matrix: least squares over the chart under D65.

    The white is met exactly, and the result is rounded as the file stores it (ten-thousandths).
    """
    d65, patches = lights()["d65"], chart_reflectances()
    sensor = (patches * d65) @ body.sensitivities()
    xyz = (patches * d65) @ observer()
    white_sensor, white_xyz = d65 @ body.sensitivities(), d65 @ observer()
    scale = white_sensor.max()
    free = np.linalg.lstsq(xyz, sensor / scale, rcond=None)[0].T
    gram = np.linalg.inv(xyz.T @ xyz)
    miss = white_sensor / scale - free @ white_xyz
    exact = free + np.outer(miss, gram @ white_xyz) / (white_xyz @ gram @ white_xyz)
    return np.asarray(np.round(exact, 4))


def sensor_neutral(body: Body, light: str) -> Array:
    """Return the body's (3,) response to a perfect white under a light, green = 1."""
    response = lights()[light] @ body.sensitivities()
    return np.asarray(response / response[1])
