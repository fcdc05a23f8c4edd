"""Small shoots for the batch's tests: packaged photographs under a known light, as files of each kind."""

import io
from pathlib import Path

import numpy as np
import tifffile
from PIL import Image
from skimage import data

from grader.colour.spaces import space_by_name
from grader.colour.transfer import decode, encode
from grader.colour.white import linear_from_xy

WARM = (0.40, 0.385)
"""A warm cast in a display-referred file, about 110 mired from neutral."""
NEUTRAL = (0.3127, 0.3290)


def scene(seed: int = 1, height: int = 96, width: int = 128) -> np.ndarray:
    """Return a linear Rec.2020 picture (h, w, 3): a piece of a photograph that scikit-image packages, at half size."""
    photograph = data.astronaut()
    srgb = space_by_name("sRGB")
    top, left = (37 * seed) % 140, (53 * seed) % 200
    piece = photograph[top : top + 2 * height, left : left + 2 * width, :3] / 255.0
    linear = decode(srgb.curves[0], piece) @ srgb.rec2020_from_linear.T
    return np.clip(linear.reshape(height, 2, width, 2, 3).mean(axis=(1, 3)), 0.0, 1.0)


def encoded_scene(light_xy: tuple[float, float], seed: int = 1, **size: int) -> np.ndarray:
    """Return an sRGB picture (float64, 0 to 1) of the scene under a light."""
    light = np.asarray(linear_from_xy(light_xy))
    srgb = space_by_name("sRGB")
    linear = (
        np.clip(scene(seed, **size) * light / light.max() * 0.9, 0, 1)
        @ np.linalg.inv(srgb.rec2020_from_linear).T
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
