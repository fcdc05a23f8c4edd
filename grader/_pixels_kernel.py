"""The compiled loops that grade pixels, in chunks that stay in the processor's nearest cache.

A chunk is some planes of float32 in one flat scratch array: the light (planes 0 to 2), the light as the file had it
(3 to 5), two flags (6, 7).  The loops are free of branches, so that the compiler makes vector code of them; a whole
step is left out where no pixel of the chunk needs it, which changes no result.  What the steps mean stands in
`grader._pixels_plain`, which does the same without a compiler.

Whoever changes a loop should look for vector code again: a division that may raise stops it (hence ``error_model``),
so do 64-bit integers beside 32-bit lanes, several arrays that might overlap (hence one scratch array), and
assumptions about NaN (hence they are taken out on loading, by a loop compiled without such assumptions).
"""

from __future__ import annotations

from typing import Any, Final

import numpy as np

from grader._pixels_steps import Steps
from grader.colour import compiled
from grader.colour.fitted import LINEAR, POLYNOMIAL, Form

CHUNK: Final = 1024
_PLANE: Final = CHUNK + 16  # planes a power of two apart would compete for the same cache lines

_f = np.float32
_ZERO, _HALF, _ONE, _TWO, _THREE = _f(0), _f(0.5), _f(1), _f(2), _f(3)
_TINY: Final = _f(1e-30)
_HUGE: Final = _f(1e30)
_ROUNDING: Final = _f(5e-7)
_EDGE: Final = _f(2e-6)  # rounding of the matrix; a value this little outside is not counted as outside

_exact = compiled.jit(error_model="numpy")
_fast = compiled.jit(fastmath={"contract", "nsz", "nnan", "ninf"}, error_model="numpy")
_summing = compiled.jit(fastmath=True)


@_exact
def grade(source: Any, target: Any, decode: Form, steps: Steps, encode: Form) -> tuple[int, int]:
    """Grade flat interleaved codes; return how many pixels were out of gamut, and how many were clipped.

    ``source`` and ``target`` (3 * N,) may be the same array.
    """
    planes = np.empty(8 * _PLANE, np.float32)
    outside = clipped = 0
    for start in range(0, source.size, 3 * CHUNK):
        count = min(3 * CHUNK, source.size - start) // 3
        _load(source[start : start + 3 * count], planes, count, decode, steps.code_white)
        touched = _largest(planes, count) > steps.clip[0]
        if touched:
            planes[3 * _PLANE : 6 * _PLANE] = planes[: 3 * _PLANE]
        beyond = _multiply(planes, count, steps.matrix, steps.luminance)
        if touched:
            _keep_highlights(planes, count, steps)
        if steps.bounded and (touched or beyond > _ZERO):
            _pull_into_gamut(planes, count, steps.luminance)
            outside += int(_sum(planes[6 * _PLANE : 6 * _PLANE + count]))
            clipped += int(_sum(planes[7 * _PLANE : 7 * _PLANE + count]))
        _store(planes, count, encode, steps, target[start : start + 3 * count])
    return outside, clipped


@_exact
def _load(source: Any, planes: Any, count: int, form: Form, code_white: Any) -> None:
    if form.kind == POLYNOMIAL:
        _load_scaled(source, planes, count, _ONE / code_white)
        for channel in range(3):
            _decode_polynomial(planes[channel * _PLANE : channel * _PLANE + count], form)
    elif form.kind == LINEAR:
        _load_scaled(source, planes, count, _ONE / code_white)
    elif form.octave_bits == 0:
        _load_codes(source, planes, count, form.table)
    else:
        _load_scaled(source, planes, count, _ONE / code_white)
        _through_tables(planes, count, form)


@_exact
def _load_scaled(source: Any, planes: Any, count: int, scale: Any) -> None:
    """Spread interleaved values over three planes; NaN becomes 0, infinities become huge."""
    for i in range(count):
        for channel in range(3):
            value = _f(source[3 * i + channel]) * scale
            value = value if value == value else _ZERO  # noqa: PLR0124 - NaN
            planes[channel * _PLANE + i] = max(min(value, _HUGE), -_HUGE)


@_fast
def _load_codes(source: Any, planes: Any, count: int, table: Any) -> None:
    """Decode integer codes by a table of every code."""
    last = len(table) - 1
    red, green, blue = table[0], table[min(1, last)], table[last]
    for i in range(count):
        planes[i] = red[np.intp(source[3 * i])]
        planes[_PLANE + i] = green[np.intp(source[3 * i + 1])]
        planes[2 * _PLANE + i] = blue[np.intp(source[3 * i + 2])]


