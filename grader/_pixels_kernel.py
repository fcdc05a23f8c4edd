"""The compiled loops that grade pixels, in chunks that stay in the processor's nearest cache.

A chunk is some planes of float32 in one flat scratch array: the file's light (planes 0 to 2), the light that it
becomes (3 to 5), and what the steps hand on to each other (6 to 9).  The loops are free of branches, so that the compiler makes vector code of them; a whole
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
from grader.colour.fitted import RATIONAL, TABLE, Form

CHUNK: Final = 512
_PLANES: Final = 10
_BLOCK: Final = 128
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
    planes = np.zeros(_PLANES * _PLANE, np.float32)
    outside = clipped = 0
    for start in range(0, source.size, 3 * CHUNK):
        count = min(3 * CHUNK, source.size - start) // 3
        _load(source[start : start + 3 * count], planes, count, decode, steps)
        if _multiply(planes, count, steps.matrix, steps.clip[0]) > _ZERO:
            for block in range(0, count, _BLOCK):
                more_outside, more_clipped = _mend(planes[block:], min(_BLOCK, count - block), steps)
                outside += more_outside
                clipped += more_clipped
        _store(planes[3 * _PLANE :], count, encode, steps, target[start : start + 3 * count])
    return outside, clipped


@_exact
def _mend(planes: Any, count: int, steps: Steps) -> tuple[int, int]:
    """Keep highlights and pull into the gamut where a block of pixels needs it; return what `grade` does."""
    if _excess(planes, count, steps.clip[0]) > _ZERO:
        _clipping(planes, count, steps)
        _lift(planes, count, steps)
        _make_grey(planes, count, steps)
    if steps.bounded and _beyond(planes, count) > _ZERO:
        _pull_from_black(planes, count, steps.luminance)
        _pull_from_white(planes, count, steps.luminance)
        return int(_sum(planes[6 * _PLANE : 6 * _PLANE + count])), int(
            _sum(planes[7 * _PLANE : 7 * _PLANE + count])
        )
    return 0, 0


@_exact
def _load(source: Any, planes: Any, count: int, form: Form, steps: Steps) -> None:
    if form.kind == TABLE and form.octave_bits == 0:
        _load_codes(source, planes, count, form.table)
        return
    if steps.bounded:
        _load_integers(source, planes, count, _ONE / steps.code_white)
    else:
        _load_floats(source, planes, count)
    if form.kind == RATIONAL:
        for channel in range(3):
            _decode(planes[channel * _PLANE : channel * _PLANE + count], form)
    elif form.kind == TABLE:
        _through_tables(planes, count, form)


@_fast
def _load_integers(source: Any, planes: Any, count: int, scale: Any) -> None:
    for i in range(count):
        planes[i] = _f(source[3 * i]) * scale
        planes[_PLANE + i] = _f(source[3 * i + 1]) * scale
        planes[2 * _PLANE + i] = _f(source[3 * i + 2]) * scale


@_exact
def _load_floats(source: Any, planes: Any, count: int) -> None:
    """Spread values over three planes; NaN becomes 0, infinities become huge."""
    for i in range(count):
        for channel in range(3):
            value = _f(source[3 * i + channel])
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
def _ratio(x: Any, upper: Any, lower: Any) -> Any:
    over = ((((upper[5] * x + upper[4]) * x + upper[3]) * x + upper[2]) * x + upper[1]) * x + upper[0]
    under = (((lower[3] * x + lower[2]) * x + lower[1]) * x + lower[0]) * x + _ONE
    return over / under


@_fast
def _decode(plane: Any, form: Form) -> None:
    upper, lower, toe, slope = form.upper, form.lower, form.toe, form.slope
    for i in range(plane.size):
        encoded = plane[i]
        above = _ratio(encoded, upper, lower)
        plane[i] = slope * encoded if encoded < toe else above


@_fast
def _encode(plane: Any, form: Form) -> None:
    upper, lower, toe, slope = form.upper, form.lower, form.toe, form.slope
    for i in range(plane.size):
        linear = min(max(plane[i], _ZERO), _ONE)
        above = _ratio(np.sqrt(linear), upper, lower)
        plane[i] = slope * linear if linear < toe else above


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


@_summing
def _multiply(planes: Any, count: int, matrix: Any, limit: Any) -> Any:
    """Apply the matrix; return the sum of what the file has above a limit, and what came out below 0 or above 1.

    It is 0 if there is no such thing.  (A sum becomes vector code, a maximum does not.)
    """
    m00, m01, m02, m10, m11, m12, m20, m21, m22 = matrix
    found = _ZERO
    for i in range(count):
        x, y, z = planes[i], planes[_PLANE + i], planes[2 * _PLANE + i]
        red = m00 * x + m01 * y + m02 * z
        green = m10 * x + m11 * y + m12 * z
        blue = m20 * x + m21 * y + m22 * z
        planes[3 * _PLANE + i] = red
        planes[4 * _PLANE + i] = green
        planes[5 * _PLANE + i] = blue
        found += max(max(x, y, z) - limit, max(red, green, blue) - _ONE, -min(red, green, blue), _ZERO)
    return found


@_summing
def _excess(planes: Any, count: int, limit: Any) -> Any:
    """Return the sum of what the file has above a limit."""
    found = _ZERO
    for i in range(count):
        found += max(max(planes[i], planes[_PLANE + i], planes[2 * _PLANE + i]) - limit, _ZERO)
    return found


@_fast
def _ramp(value: Any, ramp: Any) -> Any:
    share = min(max((value - ramp[0]) * ramp[1], _ZERO), _ONE)
    return share * share * (_THREE - _TWO * share)


@_fast
def _clipping(planes: Any, count: int, steps: Steps) -> None:
    """Turn planes 0 to 2, the file's light, into how clipped each channel is; its luminance to 6, shares to 7 to 9."""
    s0, s1, s2 = steps.source_luminance
    clip = steps.clip
    for i in range(count):
        x, y, z = planes[i], planes[_PLANE + i], planes[2 * _PLANE + i]
        per_largest = _ONE / (max(x, y, z) + _TINY)
        planes[i] = _ramp(x, clip)
        planes[_PLANE + i] = _ramp(y, clip)
        planes[2 * _PLANE + i] = _ramp(z, clip)
        planes[6 * _PLANE + i] = s0 * x + s1 * y + s2 * z
        planes[7 * _PLANE + i] = x * per_largest
        planes[8 * _PLANE + i] = y * per_largest
        planes[9 * _PLANE + i] = z * per_largest


