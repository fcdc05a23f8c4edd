"""From a light to the 3x3 that takes its cast out of one frame.

The light is stated at the camera's daylight setting, the matrix acts on working light as decoded; where
the two differ (a raw file, decoded with the camera's own balance) the header knows the way between them.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np

from grader.colour.adaptation import adaptation_matrix
from grader.colour.opponent import cast_from_xy, xy_from_cast
from grader.colour.spaces import REC2020_FROM_XYZ, XYZ_FROM_REC2020
from grader.colour.white import (
    D65_XY,
    cct_duv_from_xy,
    linear_from_xy,
    mired_from_k,
    planckian_xy,
    xy_from_linear,
    xy_from_xyz,
    xyz_from_xy,
)
from grader.errors import PresetError
from grader.model import XY, Cast, Correction, Fixed, Header, Matrix, Recipe, Transform

_LOWEST_K: Final = 1667.0
_HIGHEST_K: Final = 25000.0


def correction_for(
    light_xy: XY | None,
    header: Header,
    recipe: Recipe | None = None,
    *,
    reason: str = "",
    stretch: str | None = None,
    doubt_deg: float | None = None,
    flags: tuple[str, ...] = (),
) -> Correction:
    """Return the correction that carries this light to where the recipe wants it.

    A frame is left as it was decoded where no light is known, and where the light is flagged as coloured
    and the recipe says to leave such light.

    Parameters
    ----------
    light_xy : tuple of float, optional
        Chromaticity of the light at the camera's daylight setting; None where it is not known. [CIE 1931 xy]
    header : Header
        Of the frame; ``daylight_from_decoded`` counts.
    recipe : Recipe, optional
        Where to aim, what to keep, by which transform.
    reason : str
        Why this light, for the log.
    stretch : str, optional
        Name of the frame's stretch.
    doubt_deg : float, optional
        Expected error of the light. [degrees of recovery angle]
    flags : tuple of str
        Codes of `grader.model.FLAGS`.

    Returns
    -------
    Correction
        ``toward_xy`` is where a neutral really goes: the aim, plus what is kept of the cast.
        ``shift_mired`` and ``shift_duv`` are None where one of the two whites is too far from the
        Planckian locus for a colour temperature.

    Raises
    ------
    PresetError
        The recipe's ``toward``, transform or degree cannot be used.

    Examples
    --------
    >>> tungsten = correction_for((0.4476, 0.4074), Header(), reason="its own measurement")
    >>> round(tungsten.shift_mired)  # cools
    -197
    """
    recipe = Recipe() if recipe is None else recipe
    if "grey" in header.flags:
        return identity_correction(None, recipe.adaptation, reason="a picture without colours")
    left = "coloured-light" in flags and recipe.coloured_light == "leave"
    if light_xy is None or left:
        return identity_correction(
            light_xy,
            recipe.adaptation,
            reason=reason or ("coloured light is left as it is" if left else "nothing was measured"),
            stretch=stretch,
            doubt_deg=doubt_deg,
            flags=flags,
        )
    toward_xy = kept_xy(light_xy, aim_xy(recipe.toward), recipe)
    shift_mired, shift_duv = cancelling_shift(light_xy, toward_xy)
    return Correction(
        from_xy=light_xy,
        toward_xy=toward_xy,
        matrix=correction_matrix(light_xy, toward_xy, header, recipe.adaptation, recipe.degree),
        transform=recipe.adaptation,
        degree=recipe.degree,
        keep_yellow_blue=recipe.keep_yellow_blue,
        keep_green_magenta=recipe.keep_green_magenta,
        shift_mired=shift_mired,
        shift_duv=shift_duv,
        stretch=stretch,
        doubt_deg=doubt_deg,
        reason=reason,
        flags=flags,
    )


def fixed_correction(fixed: Fixed, header: Header) -> Correction:
    """Return a correction measured once, as it falls on this frame.

    ``fixed.toward_xy`` is taken as where a neutral goes; what it keeps of the cast is in it already
    (``keep_yellow_blue`` and ``keep_green_magenta`` are carried along for the record).  A frame of
    another body than the one that was measured is flagged, and so is one of another kind: a raw file's light
    is absolute, a developed file's is relative to the balance in it.

    Examples
    --------
    >>> lamp = Fixed(from_xy=(0.4476, 0.4074), toward_xy=(0.3127, 0.3290), measured_on_body="Northlight N1 7")
    >>> fixed_correction(lamp, Header(body="Northlight N1 9")).flags
    ('other-body',)
    """
    if "grey" in header.flags:
        return identity_correction(None, fixed.adaptation, reason="a picture without colours")
    flags = []
    if fixed.measured_on_body and fixed.measured_on_body != header.body:
        flags.append("other-body")
    if fixed.measured_referred and fixed.measured_referred != header.referred:
        flags.append("other-kind")
    shift_mired, shift_duv = cancelling_shift(fixed.from_xy, fixed.toward_xy)
    return Correction(
        from_xy=fixed.from_xy,
        toward_xy=fixed.toward_xy,
        matrix=correction_matrix(fixed.from_xy, fixed.toward_xy, header, fixed.adaptation, fixed.degree),
        transform=fixed.adaptation,
        degree=fixed.degree,
        keep_yellow_blue=fixed.keep_yellow_blue,
        keep_green_magenta=fixed.keep_green_magenta,
        shift_mired=shift_mired,
        shift_duv=shift_duv,
        doubt_deg=fixed.measured_doubt_deg,
        reason="fixed by the preset",
        flags=tuple(flags),
    )


def identity_correction(
    light_xy: XY | None,
    transform: Transform = "cat16",
    *,
    reason: str,
    stretch: str | None = None,
    doubt_deg: float | None = None,
    flags: tuple[str, ...] = (),
) -> Correction:
    """Return the correction that leaves the frame as it was decoded, whatever its light is."""
    return Correction(
        from_xy=light_xy,
        toward_xy=D65_XY if light_xy is None else light_xy,
        matrix=np.eye(3),
        transform=transform,
        shift_mired=None if light_xy is None else 0.0,
        shift_duv=None if light_xy is None else 0.0,
        stretch=stretch,
        doubt_deg=doubt_deg,
        reason=reason,
        flags=flags,
    )


def correction_matrix(
    light_xy: XY, toward_xy: XY, header: Header, transform: Transform = "cat16", degree: float = 1.0
) -> Matrix:
    """Return the (3, 3) matrix on working light as decoded; use as ``linear @ m.T``.

    Scaled so that what this light makes of a neutral keeps the luminance at which it was decoded.
    """
    daylight = _daylight_from_decoded(header)
    adapt = adaptation_matrix(light_xy, toward_xy, transform=transform, degree=degree)
    matrix = REC2020_FROM_XYZ @ adapt @ XYZ_FROM_REC2020 @ daylight
    neutral = np.linalg.solve(daylight, np.asarray(linear_from_xy(light_xy), np.float64))
    luminance = XYZ_FROM_REC2020[1]
    scaled: Matrix = matrix * float((luminance @ neutral) / (luminance @ (matrix @ neutral)))
    return scaled


def aim_xy(toward: str) -> XY:
    """Return the white that a recipe's ``toward`` names.

    Parameters
    ----------
    toward : str
        ``neutral`` (D65, the white of working light), a colour temperature, or ``x,y``.

    Raises
    ------
    PresetError
        The text is none of these, or lies outside what can be aimed at.

    Examples
    --------
    >>> aim_xy("neutral")
    (0.3127, 0.329)
    >>> aim_xy("0.345, 0.359")
    (0.345, 0.359)
    """
    text = toward.strip().lower().removesuffix("k")
    if text == "neutral":
        return D65_XY
    try:
        numbers = [float(part) for part in text.split(",")]
    except ValueError:
        numbers = []
    if len(numbers) == 1 and _LOWEST_K <= numbers[0] <= _HIGHEST_K:
        return locus_white_xy(numbers[0])
    if len(numbers) == 2 and all(number > 0.0 for number in numbers) and sum(numbers) < 1.0:
        return numbers[0], numbers[1]
    raise PresetError(
        f"cannot aim at {toward!r}",
        hint=f"use neutral, a colour temperature from {_LOWEST_K:.0f} to {_HIGHEST_K:.0f} K, or x,y",
    )


def locus_white_xy(cct_k: float) -> XY:
    """Return the white that a colour temperature names: Planckian below 4000 K, daylight above 5000 K.

    Between the two the loci are mixed in proportion, as for the reference illuminants of [1]_, so that
    no step of ``cct_k`` makes a visible one.  6504 K is D65.

    References
    ----------
    .. [1] CIE 224:2017, "CIE 2017 Colour Fidelity Index for accurate scientific use".
    .. [2] CIE 15:2004, "Colorimetry", 3.1: the daylight locus.

    Examples
    --------
    >>> x, y = locus_white_xy(6504)
    >>> print(f"{x:.4f} {y:.4f}")
    0.3127 0.3291
    """
    share = min(max((cct_k - 4000.0) / 1000.0, 0.0), 1.0)
    daylight = xyz_from_xy(_daylight_xy(max(cct_k, 4000.0)))
    x, y = xy_from_xyz((1.0 - share) * xyz_from_xy(planckian_xy(cct_k)) + share * daylight)
    return float(x), float(y)


def kept_xy(light_xy: XY, aim: XY, recipe: Recipe) -> XY:
    """Return where a neutral goes when a fraction of the cast is kept on each axis of the opponent plane.

    Nothing kept is the aim itself, everything kept is the light itself.
    """
    if recipe.keep_yellow_blue == 0.0 and recipe.keep_green_magenta == 0.0:
        return aim
    if recipe.keep_yellow_blue == 1.0 and recipe.keep_green_magenta == 1.0:
        return light_xy
    light_cast, aim_cast = cast_from_xy(light_xy, recipe.opponent), cast_from_xy(aim, recipe.opponent)
    keep = (recipe.keep_yellow_blue, recipe.keep_green_magenta)
    yellow_blue, green_magenta = (
        goal + share * (cast - goal) for cast, goal, share in zip(light_cast, aim_cast, keep, strict=True)
    )
    return xy_from_cast(yellow_blue, green_magenta, recipe.opponent)


def cancelling_shift(light_xy: XY, toward_xy: XY) -> tuple[float | None, float | None]:
    """Return what cancels the cast along the trade's two scales: mired (negative cools), Duv (negative adds magenta)."""
    (from_k, from_duv), (toward_k, toward_duv) = cct_duv_from_xy(light_xy), cct_duv_from_xy(toward_xy)
    if from_k is None or toward_k is None:
        return None, None
    return float(mired_from_k(toward_k) - mired_from_k(from_k)), float(toward_duv - from_duv)


