"""Small shoots for the batch's tests: textured scenes under a known light, as files of each kind."""

import io
from pathlib import Path

import numpy as np
import tifffile
from PIL import Image

from grader.colour.spaces import space_by_name
from grader.colour.transfer import encode
from grader.colour.white import linear_from_xy

WARM = (0.40, 0.385)
"""A warm cast in a display-referred file, about 110 mired from neutral."""
NEUTRAL = (0.3127, 0.3290)


def scene(seed: int = 1, height: int = 96, width: int = 128) -> np.ndarray:
    """Return a linear Rec.2020 picture (h, w, 3): many greyish and some coloured patches with edges."""
    random = np.random.default_rng(seed)
    cells = random.uniform(0.03, 0.75, (height // 8, width // 8, 1))
    colour = 1 + random.normal(0, 0.22, (height // 8, width // 8, 3)) * (
        random.random((height // 8, width // 8, 1)) < 0.4
    )
    picture = np.clip(cells * colour, 0.01, 0.9).repeat(8, 0).repeat(8, 1)
    shade = np.linspace(0.7, 1.0, width)[None, :, None] * (1 + random.normal(0, 0.01, (height, width, 1)))
    return picture * shade


def encoded_scene(light_xy: tuple[float, float], seed: int = 1, **size: int) -> np.ndarray:
    """Return an sRGB picture (float64, 0 to 1) of the scene under a light."""
    light = np.asarray(linear_from_xy(light_xy))
    srgb = space_by_name("sRGB")
    linear = (
        np.clip(scene(seed, **size) * light / light.max(), 0, 1) @ np.linalg.inv(srgb.rec2020_from_linear).T
    )
    return encode(srgb.curves[0], np.clip(linear, 0, 1))


def write_tiff(path: Path, light_xy: tuple[float, float] = WARM, seed: int = 1) -> Path:
    """Write a 16-bit TIFF."""
    path.parent.mkdir(parents=True, exist_ok=True)
    pixels = (encoded_scene(light_xy, seed) * 65535 + 0.5).astype(np.uint16)
    tifffile.imwrite(path, pixels, photometric="rgb", compression="zlib")
    return path


def write_jpeg(
    path: Path, light_xy: tuple[float, float] = WARM, seed: int = 1, taken_at: str | None = None
) -> Path:
    """Write a JPEG, with a capture time (EXIF form ``2031:05:04 18:00:00``) where one is given."""
    path.parent.mkdir(parents=True, exist_ok=True)
    image = Image.fromarray((encoded_scene(light_xy, seed) * 255 + 0.5).astype(np.uint8))
    exif = Image.Exif()
    if taken_at is not None:
        exif[0x010F], exif[0x0110] = "Tallyho", "Hillside 2"
        exif.get_ifd(0x8769)[0x9003] = taken_at
    buffer = io.BytesIO()
    image.save(buffer, "JPEG", quality=95, subsampling=0, exif=exif)
    path.write_bytes(buffer.getvalue())
    return path
