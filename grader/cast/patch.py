"""What the pixels of one patch say about the light, and whether they are fit to say it."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any, Final, Literal

import numpy as np
from numpy.typing import NDArray

from grader.cast import plane
from grader.cast.box import Box
from grader.colour.opponent import cast_from_xy
from grader.colour.transfer import decode
from grader.colour.white import cct_duv_from_xy, linear_from_xy, xy_from_linear
from grader.errors import PresetError, TooFewUsablePixels
from grader.model import XY, Frame, Matrix

Array = NDArray[np.float64]
By = Literal["patch", "grey-card", "target", "frame", "frames"]

CARD_TINT_DEG: Final = 0.5
"""What nobody knows of an unmeasured grey: 0.7 C*ab at L* 50 turn the light by 0.3 to 0.6 degrees. (judgement)"""
_CLIPPED_LEVEL: Final = {np.dtype(np.uint8): 254, np.dtype(np.uint16): 65_200}
"""Encoded values from which a channel counts as clipped, as for the proxy."""
_MOST_PX: Final = 250_000
"""A larger patch is read at every n-th row and column."""
_BLOCKS: Final = 8
_SMALLEST_BLOCK_PX: Final = 4


@dataclass(frozen=True, slots=True)
class PatchLimits:
    """What makes a patch unfit; all of them judgements that a caller may change."""

    fewest_px: int = 64
    most_clipped: float = 0.01
    darkest: float = 0.004
    """Mean luminance; below it noise and flare decide. [1 = the file's white]"""
    most_texture: float = 0.12
    """Spread of luminance over the patch, noise taken off. [relative]"""
    most_texture_deg: float = 1.5
    """Spread of colour over the patch, noise taken off. [degrees]"""
    most_grain: float = 0.6
    """Spread of luminance from pixel to pixel. [relative]"""
    most_saturation: float = 0.30
    """Oklab chroma at Y = 1; a black body of 1600 K has 0.29."""
    most_duv: float = 0.030
    """Distance from the Planckian locus; the CIE's FL, HP and LED illuminants lie within 0.011."""


@dataclass(frozen=True, slots=True)
class PatchSample:
    """The light that a neutral showed, and what speaks for and against it.

    ``light_xy`` is at the camera's daylight setting [CIE 1931 xy]; ``luminance`` is the patch's mean
    [1 = the file's white]; ``texture`` [relative] and ``texture_deg`` [degrees] are spreads over the patch
    beyond noise, ``grain`` [relative] from pixel to pixel; ``saturation`` is the light's Oklab chroma.
    """

    light_xy: XY
    doubt_deg: float
    by: By = "patch"
    n: int = 0
    """Usable pixels, or frames."""
    box_px: Box | None = None
    luminance: float = 0.0
    clipped_fraction: float = 0.0
    texture: float = 0.0
    texture_deg: float = 0.0
    grain: float = 0.0
    saturation: float = 0.0
    duv: float = 0.0
    notes: tuple[str, ...] = ()
    """What a person should know, in plain words."""


def measure_pixels(
    frame: Frame,
    crop: NDArray[Any],
    *,
    inside: NDArray[np.bool_] | None = None,
    limits: PatchLimits,
    what: str = "the patch",
) -> PatchSample:
    """Return what a crop of the frame's pixels shows, as far as it can be measured at all.

    Parameters
    ----------
    crop : (h, w, 3)
        Encoded pixels of the frame.
    inside : (h, w) bool, optional
        Which of them belong to the patch.

    Raises
    ------
    TooFewUsablePixels
        Too few pixels, too many of them clipped, or too dark.
    """
    step = max(math.isqrt(crop.shape[0] * crop.shape[1] // _MOST_PX), 1)
    crop = crop[::step, ::step]
    inside = np.ones(crop.shape[:2], bool) if inside is None else inside[::step, ::step]
    path = frame.header.file
    linear, clipped = _linear_and_clipped(frame, crop)
    usable = inside & ~clipped & np.isfinite(linear).all(axis=2)
    n, total = int(usable.sum()), int(inside.sum())
    if total < limits.fewest_px:
        raise TooFewUsablePixels(
            f"{what} has only {total} pixels", path=path, hint=f"take at least {limits.fewest_px}"
        )
    clipped_fraction = float((inside & clipped).sum()) / total
    if clipped_fraction > limits.most_clipped or n < limits.fewest_px:
        raise TooFewUsablePixels(
            f"{clipped_fraction:.0%} of {what} is clipped"
            if clipped_fraction
            else f"{what} holds no numbers",
            path=path,
            hint="take a darker patch, or a frame that was exposed less",
        )
    daylight = np.einsum("yxc,dc->yxd", linear, _daylight_from_linear(frame))
    mean = daylight[usable].mean(axis=0)
    luminance = float(plane.luminance(mean))
    if not luminance >= limits.darkest or (mean.min() <= 0.0 and luminance < 10 * limits.darkest):
        raise TooFewUsablePixels(
            f"{what} is too dark (luminance {luminance:.4f}, white = 1)",
            path=path,
            hint=f"take a patch of at least {limits.darkest}",
        )
    return replace(_described(daylight, usable, mean), clipped_fraction=clipped_fraction)


def refuse_unfit(sample: PatchSample, limits: PatchLimits, what: str, path: str | None = None) -> None:
    """Raise where a patch is textured, or too coloured to be a neutral.

    Raises
    ------
    PresetError
        With the figure and its limit.
    """
    if sample.texture > limits.most_texture or sample.grain > limits.most_grain:
        figure = f"luminance varies by {max(sample.texture, sample.grain):.0%} over it"
        raise PresetError(f"{what} is textured: {figure}", path=path, hint="take a smooth, evenly lit patch")
    if sample.texture_deg > limits.most_texture_deg:
        figure = f"its colour varies by {sample.texture_deg:.1f} degrees"
        hint = "take a patch of one grey under one light"
        raise PresetError(f"{what} has several colours: {figure}", path=path, hint=hint)
    if sample.saturation > limits.most_saturation or abs(sample.duv) > limits.most_duv:
        figures = f"Oklab chroma {sample.saturation:.2f}, Duv {sample.duv:+.3f}"
        hint = f"no common light makes a grey look so (limits {limits.most_saturation:g} and {limits.most_duv:g}); take a grey"
        raise PresetError(f"{what} is coloured: {figures}", path=path, hint=hint)


def _linear_and_clipped(frame: Frame, crop: NDArray[Any]) -> tuple[Array, Any]:
    """Return the file's own linear RGB of a crop, and which pixels are clipped in a channel."""
    curves = frame.space.curves
    level = _CLIPPED_LEVEL.get(crop.dtype)
    if level is not None:
        steps = np.linspace(0.0, 1.0, int(np.iinfo(crop.dtype).max) + 1)
        tables = [decode(curve, steps) for curve in curves]
        linear = np.stack([table[crop[..., i]] for i, table in enumerate(tables)], axis=-1)
        return linear, np.any(crop >= level, axis=2)
    values = crop.astype(np.float64)
    with np.errstate(all="ignore"):
        linear = np.stack([decode(curve, values[..., i]) for i, curve in enumerate(curves)], axis=-1)
    return linear, np.any(crop >= _float_clip(frame), axis=2)


def _float_clip(frame: Frame) -> float:
    """Return where floating-point pixels are clipped: their largest value, if white at least and shared by many."""
    brightest = frame.pixels.max(axis=2)
    top = float(np.max(brightest, initial=0.0, where=np.isfinite(brightest)))
    cut = top * (1 - 1e-6)
    shared = np.count_nonzero(brightest >= cut) > max(2e-4 * brightest.size, 4)
    return cut if shared and cut >= 1.0 - 2e-6 else math.inf


def _daylight_from_linear(frame: Frame) -> Matrix:
    matrix = frame.space.rec2020_from_linear
    daylight = frame.header.daylight_from_decoded
    return matrix if daylight is None else daylight @ matrix


def _described(linear: Array, usable: NDArray[np.bool_], mean: Array) -> PatchSample:
    blocks, counts = _block_means(linear, usable)
    pixels = linear[usable]
    grain = float(plane.luminance(pixels).std() / plane.luminance(mean))
    grain_deg = float(np.sqrt(np.mean(angles_deg(pixels, mean) ** 2)))
    spread = float(plane.luminance(blocks).std() / plane.luminance(mean))
    spread_deg = float(np.sqrt(np.mean(angles_deg(blocks, mean) ** 2)))
    noise = 1.0 / float(np.mean(counts))
    texture_deg = math.sqrt(max(spread_deg**2 - grain_deg**2 * noise, 0.0))
    stray_deg = spread_deg / math.sqrt(len(blocks))
    x, y = xy_from_linear(mean)
    return with_light(
        PatchSample(
            light_xy=(float(x), float(y)),
            doubt_deg=math.sqrt(stray_deg**2 + texture_deg**2 + CARD_TINT_DEG**2),
            n=int(usable.sum()),
            luminance=float(plane.luminance(mean)),
            texture=math.sqrt(max(spread**2 - grain**2 * noise, 0.0)),
            texture_deg=texture_deg,
            grain=grain,
        )
    )


def _block_means(linear: Array, usable: NDArray[np.bool_]) -> tuple[Array, Array]:
    """Return the means of up to 8 x 8 blocks that are mostly usable, and their pixel counts."""
    rows, columns = (
        np.linspace(0, size, min(_BLOCKS, max(size // _SMALLEST_BLOCK_PX, 1)) + 1).astype(int)
        for size in usable.shape
    )
    weighted = np.concatenate([np.where(usable[..., None], linear, 0.0), usable[..., None]], axis=2)
    sums = np.add.reduceat(np.add.reduceat(weighted, rows[:-1], axis=0), columns[:-1], axis=1)
    sums = sums.reshape(-1, 4)
    full = sums[sums[:, 3] >= 0.5 * sums[:, 3].max()]
    return full[:, :3] / full[:, 3:], full[:, 3]


def with_light(sample: PatchSample) -> PatchSample:
    """Return the sample with what follows from its light: saturation and Duv."""
    _, duv = cct_duv_from_xy(sample.light_xy)
    yellow_blue, green_magenta = cast_from_xy(sample.light_xy)
    return replace(sample, saturation=math.hypot(yellow_blue, green_magenta), duv=duv)


def direction(xy: XY) -> Array:
    """Return the unit vector (3,) of a light in working light."""
    linear = np.asarray(linear_from_xy(xy), np.float64)
    return linear / float(np.linalg.norm(linear))


def angles_deg(linear: Array, toward: Array) -> Array:
    """Return the angles between many lights (n, 3) and one."""
    cross = np.linalg.norm(np.cross(linear, toward), axis=-1)
    return np.asarray(np.degrees(np.arctan2(cross, linear @ toward)))
