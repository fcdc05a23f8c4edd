"""Make the sample photographs and their truth.json: an evening pottery auction in a village hall.

    python sample_images/make_samples.py            all frames (10 to 15 minutes of one core)
    python sample_images/make_samples.py 4 17       frames 4 and 17 only, and truth.json

Everything is invented and seeded: the same numbers come out each time.  Pictures are traced in 31 spectral
bands, seen by two invented sensors, and written as a camera would: raw mosaics (DNG), and 16-bit TIFF and JPEG
files with a white balance baked in.
"""

from __future__ import annotations

import io
import json
import struct
import sys
from dataclasses import dataclass
from fractions import Fraction
from functools import cache
from pathlib import Path

import imagecodecs
import numpy as np
from dng_writer import RGGB, Shot, exif_block, mosaic_of, write_dng, write_tiff
from numpy.typing import NDArray
from PIL import Image
from render import render
from scenes import scene
from spectra import BODIES, LIGHT_WORDS, Body, colour_matrix, light_xy, lights, reflectances, sensor_neutral

FOLDER = Path(__file__).parent
sys.path.insert(0, str(FOLDER.parent))

from grader.colour.spaces import REC2020_FROM_XYZ, SPACES, XYZ_FROM_REC2020  # noqa: E402
from grader.colour.transfer import encode  # noqa: E402
from grader.colour.white import xy_from_xyz  # noqa: E402

Array = NDArray[np.float64]
Window = tuple[int, int, int, int]
SEED = 20241116


@dataclass(frozen=True)
class Take:
    """One frame of the evening."""

    number: int
    clock: str
    body: str
    light: str
    still_life: str
    format: str = "dng"
    balance: str = "auto"
    iso: int = 400
    seconds: Fraction = Fraction(1, 60)
    f_number: float = 4.0
    upright: bool = False
    space: str = "sRGB"

    @property
    def file(self) -> str:
        """The file's name as the body numbers it."""
        return f"{BODIES[self.body].prefix}{100 * (1 if self.body == 'A' else 32) + self.number:04d}.{self.format}"

    @property
    def size_px(self) -> tuple[int, int]:
        """Width and height as seen."""
        size = {"dng": (672, 448), "tif": (540, 360), "jpg": (768, 512)}[self.format]
        return size[::-1] if self.upright else size


def _take(number: int, clock: str, body: str, light: str, still_life: str, **more: object) -> Take:
    settings = {
        "window": {"iso": 400, "seconds": Fraction(1, 80), "f_number": 4.0},
        "tungsten": {"iso": 1600, "seconds": Fraction(1, 60), "f_number": 2.8},
        "fluorescent": {"iso": 800, "seconds": Fraction(1, 100), "f_number": 4.0},
        "led": {"iso": 800, "seconds": Fraction(1, 125), "f_number": 2.8},
        "stage": {"iso": 1600, "seconds": Fraction(1, 60), "f_number": 2.8},
    }[light]
    return Take(number, clock, body, light, still_life, **{**settings, **more})  # type: ignore[arg-type]


TAKES: tuple[Take, ...] = (
    _take(1, "16:04:12.35", "A", "window", "window group"),
    _take(2, "16:07:40.80", "B", "window", "window pair", format="jpg"),
    _take(3, "16:11:05.10", "A", "window", "window against"),
    _take(4, "16:15:31.62", "B", "window", "window bowls"),
    _take(5, "16:19:58.27", "A", "window", "window row", format="tif", balance="by hand"),
    _take(6, "17:02:09.44", "A", "tungsten", "hall group"),
    _take(7, "17:05:51.03", "B", "tungsten", "hall cloth"),
    _take(8, "17:09:14.91", "A", "tungsten", "hall close", balance="daylight"),
    _take(9, "17:13:36.58", "B", "tungsten", "hall bowls", format="jpg"),
    _take(10, "17:21:20.17", "A", "tungsten", "hall long", format="tif", space="Rec.2020"),
    _take(11, "18:01:44.29", "B", "fluorescent", "side shelves", format="jpg"),
    _take(12, "18:03:27.75", "A", "fluorescent", "side table"),
    _take(13, "18:06:02.06", "A", "fluorescent", "side jugs"),
    _take(14, "18:10:48.33", "B", "fluorescent", "side tall"),
    _take(15, "18:15:19.87", "B", "fluorescent", "side table", format="tif"),
    _take(16, "19:00:33.52", "A", "led", "stage three", balance="daylight"),
    _take(17, "19:04:10.98", "B", "led", "stage hero", format="jpg", upright=True),
    _take(18, "19:07:55.41", "A", "led", "stage table"),
    _take(19, "19:11:26.64", "B", "led", "stage pair"),
    _take(20, "19:16:03.12", "A", "stage", "stage pair", balance="daylight"),
    _take(21, "20:02:47.70", "A", "tungsten", "hall bowls"),
    _take(22, "20:05:18.24", "B", "tungsten", "hall group", format="jpg"),
    _take(23, "20:09:59.36", "B", "tungsten", "hall long"),
    _take(24, "20:14:31.83", "A", "tungsten", "hall cloth", upright=True),
)