@_fast
def _lift(planes: Any, count: int, steps: Steps) -> None:
    """Lift clipped channels; leave how likely a pixel may have been white in plane 7."""
    colour = steps.colour
    for i in range(count):
        red, green, blue = planes[3 * _PLANE + i], planes[4 * _PLANE + i], planes[5 * _PLANE + i]
        of_red, of_green, of_blue = planes[i], planes[_PLANE + i], planes[2 * _PLANE + i]
        high = max(red, green, blue)
        red_or_more, green_or_more = red + of_red * (high - red), green + of_green * (high - green)
        blue_or_more = blue + of_blue * (high - blue)
        level = min(red_or_more, blue_or_more)
        maybe = _ramp(min(level, green_or_more) / (high + _TINY), colour)
        level = max(level, of_red * red, of_blue * blue)
        green += maybe * of_green * max(level * planes[8 * _PLANE + i] - green, _ZERO)
        planes[3 * _PLANE + i] = red + maybe * of_red * max(green * planes[7 * _PLANE + i] - red, _ZERO)
        planes[4 * _PLANE + i] = green
        planes[5 * _PLANE + i] = blue + maybe * of_blue * max(green * planes[9 * _PLANE + i] - blue, _ZERO)
        planes[7 * _PLANE + i] = maybe


@_fast
def _make_grey(planes: Any, count: int, steps: Steps) -> None:
    """Restore luminance and make nearly grey pixels grey."""
    l0, l1, l2 = steps.luminance
    one_clipped, two_clipped, strength = steps.one_clipped, steps.two_clipped, steps.strength
    for i in range(count):
        red, green, blue = planes[3 * _PLANE + i], planes[4 * _PLANE + i], planes[5 * _PLANE + i]
        of_red, of_green, of_blue = planes[i], planes[_PLANE + i], planes[2 * _PLANE + i]
        wanted, maybe = planes[6 * _PLANE + i], planes[7 * _PLANE + i]
        most = max(of_red, of_green, of_blue)
        second = max(min(of_red, of_green), min(max(of_red, of_green), of_blue))
        greyness = min(red, green, blue) / (max(red, green, blue) + _TINY)
        grey = strength * max(most * _ramp(greyness, one_clipped), second * _ramp(greyness, two_clipped))
        change = maybe * most * (wanted / max(l0 * red + l1 * green + l2 * blue, _TINY) - _ONE)
        red, green, blue = red + change * red, green + change * green, blue + change * blue
        red, green, blue = (
            red + grey * (wanted - red),
            green + grey * (wanted - green),
            blue + grey * (wanted - blue),
        )
        planes[3 * _PLANE + i] = red
        planes[4 * _PLANE + i] = green
        planes[5 * _PLANE + i] = blue


