"""How long whole files take beside their codecs alone: python benchmarks/file_times.py [RAW].

A 24-megapixel 16-bit TIFF (zstd, predictor 2) is made in a temporary folder; a raw file may be named.  "Codec"
is the decompression of every strip by imagecodecs, or LibRaw's decode with grader's own settings; "file" is
``grader.files.read``: header checks, SHA-256, decode, metadata, colour.  Best of three, CPU seconds of this process.
"""

from __future__ import annotations

import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import imagecodecs
import material
import numpy as np
import tifffile

from grader import files

HEIGHT, WIDTH, ROWS = 4000, 6000, 64


def best(work: Callable[[], object]) -> float:
    """Return the least CPU time of three runs, in seconds."""
    times = []
    for _ in range(3):
        start = time.process_time()
        work()
        times.append(time.process_time() - start)
    return min(times)


def make_tiff(path: Path) -> None:
    """Write ramps with sensor-like noise, which compress like photographs do."""
    rng = np.random.default_rng(0)
    y, x = np.mgrid[0:HEIGHT, 0:WIDTH]
    ramps = np.stack([x * 8 + y * 2, x * 3 + y * 9, (x + y) * 5], axis=-1)
    data = (ramps + rng.integers(0, 600, ramps.shape)).astype(np.uint16)
    tifffile.imwrite(path, data, photometric="rgb", compression="zstd", predictor=2, rowsperstrip=ROWS)


def decompress(path: Path) -> None:
    """Undo compression and predictor of every strip, and keep nothing."""
    with tifffile.TiffFile(path) as tif, path.open("rb") as stream:
        page = tif.pages[0]
        for offset, count in zip(page.dataoffsets, page.databytecounts, strict=True):
            stream.seek(offset)
            strip = np.frombuffer(imagecodecs.zstd_decode(stream.read(count)), np.uint16).reshape(
                -1, WIDTH, 3
            )
            imagecodecs.delta_decode(strip.copy(), axis=1)


def main() -> None:
    """Print the table."""
    print(f"{'file':32} {'codec':>8} {'file':>8} {'ratio':>7}")
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "frame.tif"
        make_tiff(path)
        tell("24 MP 16-bit TIFF, zstd", best(lambda: decompress(path)), best(lambda: files.read(path)))
    for name in sys.argv[1:]:
        raw = Path(name)
        tell(raw.name, best(lambda r=raw: material.develop(r)), best(lambda r=raw: files.read(r)))


def tell(name: str, codec: float, whole: float) -> None:
    """Print one row."""
    print(f"{name:32} {codec:7.2f}s {whole:7.2f}s {whole / codec:7.2f}")


if __name__ == "__main__":
    main()
