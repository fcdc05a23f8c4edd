"""The steps of grading on plain numpy arrays: what they mean, and the way taken where nothing can be compiled.

Float64, a band of pixels at a time; `grader._pixels_kernel` does the same, to the same codes within one.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader._pixels_steps import Steps
from grader.colour import tone, transfer
from grader.model import Curve

Light = NDArray[np.float64]
Curves = tuple[Curve, Curve, Curve]

BAND: Final = 1 << 16
_TINY: Final = 1e-30
_HUGE: Final = 1e30
_EDGE: Final = 2e-6


def ramp(values: Light, start_and_steepness: tuple[Any, Any]) -> Light:
    """Return the smooth step (cubic Hermite) from 0 at the start to 1 after a distance of 1 / steepness."""
    start, steepness = map(float, start_and_steepness)
    share = np.clip((values - start) * steepness, 0.0, 1.0)
    return np.asarray(share * share * (3 - 2 * share))


def keep_highlights(source: Light, light: Light, steps: Steps) -> Light:
    """Return corrected light in which what the file had clipped is white, or what it was.

    A clipped channel was at least what it is now.  Three things follow, all of them growing smoothly with how near
    to clipping the channels are:

    1. Green, if clipped, is lifted to the unclipped ones of red and blue where both are higher after the correction,
       and to the clipped ones of them; red and blue, if clipped, are lifted to green.  (They meet by way of green
       only: red and blue clipped without green are a magenta lamp, not a white one.)  No channel is lifted above
       its share in the file.  Colours that are saturated whatever the clipped channels were stay as they are.
    2. Luminance goes back to what the file had, coloured lamps apart.
    3. What is nearly grey by now becomes grey, the more so if a second channel is clipped, and the less so the less
       the correction does to white.

    Parameters
    ----------
    source, light : (N, 3) float64
        Linear light of the file, and the same after the correction.
    steps : Steps
        Luminances and ramps.

    Returns
    -------
    (N, 3) float64
    """
    clipped = ramp(source, steps.clip)
    largest = light.max(1)
    or_more = light + clipped * (largest[:, None] - light)
    maybe_white = ramp(or_more.min(1) / (largest + _TINY), steps.colour)
    level = np.maximum(or_more[:, ::2].min(1), (clipped * light)[:, ::2].max(1))
    lifted = _lift(light, maybe_white * clipped.T, level, source / (source.max(1, keepdims=True) + _TINY))
    wanted = source @ np.array(steps.source_luminance, np.float64)
    found = np.maximum(lifted @ np.array(steps.luminance, np.float64), _TINY)
    most, second = clipped.max(1), np.median(clipped, axis=1)
    scaled = lifted * (1 + maybe_white * most * (wanted / found - 1))[:, None]
    greyness = lifted.min(1) / (lifted.max(1) + _TINY)
    grey = np.maximum(most * ramp(greyness, steps.one_clipped), second * ramp(greyness, steps.two_clipped))
    grey *= float(steps.strength)
    return np.asarray(scaled + grey[:, None] * (wanted[:, None] - scaled))


def _lift(light: Light, weight: Light, level: Light, share: Light) -> Light:
    """Lift green to ``level``, then red and blue to green, each by its weight and to its share."""
    red, green, blue = light.T
    green = green + weight[1] * np.maximum(level * share[:, 1] - green, 0.0)
    red = red + weight[0] * np.maximum(green * share[:, 0] - red, 0.0)
    blue = blue + weight[2] * np.maximum(green * share[:, 2] - blue, 0.0)
    return np.stack([red, green, blue], axis=1)


def pull_into_gamut(light: Light, steps: Steps) -> tuple[Light, int, int]:
    """Return light within 0 to 1, and how many pixels were outside by colour and by luminance.

    Towards grey of the same luminance, just as far as needed: hue lines stay straight, and what was inside stays as
    it was.  A colour that is brighter than white can be first gives up the luminance that cutting off its channels
    would cost, so that a blue lamp does not turn pale to keep a brightness that no blue can have.
    """
    weights = np.array(steps.luminance, np.float64)
    luminance = light @ weights
    clipped = np.abs(luminance - 0.5) > 0.5 + _EDGE
    outside = ~clipped & ((light.min(1) < -_EDGE) | (light.max(1) > 1 + _EDGE))

    below = np.maximum(luminance - light.min(1), 0.0)
    luminance = np.maximum(luminance, 0.0)
    light = _towards_grey(np.minimum(luminance / (below + _TINY), 1.0), light, luminance)

    kept = 1 - (np.maximum(light - 1, 0.0) @ weights) / np.maximum(luminance, _TINY)
    light, luminance = light * kept[:, None], luminance * kept
    above = np.maximum(light.max(1) - luminance, 0.0)
    room = np.maximum(1 - luminance, 0.0)
    light = _towards_grey(np.minimum(room / (above + _TINY), 1.0), light, luminance)
    return light, int(outside.sum()), int(clipped.sum())


def _towards_grey(chroma: Light, light: Light, luminance: Light) -> Light:
    return np.asarray(luminance[:, None] + chroma[:, None] * (light - luminance[:, None]))


def grade(
    source: NDArray[Any],
    target: NDArray[Any],
    steps: Steps,
    curves: tuple[Curves, Curves],
    *,
    toned: bool,
) -> tuple[int, int]:
    """Grade (H, W, 3) codes into ``target``; return how many pixels were out of gamut, and how many clipped.

    ``curves`` are those of the source's space and of the output's; ``toned`` puts the raw tone curve before the
    latter.
    """
    codes, result = source.reshape(-1, 3), target.reshape(-1, 3)
    matrix = np.array(steps.matrix, np.float64).reshape(3, 3)
    white = float(steps.code_white)
    outside = clipped = 0
    for start in range(0, len(codes), BAND):
        band = slice(start, start + BAND)
        encoded = np.nan_to_num(codes[band] / white, posinf=_HUGE, neginf=-_HUGE)
        linear = _by_channel(transfer.decode, curves[0], encoded)
        light = np.einsum("ij,nj->ni", matrix, linear)
        if linear.max(initial=0.0) > steps.clip[0]:
            light = keep_highlights(linear, light, steps)
        if steps.bounded:
            light, more_outside, more_clipped = pull_into_gamut(light, steps)
            outside, clipped = outside + more_outside, clipped + more_clipped
        encoded = _by_channel(transfer.encode, curves[1], tone.apply(light) if toned else light)
        result[band] = np.rint(np.clip(encoded, 0, 1) * white) if steps.bounded else encoded
    return outside, clipped


def _by_channel(function: Callable[[Curve, Light], Light], curves: Curves, values: Light) -> Light:
    return np.stack([function(curve, values[:, channel]) for channel, curve in enumerate(curves)], axis=1)
