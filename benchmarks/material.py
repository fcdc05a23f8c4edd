"""Pictures and shoots to measure speed on: photo-like, made here, the same every time."""

from __future__ import annotations

import sys
from datetime import datetime, timedelta
from pathlib import Path

import numpy as np
import rawpy
import tifffile
from numpy.typing import NDArray
from PIL import Image

from grader.cast.correction import correction_for
from grader.colour.spaces import SPACES
from grader.colour.transfer import decode_table, encode
from grader.colour.white import linear_from_xy, planckian_xy
from grader.model import Correction, Header

sys.path.insert(0, str(Path(__file__).parents[1] / "sample_images"))
from dng_writer import Shot, exif_block, mosaic_of, write_dng

SRGB = SPACES["sRGB"]
LIGHT_K = 3600


def size_of(megapixels: float) -> tuple[int, int]:
    """Return height and width at 3:2, in whole blocks of 16."""
    height = round((megapixels * 1e6 / 1.5) ** 0.5 / 16) * 16
    return height, round(height * 1.5 / 16) * 16


def correction(light_k: float = LIGHT_K) -> Correction:
    """Return the correction of a warm light."""
    return correction_for(tuple(planckian_xy(light_k)), Header())


def linear_picture(megapixels: float, *, light_k: float = LIGHT_K, seed: int = 0) -> NDArray[np.float32]:
    """Return a picture in linear sRGB primaries: soft shapes of a few sizes, a blown window, blue lamps, sensor noise.

    About one pixel in a hundred is clipped, and as many come out of gamut.
    """
    height, width = size_of(megapixels)
    rng = np.random.default_rng(seed)
    scene = np.zeros((height, width, 3), np.float32)
    for cells, strength in ((4, 0.5), (16, 0.3), (64, 0.2), (256, 0.12), (1024, 0.1), (3000, 0.08)):
        coarse = rng.normal(0, strength, (max(cells * 2 // 3, 2), cells, 3))
        coarse = 0.7 * coarse[..., :1] + 0.3 * coarse
        for channel in range(3):
            layer = Image.fromarray(coarse[..., channel].astype(np.float32))
            scene[..., channel] += np.asarray(layer.resize((width, height), Image.Resampling.BICUBIC))
    np.exp(1.1 * scene - 2.1, out=scene)
    window = (slice(height // 8, height // 4), slice(width // 2, width // 2 + width // 12))
    scene[window] *= 20
    lamps = (slice(height // 2, height // 2 + height // 10), slice(width // 8, width // 8 + width // 10))
    scene[lamps] *= np.array([0.02, 0.3, 4], np.float32)
    light = np.linalg.inv(SRGB.rec2020_from_linear) @ linear_from_xy(tuple(planckian_xy(light_k)))
    scene *= (light / light[1]).astype(np.float32)
    noise = rng.standard_normal((height // 4, width, 3), dtype=np.float32)
    scene += np.tile(noise, (4, 1, 1)) * (0.01 * np.sqrt(scene))
    return np.clip(scene, 0, 1, out=scene)


def codes(linear: NDArray[np.float32], kind: type = np.uint16) -> NDArray[np.uint16]:
    """Return sRGB codes of linear light, a band of rows at a time."""
    top = np.iinfo(kind).max
    out = np.empty(linear.shape, kind)
    for start in range(0, len(linear), 256):
        band = slice(start, start + 256)
        out[band] = np.rint(encode(SRGB.curves[0], linear[band]) * top)
    return out


def transfer_table() -> NDArray[np.float32]:
    """Return linear light of every 16-bit sRGB code."""
    return decode_table(SRGB.curves[0], 65536)


def write_frame_files(folder: Path, megapixels: float) -> dict[str, Path]:
    """Write the same picture as a raw file, a zstd TIFF and a JPEG."""
    linear = linear_picture(megapixels)
    sixteen = codes(linear)
    paths = {"RAW": folder / "a.dng", "zstd TIFF": folder / "a.tif", "JPEG": folder / "a.jpg"}
    tifffile.imwrite(paths["zstd TIFF"], sixteen, photometric="rgb", compression="zstd", predictor=True)
    write_jpeg(paths["JPEG"], (sixteen >> 8).astype(np.uint8), datetime(2025, 5, 3, 18, 30))
    black, white = 512, 15600
    mosaic = mosaic_of(linear * np.array([0.6, 1.0, 0.7]))
    write_dng(
        paths["RAW"],
        (mosaic * (white - black) + black).astype(np.uint16),
        colour_matrix=np.array([[0.75, -0.2, -0.08], [-0.45, 1.27, 0.2], [-0.09, 0.2, 0.6]]),
        as_shot_neutral=(0.6, 1.0, 0.7),
        levels=(black, white),
    )
    return paths


def write_jpeg(path: Path, eight: NDArray[np.uint8], taken_at: datetime, *, quality: int = 92) -> None:
    """Write a JPEG with a capture time."""
    shot = Shot(taken_at=taken_at.strftime("%Y-%m-%dT%H:%M:%S.00+02:00"))
    Image.fromarray(eight).save(path, quality=quality, subsampling="4:2:0", exif=exif_block(shot))


def write_shoot(folder: Path, count: int, megapixels: float) -> list[Path]:
    """Write JPEGs of one body over an evening: the light changes every fifty frames."""
    folder.mkdir(parents=True, exist_ok=True)
    start = datetime(2025, 5, 3, 18, 30)
    lights_k = (3000, 5200, 4000, 6500)
    pictures = {}
    paths = []
    for index in range(count):
        key = (index // 50 % 4, index % 5)
        if key not in pictures:
            linear = linear_picture(megapixels, light_k=lights_k[key[0]], seed=key[1])
            pictures[key] = codes(linear, np.uint8)
        paths.append(folder / f"frame-{index:05d}.jpg")
        write_jpeg(paths[-1], pictures[key], start + timedelta(seconds=7 * index))
    return paths


def develop(path: Path) -> np.ndarray:
    """Let LibRaw decode a raw file with the settings that grader uses."""
    with rawpy.imread(str(path)) as raw:
        return raw.postprocess(
            gamma=(1, 1),
            no_auto_bright=True,
            adjust_maximum_thr=0.0,
            use_camera_wb=True,
            output_bps=16,
            output_color=rawpy.ColorSpace.Rec2020,
            user_flip=0,
        )
