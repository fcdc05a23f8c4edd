"""Transfer curves in the forms that fast loops want: a ratio of polynomials, a table over codes, a table over light.

The curves of the standards that start with a straight toe (sRGB, Rec.2020, ROMM) are met by one ratio of
polynomials, of degrees 5 and 4, to less than a hundredth of a 16-bit step: in the encoded value when decoding, in
the square root of linear light when encoding.  Every other curve goes through a table.  Everything is computed
from `grader.colour.transfer`, once in a process.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache
from typing import Any, Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from grader.colour import tone, transfer
from grader.model import Curve

LINEAR, RATIONAL, TABLE = 0, 1, 2

UPPER, LOWER = 5, 4
"""Degrees of numerator and denominator."""
TOLERANCE: Final = 0.02 / 65535
"""A ratio may be this far from its curve, in encoded units: a fiftieth of a 16-bit step."""

LOWEST_OCTAVE: Final = -60
HIGHEST_OCTAVE: Final = 40
_FINEST_BITS: Final = 12
_FLOAT_TOLERANCE: Final = 2e-7
_SAMPLES, _ROUNDS = 300, 8
_LARGEST_JUMP: Final = 2e-5
"""Rounded parameters let curves jump this far at the end of the toe, in linear light."""

Coefficients = tuple[np.float32, ...]
Floats = NDArray[np.float32]
Array = NDArray[np.float64]
Curves = tuple[Curve, Curve, Curve]


class Form(NamedTuple):
    """Three curves, ready for the loops; what a form does not need is left at zero.

    ``RATIONAL``: ``slope * x`` below ``toe``, else ``upper`` over ``lower`` (lowest power first; ``lower`` begins
    with 1, which is left out).
    ``TABLE``: ``table`` is (3, K), or (1, K) where the three curves are one.  Over codes (``octave_bits`` 0), K is
    their number.  Over light, each octave from ``lowest`` (``2**first_octave``) to ``highest`` has
    ``2**octave_bits`` equal steps, between which the loop interpolates.
    """

    kind: int
    upper: Coefficients
    lower: Coefficients
    toe: np.float32
    slope: np.float32
    table: Floats
    first_octave: int
    octave_bits: int
    lowest: np.float32
    highest: np.float32


_NO_UPPER: Final[Coefficients] = (np.float32(0),) * (UPPER + 1)
_NO_LOWER: Final[Coefficients] = (np.float32(0),) * LOWER
_NO_TABLE: Final = np.zeros((1, 2), np.float32)


def decoder(curves: Curves, levels: int) -> Form:
    """Return the form that decodes.

    Parameters
    ----------
    curves : three Curve
        The curves of red, green and blue.
    levels : int
        Number of codes; 0 for floating-point values (any size, either sign).

    Returns
    -------
    Form
        Takes encoded values with white at 1 (a table over codes: the codes themselves).
    """
    keys = _keys(curves)
    if all(_is_straight(curve) for curve in curves):
        return _form(LINEAR)
    if levels == 0:
        return _over_light(keys, "decode", False)
    return _rational_decoder(keys) or _over_codes(keys, levels)


def encoder(curves: Curves, *, toned: bool = False, floating: bool = False) -> Form:
    """Return the form that encodes, of linear light with white at 1.

    ``toned`` puts the raw tone curve (`grader.colour.tone`) before the curves; ``floating`` asks for the precision
    and range that floating-point output needs.
    """
    keys = _keys(curves)
    if not toned and all(_is_straight(curve) for curve in curves):
        return _form(LINEAR)
    if toned or floating:
        return _over_light(keys, "tone" if toned else "encode", not floating)
    return _rational_encoder(keys) or _over_light(keys, "encode", True)


class _Key(NamedTuple):
    """A curve as a value that can be compared (`Curve` holds an array)."""

    parameters: tuple[float, ...]
    samples: bytes

    def curve(self) -> Curve:
        samples = np.frombuffer(self.samples, np.float64) if self.samples else None
        g, a, b, c, d, e, f = self.parameters
        return Curve(g, a, b, c, d, e, f, samples)


def _keys(curves: Curves) -> tuple[_Key, ...]:
    return tuple(
        _Key(
            (curve.g, curve.a, curve.b, curve.c, curve.d, curve.e, curve.f),
            b"" if curve.samples is None else np.asarray(curve.samples, np.float64).tobytes(),
        )
        for curve in curves
    )


def same_curves(first: Curves, second: Curves) -> bool:
    """Return whether two sets of curves are the same function, value by value."""
    return _keys(first) == _keys(second)


def _is_straight(curve: Curve) -> bool:
    if curve.samples is not None:
        return len(curve.samples) == 2 and curve.samples[0] == 0 and curve.samples[1] == 1
    upper = (curve.g, curve.a, curve.b, curve.e) == (1.0, 1.0, 0.0, 0.0)
    return upper and (curve.d <= 0 or (curve.c, curve.f) == (1.0, 0.0))


def _form(kind: int, **parts: Any) -> Form:
    nothing = Form(
        kind,
        _NO_UPPER,
        _NO_LOWER,
        np.float32(0),
        np.float32(0),
        _NO_TABLE,
        0,
        0,
        np.float32(0),
        np.float32(0),
    )
    return nothing._replace(**parts)


@lru_cache(maxsize=64)
def _rational_decoder(keys: tuple[_Key, ...]) -> Form | None:
    """Return a ratio in the encoded value, its error counted in encoded steps; None where it is too far off."""
    curve = _toed(keys)
    if curve is None:
        return None
    encoded = _nodes(curve.d)
    linear = transfer.decode(curve, encoded)
    steps_per_light = 2e-6 / (transfer.decode(curve, encoded + 1e-6) - transfer.decode(curve, encoded - 1e-6))
    return _rational(_fit(encoded, linear, steps_per_light), curve.d, curve.c)


@lru_cache(maxsize=64)
def _rational_encoder(keys: tuple[_Key, ...]) -> Form | None:
    """Return a ratio in the square root of linear light; None where it is too far off."""
    curve = _toed(keys)
    if curve is None:
        return None
    toe = (curve.a * curve.d + curve.b) ** curve.g
    root = np.exp(np.log(toe) / 2 * (1 - _nodes(0.0)))  # equal shares for equal ratios of light
    encoded = transfer.encode(curve, root**2)
    return _rational(_fit(root, encoded, np.ones_like(root)), toe, 1 / curve.c)


def _toed(keys: tuple[_Key, ...]) -> Curve | None:
    """Return the one curve of the three channels if it has a straight toe through zero."""
    if len(set(keys)) > 1 or keys[0].samples:
        return None
    curve = keys[0].curve()
    if curve.e or curve.f or not 0 < curve.d < 1 or curve.c <= 0 or curve.a <= 0 or curve.g < 1:
        return None
    jump = max(curve.a * curve.d + curve.b, 0.0) ** curve.g - curve.c * curve.d
    return curve if abs(jump) < _LARGEST_JUMP else None


def _nodes(low: float) -> Array:
    """Return Chebyshev points from ``low`` to 1."""
    cosines = np.cos((np.arange(_SAMPLES) + 0.5) * np.pi / _SAMPLES)
    return np.asarray((1 + low + (1 - low) * cosines) / 2, np.float64)


def _rational(found: tuple[Array, Array] | None, toe: float, slope: float) -> Form | None:
    if found is None:
        return None
    upper, lower = (tuple(np.float32(value) for value in values) for values in found)
    return _form(RATIONAL, upper=upper, lower=lower, toe=np.float32(toe), slope=np.float32(slope))


def _fit(at: Array, wanted: Array, weight: Array) -> tuple[Array, Array] | None:
    """Return numerator and denominator (without its leading 1) of the best ratio found, if it is good enough.

    Least squares of ``upper - wanted * lower``, weighted by the denominator of the round before [1]_ and more where
    the error was large [2]_.

    References
    ----------
    .. [1] C. Sanathanan, J. Koerner, "Transfer function synthesis as a ratio of two complex polynomials", IEEE
       Transactions on Automatic Control 8, 1963, 56-58.
    .. [2] C. L. Lawson, "Contributions to the theory of linear least maximum approximation", thesis, UCLA, 1961.
    """
    powers = np.vander(at, UPPER + 1, increasing=True)
    columns = np.hstack([powers, -wanted[:, None] * powers[:, 1 : LOWER + 1]])
    divisor, emphasis = np.ones_like(at), np.ones_like(at)
    best: tuple[Array, Array] | None = None
    least = TOLERANCE
    for _ in range(_ROUNDS):
        scale = weight * emphasis / divisor
        found, *_ = np.linalg.lstsq(columns * scale[:, None], wanted * scale, rcond=None)
        upper, lower = found[: UPPER + 1], found[UPPER + 1 :]
        divisor = 1 + powers[:, 1 : LOWER + 1] @ lower
        if divisor.min() <= 0:
            break
        error = np.abs(powers @ upper / divisor - wanted) * weight
        if error.max() < least:
            least, best = error.max(), (np.asarray(upper, np.float64), np.asarray(lower, np.float64))
        emphasis = emphasis * (error / error.max() + 1e-3) ** 0.2
        emphasis /= emphasis.max()
    return best


@lru_cache(maxsize=16)
def _over_codes(keys: tuple[_Key, ...], levels: int) -> Form:
    table = np.stack([transfer.decode_table(key.curve(), levels) for key in _distinct(keys)])
    return _form(TABLE, table=table)


@lru_cache(maxsize=16)
def _over_light(keys: tuple[_Key, ...], way: str, up_to_white: bool) -> Form:
    """Return a table with equal steps in each octave, as fine as its curves need."""
    functions = [_function(key.curve(), way) for key in _distinct(keys)]
    first, last = (LOWEST_OCTAVE, 0) if up_to_white else (LOWEST_OCTAVE, HIGHEST_OCTAVE)
    tolerance = TOLERANCE if up_to_white else _FLOAT_TOLERANCE
    bits = 7 if up_to_white else 9
    while bits < _FINEST_BITS and _interpolation_error(functions, last, bits) > tolerance:
        bits += 1
    at = octave_steps(first, last, bits)
    table = np.stack([function(at) for function in functions]).astype(np.float32)
    table[:, 0] = [function(np.zeros(1))[0] for function in functions]  # the lowest octave holds zero as well
    ends = {"lowest": np.float32(at[0]), "highest": np.float32(at[-1])}
    return _form(TABLE, table=table, first_octave=first, octave_bits=bits, **ends)


def _distinct(keys: tuple[_Key, ...]) -> tuple[_Key, ...]:
    return keys[:1] if len(set(keys)) == 1 else keys


def octave_steps(first: int, last: int, bits: int) -> NDArray[np.float64]:
    """Return the places of a table over light: ``2**bits`` a octave, from ``2**first`` to just above ``2**last``.

    Examples
    --------
    >>> octave_steps(-1, 0, 1)
    array([0.5 , 0.75, 1.  , 1.5 ])
    """
    octaves = np.exp2(np.arange(first, last + 1, dtype=np.float64))
    return np.asarray((octaves[:, None] * (1 + np.arange(1 << bits) / (1 << bits))).reshape(-1), np.float64)


def _function(curve: Curve, way: str) -> Callable[[Any], NDArray[np.float64]]:
    if way == "decode":
        return lambda values: transfer.decode(curve, values)
    if way == "encode":
        return lambda values: transfer.encode(curve, values)
    return lambda values: transfer.encode(curve, tone.apply(values))


def _interpolation_error(functions: list[Callable[..., NDArray[np.float64]]], last: int, bits: int) -> float:
    """Return the largest error half-way between table places, from 2**-20 up (relative above 1)."""
    at = octave_steps(-20, last, bits)
    middle = (at[1:] + at[:-1]) / 2
    worst = 0.0
    for function in functions:
        ends, true = function(at), function(middle)
        error = np.abs((ends[1:] + ends[:-1]) / 2 - true) / np.maximum(np.abs(true), 1)
        worst = max(worst, float(error.max()))
    return worst
