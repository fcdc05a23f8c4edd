"""Grade a frame at full resolution: decode, correct, keep highlights white, pull into gamut, encode.

One 3x3 in linear light carries the file's colours to the output's, the correction in between; what happens near
clipping and outside the gamut stands in `grader._pixels_plain`.  The work is done by compiled loops (`grader._pixels_kernel`)
where numba can be used, else in plain numpy.
"""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader import _pixels_kernel, _pixels_plain
from grader._pixels_steps import Prepared, changes_nothing, prepare, toned
from grader.colour import compiled
from grader.colour.output import output_space
from grader.model import Correction, Counts, Frame, Output

_BANDS_PER_THREAD: Final = 8
"""So many that a thread held up elsewhere costs little, so few that starting them costs nothing."""

_CLIPPED_FLOATS: Final = "no value is above 1.0: what is at 1.0 was taken as clipped, and kept white"


def correct(
    frame: Frame,
    correction: Correction,
    output: Output | None = None,
    *,
    threads: int = 1,
    overwrite: bool = False,
) -> tuple[Frame, Counts]:
    """Return the graded frame in its output space, and what had to be done beyond the matrix.

    Integer frames come back as integers of the same depth, clipped once, at the end; floating-point frames keep
    values below 0 and above 1.  A correction that changes nothing gives back the very same pixels.

    Parameters
    ----------
    frame : Frame
        As it was read.
    correction : Correction
        ``matrix`` acts on the frame's working light as decoded.
    output : Output, optional
        Space, tone (raw files only) and exposure; its format decides the space of a raw file.
    threads : int
        Number of threads to share the pixels; 1 where frames run side by side.
    overwrite : bool
        The caller has no more use for ``frame.pixels``: put the result in their place, if they are writable
        and in one piece.

    Returns
    -------
    frame : Frame
        Header, metadata, alpha and encoding are those of the source.
    counts : Counts
        Fractions of the frame's pixels; zero for floating-point frames, which are not clipped.  A note tells when
        such a frame was taken as clipped by whoever made it.

    Raises
    ------
    PresetError
        The output space is unknown.

    Examples
    --------
    >>> from grader.colour.frames import frame_from_array
    >>> blue_cast = frame_from_array(np.full((1, 1, 3), (100, 100, 130), np.uint8))
    >>> warmer = Correction(None, (0.3127, 0.329), np.diag([1.05, 1.0, 0.6]))
    >>> correct(blue_cast, warmer)[0].pixels
    array([[[106, 100, 100]]], dtype=uint8)
    """
    output = output or Output()
    target = output_space(frame.space, frame.header, output)
    if changes_nothing(frame, correction, output, target):
        return replace(frame, space=target), Counts()
    prepared = prepare(frame, correction, output, target)
    pixels = _native(frame.pixels)
    result = pixels if _may_overwrite(frame, pixels, overwrite) else np.empty_like(pixels)
    if compiled.AVAILABLE:
        outside, clipped = _in_bands(pixels.reshape(-1), result.reshape(-1), prepared, threads)
    else:
        curves = (frame.space.curves, target.curves)
        outside, clipped = _pixels_plain.grade(
            pixels, result, prepared.steps, curves, toned=toned(frame, output)
        )
    total = max(pixels.size // 3, 1)
    notes = (_CLIPPED_FLOATS,) if not prepared.steps.bounded and prepared.steps.clip[0] < 1 else ()
    return replace(frame, pixels=result, space=target), Counts(clipped / total, outside / total, notes)


def correct_frame(frame: Frame, correction: Correction, output: Output | None = None) -> Frame:
    """Return the graded frame in its output space: `correct` without the counts."""
    return correct(frame, correction, output)[0]


def _native(pixels: NDArray[Any]) -> NDArray[Any]:
    native = pixels.dtype.newbyteorder("=")
    return (
        pixels
        if pixels.flags.c_contiguous and pixels.dtype == native
        else np.ascontiguousarray(pixels, native)
    )


def _may_overwrite(frame: Frame, pixels: NDArray[Any], overwrite: bool) -> bool:
    """Return whether the result may take the place of ``pixels``; a copy made on the way is ours anyway."""
    copied = not np.shares_memory(pixels, frame.pixels)
    return copied or (overwrite and pixels.flags.writeable)


def _in_bands(source: Any, target: Any, prepared: Prepared, threads: int) -> tuple[int, int]:
    decode, steps, encode = prepared
    if threads <= 1:
        outside, clipped = _pixels_kernel.grade(source, target, decode, steps, encode)
        return outside, clipped

    chunks = -(-source.size // (3 * _pixels_kernel.CHUNK))
    band = (
        -(-chunks // (threads * _BANDS_PER_THREAD)) * 3 * _pixels_kernel.CHUNK
    )  # whole chunks: same results

    def grade(start: int) -> tuple[int, int]:
        outside, clipped = _pixels_kernel.grade(
            source[start : start + band], target[start : start + band], decode, steps, encode
        )
        return outside, clipped

    with ThreadPoolExecutor(threads) as pool:
        counts = list(pool.map(grade, range(0, source.size, band)))
    return sum(outside for outside, _ in counts), sum(clipped for _, clipped in counts)