def shot_of(take: Take) -> Shot:
    """Return what the frame's metadata say."""
    body = BODIES[take.body]
    return Shot(
        body.make,
        body.model,
        body.serial,
        f"2024-11-16T{take.clock}+01:00",
        take.seconds,
        take.f_number,
        take.iso,
        orientation=6 if take.upright else 1,
        automatic_balance=take.balance == "auto",
    )


# --- what the sensor sees -----------------------------------------------------------------------------


def as_shot_neutral(take: Take) -> Array:
    """Return the white that the body took as neutral, largest = 1.

    Automatic balance goes most of the way to the light, each body with a bias of its own and a little
    chance; balance by hand nearly meets it.
    """
    body = BODIES[take.body]
    light, daylight = (np.log(sensor_neutral(body, name)) for name in (take.light, "d65"))
    rng = np.random.default_rng((SEED, take.number, 1))
    share = {"auto": 0.80 if take.body == "A" else 0.72, "by hand": 0.97, "daylight": 0.0}[take.balance]
    bias = (
        {"A": (0.015, 0.0, -0.01), "B": (-0.02, 0.0, 0.03)}[take.body]
        if take.balance == "auto"
        else (0.0,) * 3
    )
    chance = rng.normal(0, 0.012, 3) if take.balance != "daylight" else np.zeros(3)
    neutral = np.exp(share * light + (1 - share) * daylight + np.array(bias) + chance)
    return np.asarray(np.round(neutral / neutral.max(), 6))