@_fast
def _polynomial(x: Any, p: Any) -> Any:
    y = p[8]
    y = y * x + p[7]
    y = y * x + p[6]
    y = y * x + p[5]
    y = y * x + p[4]
    y = y * x + p[3]
    y = y * x + p[2]
    y = y * x + p[1]
    return y * x + p[0]


@_fast
def _decode_polynomial(plane: Any, form: Form) -> None:
    p, toe, slope = form.polynomial, form.toe, form.slope
    for i in range(plane.size):
        encoded = plane[i]
        above = _polynomial(np.sqrt(encoded), p)
        plane[i] = slope * encoded if encoded < toe else above


@_fast
def _encode_polynomial(plane: Any, form: Form, code_white: Any) -> None:
    p, toe, slope = form.polynomial, form.toe, form.slope
    for i in range(plane.size):
        linear = min(max(plane[i], _ZERO), _ONE)
        above = _polynomial(np.sqrt(np.sqrt(linear)), p)
        plane[i] = (slope * linear if linear < toe else above) * code_white


@_exact
def _through_tables(planes: Any, count: int, form: Form) -> None:
    last = len(form.table) - 1
    for channel in range(3):
        plane = planes[channel * _PLANE : channel * _PLANE + count]
        _through_table(plane, form.table[min(channel, last)], form)


@_fast
def _through_table(plane: Any, table: Any, form: Form) -> None:
    """Interpolate in a table with equal steps in each octave; negative values are mirrored.

    A float32's own bits, cut behind the first ``octave_bits`` of its fraction, number the table's places.
    """
    cut = 23 - form.octave_bits
    shift, rest = np.uint32(cut), np.uint32((1 << cut) - 1)
    per_step = _ONE / _f(1 << cut)
    first = np.uint32((127 + form.first_octave) << form.octave_bits)
    lowest, highest = form.lowest, form.highest
    last = np.uint32(table.size - 2)
    bits = np.empty(plane.size, np.uint32)
    sizes = bits.view(np.float32)
    for i in range(plane.size):
        sizes[i] = min(max(abs(plane[i]), lowest), highest)
    for i in range(plane.size):
        place = min(np.uint32(bits[i] >> shift) - first, last)
        share = _f(np.int32(bits[i] & rest)) * per_step
        low = table[place]
        value = low + share * (table[place + np.uint32(1)] - low)
        plane[i] = -value if plane[i] < _ZERO else value


@_fast
def _largest(planes: Any, count: int) -> Any:
    largest = _ZERO
    for i in range(count):
        largest = max(largest, planes[i], planes[_PLANE + i], planes[2 * _PLANE + i])
    return largest


@_fast
def _multiply(planes: Any, count: int, matrix: Any, luminance: Any) -> Any:
    """Apply the matrix; return how far the pixel that is most out of gamut is beyond it."""
    m00, m01, m02, m10, m11, m12, m20, m21, m22 = matrix
    beyond = -_ONE
    for i in range(count):
        x, y, z = planes[i], planes[_PLANE + i], planes[2 * _PLANE + i]
        red = m00 * x + m01 * y + m02 * z
        green = m10 * x + m11 * y + m12 * z
        blue = m20 * x + m21 * y + m22 * z
        planes[i] = red
        planes[_PLANE + i] = green
        planes[2 * _PLANE + i] = blue
        low = min(red, green, blue)
        high = max(red, green, blue)
        beyond = max(beyond, -low, high - _ONE)
    return beyond


@_fast
def _ramp(value: Any, ends: Any) -> Any:
    share = min(max((value - ends[0]) / (ends[1] - ends[0]), _ZERO), _ONE)
    return share * share * (_THREE - _TWO * share)