def corrected_xy(light_xy: XY, header: Header, correction: Correction) -> XY:
    """Return where a neutral under ``light_xy`` (at the daylight setting) lies after the correction."""
    light = np.asarray(linear_from_xy(light_xy), np.float64)
    decoded = np.linalg.solve(_daylight_from_decoded(header), light)
    x, y = xy_from_linear(correction.matrix @ decoded)
    return float(x), float(y)


def residual(cast: Cast, correction: Correction) -> tuple[float, float] | None:
    """Return the cast that the frame's own measurement would still show after the correction.

    Parameters
    ----------
    cast : Cast
        As measured.
    correction : Correction
        Of the same frame, perhaps by the light of its whole stretch.

    Returns
    -------
    tuple of float or None
        ``yellow_blue`` and ``green_magenta`` in the cast's opponent plane; None where nothing was measured.
    """
    if cast.white_xy is None:
        return None
    left = cast_from_xy(corrected_xy(cast.white_xy, cast.header, correction), cast.opponent)
    return float(left[0]), float(left[1])


def correction_moved(old: Correction, new: Correction) -> float:
    """Return how far two corrections of one frame lie apart.

    The angle between what the two make of the neutral of the newer one, which decides whether an
    already graded frame has to be graded again.

    Returns
    -------
    float
        0 where both are the same matrix. [degrees in working light]
    """
    neutral = np.linalg.solve(new.matrix, np.asarray(linear_from_xy(new.toward_xy), np.float64))
    return angle_deg(old.matrix @ neutral, new.matrix @ neutral)


def angle_deg(first: Matrix, second: Matrix) -> float:
    """Return the angle between two (3,) lights, exact for small ones too.

    Examples
    --------
    >>> angle_deg(np.array([1.0, 1.0, 0.0]), np.array([1.0, 0.0, 0.0]))
    45.0
    """
    return math.degrees(math.atan2(float(np.linalg.norm(np.cross(first, second))), float(first @ second)))


def _daylight_from_decoded(header: Header) -> Matrix:
    return np.eye(3) if header.daylight_from_decoded is None else header.daylight_from_decoded


def _daylight_xy(cct_k: float) -> XY:
    """CIE 15:2004, equations 3.3 to 3.5."""
    t = 1e3 / cct_k
    if cct_k <= 7000.0:
        x = ((-4.6070 * t + 2.9678) * t + 0.09911) * t + 0.244063
    else:
        x = ((-2.0064 * t + 1.9018) * t + 0.24748) * t + 0.237040
    return x, (-3.0 * x + 2.870) * x - 0.275
