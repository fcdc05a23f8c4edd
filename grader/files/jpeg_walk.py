"""The compiled walk over the Huffman codes of one JPEG scan."""

from __future__ import annotations

from typing import Any

from grader.colour.compiled import jit

# Numbers of problems; 0 is none.  See `jpeg_entropy` for their words.
_EARLY, _NO_CODE, _OVERRUN, _RESTART, _RANGE = 1, 2, 3, 4, 5


@jit
def _refill(data: Any, position: int, end: int, bits: int, count: int) -> Any:
    """Append whole bytes to the bits at hand, up to a marker."""
    while count <= 48 and position < end:
        byte = data[position]
        if byte == 0xFF:
            follower = data[position + 1] if position + 1 < end else 0xD9
            if follower == 0xFF:
                position += 1
                continue
            if follower != 0:
                break
            position += 1
        position += 1
        bits = ((bits << 8) | byte) & 0xFFFFFFFFFFFFFF
        count += 8
    return position, bits, count


@jit
def _peek(bits: int, count: int) -> int:
    """Return the next 16 bits; ones stand for what is not there."""
    if count >= 16:
        return (bits >> (count - 16)) & 0xFFFF
    return ((bits << (16 - count)) | ((1 << (16 - count)) - 1)) & 0xFFFF


@jit
def _sequential_block(  # noqa: C901, PLR0911 - a state machine, compiled
    data: Any, reader: Any, end: int, dc: Any, ac: Any, has_ac: bool
) -> Any:
    """Walk over one block: the DC code and, in sequential mode, the AC codes; return the DC difference too."""
    position, bits, count = reader
    position, bits, count = _refill(data, position, end, bits, count)
    entry = dc[_peek(bits, count)]
    size = entry & 255
    count -= (entry >> 8) + size
    if entry == 0 or size > 16:
        return (_EARLY if count < 16 else _NO_CODE), (position, bits, count), 0
    if count < 0:
        return _EARLY, (position, bits, 0), 0
    step = (bits >> count) & ((1 << size) - 1)
    if size and not step >> (size - 1):  # T.81, F.2.2.1: values below half stand for negative ones
        step -= (1 << size) - 1
    k = 1
    while has_ac and k < 64:
        if count < 32:
            position, bits, count = _refill(data, position, end, bits, count)
        entry = ac[_peek(bits, count)]
        if entry == 0:
            return (_EARLY if count < 16 else _NO_CODE), (position, bits, count), step
        run, size = (entry >> 4) & 15, entry & 15
        count -= (entry >> 8) + size
        if count < 0:
            return _EARLY, (position, bits, 0), step
        if size == 0:
            if run < 15:
                break
            k += 16
            continue
        k += run + 1
        if k > 64:
            return _OVERRUN, (position, bits, count), step
    if k > 64:
        return _OVERRUN, (position, bits, count), step
    return 0, (position, bits, count), step


@jit
def _band_block(  # noqa: C901, PLR0911 - a state machine, compiled
    data: Any, reader: Any, end: int, ac: Any, run_left: int, band: Any, mask: int
) -> Any:
    """Walk over one block of a progressive AC scan; return problem, reader, end-of-band run, coefficient mask."""
    position, bits, count = reader
    first, last, refining = band
    k = first
    while k <= last and run_left == 0:
        if count < 32:
            position, bits, count = _refill(data, position, end, bits, count)
        entry = ac[_peek(bits, count)]
        if entry == 0:
            return (_EARLY if count < 16 else _NO_CODE), (position, bits, count), 0, mask
        run, size = (entry >> 4) & 15, entry & 15
        count -= entry >> 8
        if size == 0 and run < 15:
            extra = (bits >> (count - run)) & ((1 << run) - 1) if count >= run else 0
            run_left = (1 << run) + extra
            count -= run
            break
        if refining and size > 1:
            return _NO_CODE, (position, bits, count), 0, mask
        count -= size
        if count < 0:
            return _EARLY, (position, bits, 0), 0, mask
        if refining:
            position, bits, count, k = _skip_known(data, (position, bits, count), end, k, last, run, mask)
        else:
            k += run
        if size and k > last:
            return _OVERRUN, (position, bits, count), 0, mask
        if size:
            mask |= 1 << k
        k += 1
    if count < 0:
        return _EARLY, (position, bits, 0), 0, mask
    if run_left:
        if refining:
            position, bits, count, k = _skip_known(data, (position, bits, count), end, k, last, 64, mask)
        run_left -= 1
    if count < 0:
        return _EARLY, (position, bits, 0), 0, mask
    return 0, (position, bits, count), run_left, mask