@_fast
def _keep_highlights(planes: Any, count: int, steps: Steps) -> None:
    s0, s1, s2 = steps.source_luminance
    l0, l1, l2 = steps.luminance
    clip, one_clipped, two_clipped = steps.clip, steps.one_clipped, steps.two_clipped
    for i in range(count):
        red, green, blue = planes[i], planes[_PLANE + i], planes[2 * _PLANE + i]
        x, y, z = planes[3 * _PLANE + i], planes[4 * _PLANE + i], planes[5 * _PLANE + i]
        wanted = s0 * x + s1 * y + s2 * z
        of_x, of_y, of_z = _ramp(x, clip), _ramp(y, clip), _ramp(z, clip)
        high = max(red, green, blue)
        red_or_more, green_or_more = red + of_x * (high - red), green + of_y * (high - green)
        blue_or_more = blue + of_z * (high - blue)
        level = min(red_or_more, blue_or_more)
        maybe = _ramp(min(level, green_or_more) / (high + _TINY), steps.colour)
        per_largest = _ONE / (max(x, y, z) + _TINY)
        level = max(level, of_x * red, of_z * blue)
        green = green + maybe * of_y * max(level * (y * per_largest) - green, _ZERO)
        red = red + maybe * of_x * max(green * (x * per_largest) - red, _ZERO)
        blue = blue + maybe * of_z * max(green * (z * per_largest) - blue, _ZERO)
        most = max(of_x, of_y, of_z)
        second = max(min(of_x, of_y), min(max(of_x, of_y), of_z))
        scale = _ONE + maybe * most * (wanted / max(l0 * red + l1 * green + l2 * blue, _TINY) - _ONE)
        greyness = min(red, green, blue) / (max(red, green, blue) + _TINY)
        grey = max(most * _ramp(greyness, one_clipped), second * _ramp(greyness, two_clipped))
        grey = grey * steps.strength
        planes[i] = scale * red + grey * (wanted - scale * red)
        planes[_PLANE + i] = scale * green + grey * (wanted - scale * green)
        planes[2 * _PLANE + i] = scale * blue + grey * (wanted - scale * blue)


@_fast
def _pull_into_gamut(planes: Any, count: int, luminance: Any) -> None:
    l0, l1, l2 = luminance
    for i in range(count):
        red, green, blue = planes[i], planes[_PLANE + i], planes[2 * _PLANE + i]
        low, high = min(red, green, blue), max(red, green, blue)
        bright = l0 * red + l1 * green + l2 * blue
        clipped = _ONE if abs(bright - _HALF) > _HALF + _EDGE else _ZERO
        planes[6 * _PLANE + i] = (_ONE if max(-low, high - _ONE) > _EDGE else _ZERO) * (_ONE - clipped)
        planes[7 * _PLANE + i] = clipped
        # from below black: to grey of the same luminance; what was inside stays exactly as it was (pull 0)
        below = max(bright - low, _ZERO)
        held = max(bright, _ZERO)
        pull = _ONE - min(held / (below + _TINY), _ONE)
        floor = held * _ROUNDING if pull > _ZERO else -_HUGE  # what should have become 0 becomes 0
        red, green, blue = (
            red + pull * (held - red),
            green + pull * (held - green),
            blue + pull * (held - blue),
        )
        red = red if red > floor else _ZERO
        green = green if green > floor else _ZERO
        blue = blue if blue > floor else _ZERO
        # from above white: first less luminance, then to grey
        excess = l0 * max(red - _ONE, _ZERO) + l1 * max(green - _ONE, _ZERO) + l2 * max(blue - _ONE, _ZERO)
        kept = _ONE - excess / max(held, _TINY)
        red, green, blue, held = kept * red, kept * green, kept * blue, kept * held
        above = max(max(red, green, blue) - held, _ZERO)
        pull = _ONE - min(max(_ONE - held, _ZERO) / (above + _TINY), _ONE)
        planes[i] = red + pull * (held - red)
        planes[_PLANE + i] = green + pull * (held - green)
        planes[2 * _PLANE + i] = blue + pull * (held - blue)


@_summing
def _sum(flags: Any) -> Any:
    total = _ZERO
    for i in range(flags.size):
        total += flags[i]
    return total


@_exact
def _store(planes: Any, count: int, form: Form, steps: Steps, target: Any) -> None:
    white = steps.code_white
    rounding = _HALF if steps.bounded else _ZERO
    if form.kind == POLYNOMIAL:
        for channel in range(3):
            _encode_polynomial(planes[channel * _PLANE : channel * _PLANE + count], form, white)
        white = _ONE
    elif form.kind != LINEAR:
        _through_tables(planes, count, form)
    _store_codes(planes, count, target, white, rounding)


@_fast
def _store_codes(planes: Any, count: int, target: Any, scale: Any, rounding: Any) -> None:
    for i in range(count):
        for channel in range(3):
            target[3 * i + channel] = planes[channel * _PLANE + i] * scale + rounding
