"""What the decoders of TIFF, JPEG and PNG hand over, and what they share."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from grader.errors import UnsupportedFile
from grader.model import Frame, Metadata, ReadLimits, Space

Kind = Literal["grey", "rgb", "cmyk", "lab"]
Pixels = NDArray[Any]


@dataclass(slots=True, eq=False)
class Decoded:
    """The samples of one picture as the decoder gave them, and what its file says about them.

    ``samples`` is (H, W, channels); integers of ``bits`` significant bits, or floats with 1.0 = white.
    ``space`` is what the file says besides an ICC profile (a PNG chunk, an EXIF tag), or None.
    """

    samples: Pixels
    kind: Kind
    bits: int
    format: Literal["tiff", "jpeg", "png"]
    icc: bytes | None = None
    space: Space | None = None
    alpha: Pixels | None = None
    encoding: dict[str, Any] = field(default_factory=dict)
    flags: list[str] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    facts: dict[str, Any] = field(default_factory=dict)
    metadata: Metadata = field(default_factory=Metadata)

    def flag(self, code: str, note: str) -> None:
        """Add a flag once, and the plain words for the log."""
        if code not in self.flags:
            self.flags.append(code)
        self.notes.append(note)


def check_size(width_px: int, height_px: int, limits: ReadLimits) -> None:
    """Refuse a picture by what its header claims, before anything is allocated.

    Raises
    ------
    UnsupportedFile
        It has no pixels, or more than ``limits.max_pixels``.
    """
    if width_px < 1 or height_px < 1:
        raise UnsupportedFile(f"the picture has no pixels ({width_px} x {height_px})")
    if width_px * height_px > limits.max_pixels:
        megapixels = width_px * height_px / 1e6
        raise UnsupportedFile(
            f"the header claims {width_px} x {height_px} pixels ({megapixels:,.0f} MP), more than allowed",
            hint=f"raise the limit of {limits.max_pixels / 1e6:,.0f} MP (--max-pixels) if the picture is real",
        )


def is_grey(frame: Frame) -> bool:
    """Return whether the file was grey and the frame still is: equal channels, and one curve for them."""
    if frame.encoding.get("kind") != "grey":
        return False
    pixels = frame.pixels
    return all(
        bool(np.array_equal(pixels[start : start + 256, :, 0], pixels[start : start + 256, :, channel]))
        for start in range(0, len(pixels), 256)
        for channel in (1, 2)
    )