@jit
def _skip_known(data: Any, reader: Any, end: int, k: int, last: int, run: int, mask: int) -> Any:
    """Pass ``run`` coefficients that are still zero; each known one on the way takes a correction bit."""
    position, bits, count = reader
    while k <= last:
        if (mask >> k) & 1:
            if count < 1:
                position, bits, count = _refill(data, position, end, bits, 0)
            count -= 1
            if count < 0:
                break
        elif run == 0:
            break
        else:
            run -= 1
        k += 1
    return position, bits, count, k


@jit
def _restart(data: Any, position: int, end: int, number: int) -> int:
    """Return the position behind the restart marker of that number, or -1."""
    while position + 1 < end and data[position] == 0xFF and data[position + 1] == 0xFF:
        position += 1
    if position + 1 < end and data[position] == 0xFF and data[position + 1] == 0xD0 + number:
        return position + 2
    return -1


@jit
def walk(  # noqa: C901 - one scan, one loop, compiled
    data: Any, bounds: Any, units: Any, blocks: Any, tables: Any, masks: Any, band: Any
) -> Any:
    """Walk over one scan.

    Parameters
    ----------
    data : (N,) uint8
    bounds : (int, int)
        Where the scan's coded data begin and end.
    units : (int, int)
        Number of minimum coded units, and of those between restarts (0 = no restarts).
    blocks : (B,) int64 and (C,) int64
        For each block of a unit, which of the tables it takes; for each table, the largest DC value there is.
    tables : two (C, 65536) uint16
        DC and AC look-ups: code length times 256, plus value; 0 = no such code.
    masks : (blocks,) int64
        Coefficients known so far, of progressive AC scans; changed in place.
    band : five int
        First and last coefficient, high and low bit position; 1 for a progressive process.

    Returns
    -------
    problem : int
        0 where everything fits.
    position : int
        Where the walk ended; bytes taken in but not used are not counted.
    """
    position, end = bounds
    reader = (position, 0, 0)
    dc, ac = tables
    places, most = blocks
    levels = [0] * len(most)
    first, last, high, _, progressive = band
    run_left, restarts, problem = 0, 0, 0
    for unit in range(units[0]):
        if units[1] > 0 and unit > 0 and unit % units[1] == 0:
            if reader[2] >= 8:
                return _RESTART, reader[0]
            position = _restart(data, reader[0], end, restarts % 8)
            if position < 0:
                return _RESTART, reader[0]
            reader = (position, 0, 0)
            restarts += 1
            run_left = 0
            for i in range(len(levels)):
                levels[i] = 0
        if progressive == 1 and first > 0:
            problem, reader, run_left, masks[unit] = _band_block(
                data, reader, end, ac[0], run_left, (first, last, high > 0), masks[unit]
            )
        elif progressive == 1 and high > 0:
            problem, reader = _correction_bits(data, reader, end, len(places))
        else:
            for place in places:
                problem, reader, step = _sequential_block(
                    data, reader, end, dc[place], ac[place], progressive == 0
                )
                levels[place] += step
                if problem == 0 and abs(levels[place]) > most[place]:
                    problem = _RANGE
                if problem:
                    return problem, reader[0]
        if problem:
            return problem, reader[0]
    return 0, reader[0] - reader[2] // 8


@jit
def _correction_bits(data: Any, reader: Any, end: int, number: int) -> Any:
    position, bits, count = _refill(data, reader[0], end, reader[1], reader[2])
    count -= number
    if count < 0:
        return _EARLY, (position, bits, 0)
    return 0, (position, bits, count)
