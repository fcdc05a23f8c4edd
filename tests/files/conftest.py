"""Sensor files for the tests: DNGs of an invented camera, written by tifffile as the DNG specification says."""

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import tifffile

# An invented camera: XYZ (D65) to its RGB, rows of plausible size, not any real camera's.
SENSOR_FROM_XYZ = np.array([[0.72, -0.21, -0.06], [-0.43, 1.22, 0.24], [-0.07, 0.19, 0.62]])
# The 6x6 arrangement in use (LibRaw's demosaicing asks for its 2x2 green cells); 0, 1, 2 = red, green, blue.
SIX = np.array(
    [[int(c) for c in row] for row in ("121101", "010212", "121101", "101121", "212010", "101121")]
)
PATTERNS = {
    "rggb": np.array([[0, 1], [1, 2]]),
    "bggr": np.array([[2, 1], [1, 0]]),
    "grbg": np.array([[1, 0], [2, 1]]),
    "gbrg": np.array([[1, 2], [0, 1]]),
    "six": SIX,
}


def rational(values: Any, scale: int = 1_000_000) -> list[int]:
    return [part for v in np.ravel(values) for part in (round(float(v) * scale), scale)]


def write_sensor_file(
    path: Path,
    sensor: np.ndarray,
    *,
    kind: str = "rggb",
    black: int | tuple[int, ...] = 512,
    white: int = 16_000,
    matrix: np.ndarray | None = SENSOR_FROM_XYZ,
    as_shot: Any = (0.5, 1.0, 0.6),
    byteorder: str = "<",
    tags: tuple[Any, ...] = (),
    **options: Any,
) -> Path:
    """Write sensor light (H, W, 3), 1 = saturation, through the filter array ``kind`` ("linear": all; "grey": green)."""
    height, width = sensor.shape[:2]
    levels = np.asarray(black if isinstance(black, tuple) else (black,))
    extra: list[Any] = [(50706, "B", 4, bytes([1, 4, 0, 0])), (50707, "B", 4, bytes([1, 1, 0, 0]))]
    extra.append((50708, "s", 0, "Lumo K2"))
    photometric: Any = "cfa"
    if kind == "linear":
        light, photometric = sensor, 34892
    elif kind == "grey":
        light, photometric = sensor[..., 1], "minisblack"
    else:
        pattern = PATTERNS[kind]
        tall = np.tile(pattern, (-(-height // len(pattern)), -(-width // len(pattern))))[:height, :width]
        light = np.take_along_axis(sensor, tall[..., None], axis=2)[..., 0]
        extra += [(33421, "H", 2, pattern.shape), (33422, "B", pattern.size, bytes(pattern.ravel().tolist()))]
    if len(levels) == 4:
        extra += [(50713, "H", 2, (2, 2)), (50714, "H", 4, tuple(int(v) for v in levels))]
        floor = np.tile(levels.reshape(2, 2), (-(-height // 2), -(-width // 2)))[:height, :width]
    else:
        count = light.shape[2] if light.ndim == 3 else 1
        extra.append((50714, "H", count, (int(levels[0]),) * count))
        floor = np.asarray(int(levels[0]))
    count = light.shape[2] if light.ndim == 3 else 1
    extra.append((50717, "H", count, (white,) * count))
    if matrix is not None:
        extra += [(50721, 10, matrix.size, rational(matrix)), (50778, "H", 1, 21)]
    if as_shot is not None:
        extra.append((50728, 5, len(as_shot), rational(as_shot)))
    values = np.rint(floor + np.clip(light, 0, 1) * (white - floor)).astype(np.uint16)
    tifffile.imwrite(
        path,
        values,
        photometric=photometric,
        byteorder=byteorder,
        metadata=None,
        software=False,
        extratags=[(*tag, True) for tag in (*extra, *tags)],
        **options,
    )
    if kind == "grey":  # tifffile refuses linear raw of one sample
        with tifffile.TiffFile(path, mode="r+b") as file:
            file.pages[0].tags["PhotometricInterpretation"].overwrite(34892)
    return path


@pytest.fixture
def sensor_file() -> Callable[..., Path]:
    """Return the writer of sensor files."""
    return write_sensor_file
