"""Transfer curves in the forms that fast loops want: a polynomial, a table over codes, a table over light.

The curves of the standards that start with a straight toe (sRGB, Rec.2020, ROMM) are met by one polynomial of
degree 8 to a hundredth of a 16-bit step: in the square root of the encoded value when decoding, in the fourth root
of linear light when encoding.  Every other curve goes through a table.  Everything is computed from
`grader.colour.transfer`, once in a process.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache
from typing import Any, Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from grader.colour import tone, transfer
from grader.model import Curve

LINEAR, POLYNOMIAL, TABLE = 0, 1, 2

DEGREE: Final = 8
TOLERANCE: Final = 0.02 / 65535
"""A polynomial may be this far from its curve, in encoded units: a fiftieth of a 16-bit step."""

LOWEST_OCTAVE: Final = -60
HIGHEST_OCTAVE: Final = 40
_FINEST_BITS: Final = 12
_FLOAT_TOLERANCE: Final = 2e-7
_SAMPLES: Final = 2000

Coefficients = tuple[np.float32, ...]
Floats = NDArray[np.float32]
Curves = tuple[Curve, Curve, Curve]


class Form(NamedTuple):
    """Three curves, ready for the loops; what a form does not need is left at zero.

    ``POLYNOMIAL``: ``slope * x`` below ``toe``, else the polynomial (lowest power first) in a root of x.
    ``TABLE``: ``table`` is (3, K), or (1, K) where the three curves are one.  Over codes (``octave_bits`` 0), K is
    their number.  Over light, each octave from ``lowest`` (``2**first_octave``) to ``highest`` has
    ``2**octave_bits`` equal steps, between which the loop interpolates.
    """

    kind: int
    polynomial: Coefficients
    toe: np.float32
    slope: np.float32
    table: Floats
    first_octave: int
    octave_bits: int
    lowest: np.float32
    highest: np.float32


_NO_POLYNOMIAL: Final[Coefficients] = (np.float32(0),) * (DEGREE + 1)
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
    return _polynomial_decoder(keys) or _over_codes(keys, levels)


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
    return _polynomial_encoder(keys) or _over_light(keys, "encode", True)


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
        kind, _NO_POLYNOMIAL, np.float32(0), np.float32(0), _NO_TABLE, 0, 0, np.float32(0), np.float32(0)
    )
    return nothing._replace(**parts)


@lru_cache(maxsize=64)
def _polynomial_decoder(keys: tuple[_Key, ...]) -> Form | None:
    """Return a polynomial in sqrt(encoded), its error counted in encoded steps; None where it is too far off."""
    curve = _toed(keys)
    if curve is None:
        return None
    encoded = _nodes(curve.d**0.5) ** 2
    linear = transfer.decode(curve, encoded)
    steps_per_light = 2e-6 / (transfer.decode(curve, encoded + 1e-6) - transfer.decode(curve, encoded - 1e-6))
    found = _fit(np.sqrt(encoded), linear, steps_per_light)
    if found is None:
        return None
    return _form(POLYNOMIAL, polynomial=found, toe=np.float32(curve.d), slope=np.float32(curve.c))


@lru_cache(maxsize=64)
def _polynomial_encoder(keys: tuple[_Key, ...]) -> Form | None:
    """Return a polynomial in linear ** (1/4); None where it is too far off."""
    curve = _toed(keys)
    if curve is None:
        return None
    toe = curve.c * curve.d
    linear = _nodes(toe**0.25) ** 4
    found = _fit(linear**0.25, transfer.encode(curve, linear), np.ones_like(linear))
    if found is None:
        return None
    return _form(POLYNOMIAL, polynomial=found, toe=np.float32(toe), slope=np.float32(1 / curve.c))


def _toed(keys: tuple[_Key, ...]) -> Curve | None:
    """Return the one curve of the three channels if it has a straight toe through zero."""
    if len(set(keys)) > 1 or keys[0].samples:
        return None
    curve = keys[0].curve()
    simple = curve.e == curve.f == 0 and 0 < curve.d < 1 and curve.c > 0 and curve.a > 0
    continuous = simple and abs((curve.a * curve.d + curve.b) ** curve.g - curve.c * curve.d) < 1e-6
    return curve if continuous else None


def _nodes(low: float) -> NDArray[np.float64]:
    """Return Chebyshev points from ``low`` to 1."""
    cosines = np.cos((np.arange(_SAMPLES) + 0.5) * np.pi / _SAMPLES)
    return np.asarray((1 + low + (1 - low) * cosines) / 2, np.float64)


def _fit(at: NDArray[Any], wanted: NDArray[Any], weight: NDArray[Any]) -> Coefficients | None:
    powers = np.vander(at, DEGREE + 1, increasing=True)
    found, *_ = np.linalg.lstsq(powers * weight[:, None], wanted * weight, rcond=None)
    worst = np.max(np.abs(powers @ found - wanted) * weight)
    return tuple(np.float32(value) for value in found) if worst < TOLERANCE else None


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