def exposed(take: Take, window: Window | None = None) -> Array:
    """Return noisy sensor RGB, 1 = full scale, of the whole frame or a window of it, as seen.

    Exposure is set on a coarse rendering: the mean of the logarithms, as a light meter would.
    """
    geometry, look, camera = scene(take.still_life, SEED + take.number)
    if take.upright:
        camera = camera._replace(half_width=camera.half_width * 0.72)
    body, surfaces = BODIES[take.body], reflectances()
    sensor_from_radiance = lights()[take.light][:, None] * body.sensitivities()
    width, height = take.size_px
    meter = render(geometry, look, surfaces, camera, (width // 12, height // 12), seed=take.number)
    brightest = (meter @ sensor_from_radiance).max(axis=-1)
    level = 0.085 if take.still_life in ("stage three", "stage hero", "stage pair") else 0.17
    scale = level / np.exp(np.log(np.clip(brightest, np.quantile(brightest, 0.2), None)).mean())
    whole = (0, 0, width, height)
    left, top, right, bottom = window or whole
    rim = (max(left - 1, 0), max(top - 1, 0), min(right + 1, width), min(bottom + 1, height))
    radiance = render(geometry, look, surfaces, camera, (width, height), window=rim, seed=take.number)
    spread = _low_pass(scale * (radiance @ sensor_from_radiance))
    sensor = spread[top - rim[1] : bottom - rim[1], left - rim[0] : right - rim[0]]
    noise = np.random.default_rng((SEED, take.number, 2)).standard_normal((height, width, 3))
    return _noisy(sensor, noise[top:bottom, left:right], body, take.iso)


def _low_pass(sensor: Array) -> Array:
    """Spread light over its neighbours, one quarter to each side, as the filter before a Bayer sensor does."""
    for axis in (0, 1):
        padded = np.pad(sensor, [(1, 1) if axis == k else (0, 0) for k in range(3)], mode="edge")
        before, here, after = (np.take(padded, np.arange(sensor.shape[axis]) + k, axis) for k in range(3))
        sensor = before / 4 + here / 2 + after / 4
    return sensor


def _noisy(sensor: Array, noise: Array, body: Body, iso: int) -> Array:
    """Add shot and read noise, then clip at full scale."""
    electrons = body.electrons_at_iso_100 * 100 / iso
    sigma = np.sqrt(sensor * electrons + body.read_noise_electrons**2) / electrons
    return np.clip(sensor + sigma * noise, -0.02, 1.0)


# --- what the body writes -----------------------------------------------------------------------------


def mosaic(take: Take, window: Window | None = None) -> NDArray[np.uint16]:
    """Return the raw mosaic, stored as the sensor reads it."""
    body = BODIES[take.body]
    sensor = exposed(take, window)
    stored = np.rot90(sensor) if take.upright else sensor
    values = mosaic_of(stored, RGGB) * (body.white - body.black) + body.black
    return np.round(np.clip(values, 0, 65535)).astype(np.uint16)


def _balanced_to_rec2020(body: Body) -> Array:
    """Return linear Rec.2020 from balanced sensor RGB, rows summing to 1."""
    matrix = REC2020_FROM_XYZ @ np.linalg.inv(colour_matrix(body)) @ np.diag(sensor_neutral(body, "d65"))
    return np.asarray(matrix / matrix.sum(axis=1, keepdims=True))


def _tone(luminance: Array) -> Array:
    """Return display luminance: extended Reinhard curve that keeps white (Reinhard et al. 2002)."""
    x = 1.5 * luminance
    return np.asarray(x * (1 + x / 1.5**2) / (1 + x))


def developed(take: Take, window: Window | None = None) -> Array:
    """Return encoded RGB, 0 to 1: balance, colour matrix, a curve on luminance, gamut by clipping.

    The curve scales the three channels alike, so a neutral keeps its chromaticity.
    """
    space = SPACES[take.space]
    neutral = as_shot_neutral(take)
    balanced = np.minimum(exposed(take, window) / neutral, 1.0)
    linear = balanced @ _balanced_to_rec2020(BODIES[take.body]).T
    luminance = np.maximum(linear @ XYZ_FROM_REC2020[1], 1e-6)
    display = linear * (_tone(luminance) / luminance)[..., None]
    in_space = display @ np.linalg.inv(space.rec2020_from_linear).T
    seen = np.clip(encode(space.curves[0], np.clip(in_space, 0, 1)), 0, 1)
    return np.rot90(seen) if take.upright else seen


@cache
def profile(space: str) -> bytes:
    """Return an ICC profile, its creation date fixed."""
    if space == "sRGB":
        icc = imagecodecs.cms_profile("srgb")
    else:
        ramp = np.linspace(0, 1, 4096)
        curve = SPACES[space].curves[0]
        table = np.round(65535 * _decode(curve, ramp)).astype(np.uint16)
        icc = imagecodecs.cms_profile(
            "rgb",
            whitepoint=[0.3127, 0.3290, 1.0],
            primaries=[0.708, 0.292, 1.0, 0.170, 0.797, 1.0, 0.131, 0.046, 1.0],
            transferfunction=table,
        )
    return icc[:24] + struct.pack(">6H", 2024, 11, 16, 0, 0, 0) + icc[36:84] + bytes(16) + icc[100:]


def _decode(curve: object, values: Array) -> Array:
    from grader.colour.transfer import decode  # noqa: PLC0415

    return decode(curve, values)  # type: ignore[arg-type]


def write(take: Take) -> Path:
    """Write one frame."""
    path, shot, body = FOLDER / take.file, shot_of(take), BODIES[take.body]
    if take.format == "dng":
        write_dng(
            path,
            mosaic(take),
            colour_matrix=colour_matrix(body),
            as_shot_neutral=as_shot_neutral(take),
            levels=(body.black, body.white),
            shot=shot,
        )
        return path
    encoded = developed(take)
    if take.format == "tif":
        write_tiff(path, np.round(encoded * 65535).astype(np.uint16), icc=profile(take.space), shot=shot)
        return path
    buffer = io.BytesIO()
    picture = Image.fromarray(np.round(encoded * 255).astype(np.uint8))
    picture.save(
        buffer, "JPEG", quality=92, subsampling=0, exif=exif_block(shot), icc_profile=profile("sRGB")
    )
    path.write_bytes(buffer.getvalue())
    return path


# --- the truth ----------------------------------------------------------------------------------------


def true_white_xy(take: Take) -> tuple[float, float]:
    """Return where a neutral lies: see README.md."""
    body = BODIES[take.body]
    neutral = sensor_neutral(body, take.light)
    if take.format == "dng":
        xyz = np.linalg.inv(colour_matrix(body)) @ neutral
    else:
        xyz = XYZ_FROM_REC2020 @ _balanced_to_rec2020(body) @ (neutral / as_shot_neutral(take))
    x, y = xy_from_xyz(xyz)
    return round(float(x), 6), round(float(y), 6)


def truth() -> dict[str, dict[str, object]]:
    """Return what is known of every frame, by file name."""
    places = light_xy()
    return {
        take.file: {
            "body": BODIES[take.body].name,
            "taken_at": shot_of(take).taken_at,
            "light": take.light,
            "light_words": LIGHT_WORDS[take.light],
            "light_xy": [round(v, 6) for v in places[take.light]],
            "referred": "scene" if take.format == "dng" else "display",
            "white_xy": list(true_white_xy(take)),
            "coloured": take.light == "stage",
            "as_shot_neutral": [float(v) for v in as_shot_neutral(take)],
            "balance": take.balance,
            "space": "sensor" if take.format == "dng" else take.space,
            "scene": take.still_life,
        }
        for take in TAKES
    }


def main(numbers: list[int]) -> None:
    """Write the frames asked for (default all) and truth.json."""
    wanted = [TAKES[number - 1] for number in numbers] or TAKES
    text = json.dumps(truth(), indent=1)
    (FOLDER / "truth.json").write_text(text + "\n", encoding="utf-8")
    for take in wanted:
        path = write(take)
        print(f"{path.name}  {path.stat().st_size / 1e3:.0f} kB", flush=True)


if __name__ == "__main__":
    main([int(argument) for argument in sys.argv[1:]])