@_summing
def _beyond(planes: Any, count: int) -> Any:
    """Return the sum of what is below black and above white, 0 if nothing is."""
    total = _ZERO
    for i in range(count):
        red, green, blue = planes[3 * _PLANE + i], planes[4 * _PLANE + i], planes[5 * _PLANE + i]
        total += max(-min(red, green, blue), _ZERO) + max(max(red, green, blue) - _ONE, _ZERO)
    return total


@_fast
def _pull_from_black(planes: Any, count: int, luminance: Any) -> None:
    """Pull colours with negative channels to grey of their luminance; what is inside stays exactly as it is.

    Planes 6 and 7 become flags of what is out of gamut, and of what is too bright for it.
    """
    l0, l1, l2 = luminance
    for i in range(count):
        red, green, blue = planes[3 * _PLANE + i], planes[4 * _PLANE + i], planes[5 * _PLANE + i]
        low, high = min(red, green, blue), max(red, green, blue)
        bright = l0 * red + l1 * green + l2 * blue
        clipped = _ONE if abs(bright - _HALF) > _HALF + _EDGE else _ZERO
        planes[6 * _PLANE + i] = (_ONE if max(-low, high - _ONE) > _EDGE else _ZERO) * (_ONE - clipped)
        planes[7 * _PLANE + i] = clipped
        held = max(bright, _ZERO)
        pull = _ONE - min(held / (max(bright - low, _ZERO) + _TINY), _ONE)
        floor = held * _ROUNDING if pull > _ZERO else -_HUGE  # what should have become 0 becomes 0
        red, green, blue = (
            red + pull * (held - red),
            green + pull * (held - green),
            blue + pull * (held - blue),
        )
        planes[3 * _PLANE + i] = red if red > floor else _ZERO
        planes[4 * _PLANE + i] = green if green > floor else _ZERO
        planes[5 * _PLANE + i] = blue if blue > floor else _ZERO


@_fast
def _pull_from_white(planes: Any, count: int, luminance: Any) -> None:
    """Take from colours above white the luminance that cutting them off would cost, then pull them to grey."""
    l0, l1, l2 = luminance
    for i in range(count):
        red, green, blue = planes[3 * _PLANE + i], planes[4 * _PLANE + i], planes[5 * _PLANE + i]
        held = l0 * red + l1 * green + l2 * blue
        excess = l0 * max(red - _ONE, _ZERO) + l1 * max(green - _ONE, _ZERO) + l2 * max(blue - _ONE, _ZERO)
        kept = _ONE - excess / max(held, _TINY)
        red, green, blue, held = kept * red, kept * green, kept * blue, kept * held
        above = max(max(red, green, blue) - held, _ZERO)
        pull = _ONE - min(max(_ONE - held, _ZERO) / (above + _TINY), _ONE)
        planes[3 * _PLANE + i] = red + pull * (held - red)
        planes[4 * _PLANE + i] = green + pull * (held - green)
        planes[5 * _PLANE + i] = blue + pull * (held - blue)


@_summing
def _sum(flags: Any) -> Any:
    total = _ZERO
    for i in range(flags.size):
        total += flags[i]
    return total


@_exact
def _store(light: Any, count: int, form: Form, steps: Steps, target: Any) -> None:
    if form.kind == RATIONAL:
        for channel in range(3):
            _encode(light[channel * _PLANE : channel * _PLANE + count], form)
    elif form.kind == TABLE:
        _through_tables(light, count, form)
    _store_codes(light, count, target, steps.code_white, _HALF if steps.bounded else _ZERO)


@_fast
def _store_codes(light: Any, count: int, target: Any, scale: Any, rounding: Any) -> None:
    for i in range(count):
        target[3 * i] = light[i] * scale + rounding
        target[3 * i + 1] = light[_PLANE + i] * scale + rounding
        target[3 * i + 2] = light[2 * _PLANE + i] * scale + rounding
