"""What the pixel loops need for one frame: spaces, correction and output, boiled down to numbers."""

from __future__ import annotations

from typing import Any, Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from grader.colour import fitted
from grader.colour.spaces import XYZ_FROM_REC2020
from grader.model import Correction, Frame, Matrix, Output, Space

CLIP_RAMP: Final = (0.75, 0.96)
"""Linear light, as a share of the file's white, over which a channel counts more and more as clipped: blown areas of
JPEGs ripple down to about the upper one (common practice), and shoulders of cameras' curves begin near the lower."""
COLOUR_RAMP: Final = (0.05, 0.25)
"""Smallest over largest channel after the correction, clipped channels counted as large as the largest: below, a
clipped pixel is a coloured lamp; above, it may have been white."""
ONE_CLIPPED_RAMP: Final = (0.50, 0.85)
"""The same ratio after correction, over which a pixel with one clipped channel turns into white."""
TWO_CLIPPED_RAMP: Final = (0.05, 0.50)
"""And with two clipped channels, which tell less of a colour."""
STRENGTH_RAMP: Final = (0.0, 0.15)
"""How far the correction moves white (1 - smallest over largest channel) for the greying to be whole."""
_NO_CLIPPING: Final = (2.0**60, 2.0**61)
_NO_CHANGE: Final = 1e-9
"""A matrix this near to the identity moves no 16-bit code."""


class Steps(NamedTuple):
    """Everything but the curves and the pixels, as plain float32 numbers that a compiled loop can take."""

    matrix: tuple[Any, ...]
    """Linear output light from linear input light, row by row, gain included."""
    source_luminance: tuple[Any, ...]
    """Luminance of linear input light, gain included."""
    luminance: tuple[Any, ...]
    """Luminance of linear output light; the weights sum to 1."""
    clip: tuple[Any, Any]
    """`CLIP_RAMP` as its start and 1 / width, like all ramps; out of reach where the frame is not clipped at white."""
    colour: tuple[Any, Any]
    one_clipped: tuple[Any, Any]
    two_clipped: tuple[Any, Any]
    strength: Any
    """Of the greying near white: 0 for a correction that leaves white as it is, 1 for a large one."""
    bounded: bool
    """Pull colours into the output's gamut and clip: integer output."""
    code_white: Any
    """Code of white: 255, 65535, or 1 for floating point."""


class Prepared(NamedTuple):
    """The three stages of one frame."""

    decode: fitted.Form
    steps: Steps
    encode: fitted.Form


def out_from_in(source: Space, correction: Matrix, target: Space) -> NDArray[np.float64]:
    """Return linear ``target`` from linear ``source``, with the correction (working light) in between."""
    rec2020_from_source = np.asarray(source.rec2020_from_linear, np.float64)
    target_from_rec2020 = np.linalg.inv(np.asarray(target.rec2020_from_linear, np.float64))
    return np.asarray(target_from_rec2020 @ np.asarray(correction, np.float64) @ rec2020_from_source)


def luminance_of(space: Space) -> NDArray[np.float64]:
    """Return the weights of a space's linear channels in luminance (relative XYZ's Y; white gives 1)."""
    return np.asarray(XYZ_FROM_REC2020[1] @ np.asarray(space.rec2020_from_linear, np.float64))


def prepare(frame: Frame, correction: Correction, output: Output, target: Space) -> Prepared:
    """Return the three stages for one frame."""
    kind = frame.pixels.dtype
    floating = kind.kind == "f"
    levels = 0 if floating else int(np.iinfo(kind).max) + 1
    gain = 2.0**output.exposure_ev
    matrix = gain * out_from_in(frame.space, correction.matrix, target)
    steps = Steps(
        matrix=_numbers(matrix),
        source_luminance=_numbers(gain * luminance_of(frame.space)),
        luminance=_numbers(luminance_of(target)),
        clip=_ramp(_NO_CLIPPING if floating and not clipped_at_white(frame) else CLIP_RAMP),
        colour=_ramp(COLOUR_RAMP),
        one_clipped=_ramp(ONE_CLIPPED_RAMP),
        two_clipped=_ramp(TWO_CLIPPED_RAMP),
        strength=np.float32(_strength(matrix)),
        bounded=not floating,
        code_white=np.float32(1 if floating else levels - 1),
    )
    return Prepared(
        fitted.decoder(frame.space.curves, levels),
        steps,
        fitted.encoder(target.curves, toned=toned(frame, output), floating=floating),
    )


def _strength(matrix: NDArray[np.float64]) -> float:
    white = matrix.sum(axis=1)
    moved = 1 - white.min() / white.max()
    start, full = STRENGTH_RAMP
    share = min(max((moved - start) / (full - start), 0.0), 1.0)
    return float(share * share * (3 - 2 * share))


def toned(frame: Frame, output: Output) -> bool:
    """Return whether the raw tone curve applies: raw files only, since everything else has its tones already."""
    return output.tone == "standard" and frame.header.format == "raw"


def clipped_at_white(frame: Frame) -> bool:
    """Return whether a floating-point frame was clipped at 1 by whoever made it: its largest value is just that."""
    return bool(np.max(frame.pixels) == 1.0)


def changes_nothing(frame: Frame, correction: Correction, output: Output, target: Space) -> bool:
    """Return whether the pixels come out as they went in: no matrix, no gain, no tone, the same space."""
    matrix = 2.0**output.exposure_ev * out_from_in(frame.space, correction.matrix, target)
    same = fitted.same_curves(frame.space.curves, target.curves) and not toned(frame, output)
    return same and bool(np.abs(matrix - np.eye(3)).max() < _NO_CHANGE)


def _ramp(ends: tuple[float, float]) -> tuple[Any, ...]:
    return _numbers((ends[0], 1 / (ends[1] - ends[0])))


def _numbers(values: Any) -> tuple[Any, ...]:
    return tuple(np.float32(value) for value in np.ravel(values))
