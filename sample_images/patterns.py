"""Procedural surfaces: what three materials a point mixes, how bright, and how its normal tilts."""

from __future__ import annotations

import math
from typing import Any

from tracer import cloudy, jit, noise

Shade = tuple[float, float, float, float, float, float]
"""Shares of the second and third material, brightness, and the tilt of the normal along x, y, z."""

PLAIN, GLAZE, BANDS, PLANKS, CLOTH, WALL, CURTAIN, CARD, TILES, BRUSHED = range(10)

_DIGITS = (
    "111101101101111", "010110010010111", "111001111100111", "111001111001111", "101101111001001",
    "111100111001111", "111100111101111", "111001001001001", "111101111101111", "111101111001111",
)  # fmt: skip
"""Ten figures in three by five cells."""
_GLYPHS = tuple(tuple(int(c) for c in digit) for digit in _DIGITS)


@jit
def _wave(x: float) -> float:
    return 0.5 + 0.5 * math.sin(x)


@jit
def _step(edge: float, x: float, soft: float) -> float:
    f = min(max((x - edge) / soft + 0.5, 0.0), 1.0)
    return f * f * (3 - 2 * f)


@jit
def _glaze(s: Any, x: float, y: float, z: float, angle: float) -> Shade:
    """Poured glaze over clay: s = (height of the drip line, speckle, ring depth, seed)."""
    drip = s[0] + 0.022 * (noise(5 * angle + s[3], s[3], 1.0) - 0.5) + 0.008 * noise(17 * angle, s[3], 2.0)
    bare = 1 - _step(drip, y, 0.004)
    thick = cloudy(26 * x + s[3], 15 * y, 26 * z)
    speck = _step(0.78, noise(330 * x + s[3], 330 * y, 330 * z), 0.08) * s[1]
    streak = 0.55 * _step(0.55, noise(9 * angle + s[3], 7 * y, s[3]), 0.5) * noise(40 * angle, 5 * y, 7.0)
    pooled = 0.75 * (1 - _step(0.0, y - drip, 0.035))
    rise = s[2] * math.sin(560 * y + 2 * math.sin(angle)) + 0.03 * (noise(60 * x, 60 * y, 60 * z) - 0.5)
    bright = 0.80 + 0.32 * thick - 0.12 * pooled * (1 - bare)
    return bare, (1 - bare) * min(speck + 0.22 * pooled + streak, 0.9), bright, 0.0, rise, 0.0


@jit
def _bands(s: Any, x: float, y: float, z: float, angle: float) -> Shade:
    """Painted rings and a brushed wave: s = (first ring, spacing, width, seed)."""
    wobble = 0.0016 * (noise(4 * angle, 9 * y, s[3]) - 0.5)
    place = (y - s[0] + wobble) / s[1]
    ring = 0.0
    for k in range(3):
        ring = max(ring, 1 - _step(s[2] / s[1] / 2, abs(place - k), 0.1))
    wave = s[0] + 1.5 * s[1] + 0.30 * s[1] * math.sin(9 * angle)
    ring = max(ring, 0.85 * (1 - _step(s[2] * 0.5, abs(y - wave), 0.0015)))
    dry = _step(0.22, noise(120 * x, 300 * y, 120 * z), 0.35)
    rise = 0.02 * (noise(50 * x, 50 * y, 50 * z) - 0.5)
    return ring * dry, 0.0, 0.90 + 0.14 * cloudy(20 * x, 20 * y, 20 * z), 0.0, rise, 0.0


@jit
def _planks(s: Any, x: float, y: float, z: float) -> Shade:
    """Boards along x (s[1] = 0), along z (1) or standing along y (2): s = (width, direction, seed)."""
    along, across = (x, z + y) if s[1] == 0 else ((z, x) if s[1] == 1 else (y, x + z))
    board = math.floor(across / s[0])
    inside = across / s[0] - board
    seam = 1 - _step(0.012, min(inside, 1 - inside), 0.012)
    shift = 13.7 * board + s[2]
    warp = 0.9 * noise(1.6 * along + shift, 9 * across, shift)
    rings = _wave(95 * across + 22 * warp + shift)
    pores = noise(9 * along + shift, 420 * across, shift)
    dark = 0.50 * rings * noise(3 * along, 40 * across + shift, 5.0) + 0.32 * _step(0.62, pores, 0.3)
    bright = 0.82 + 0.30 * noise(shift, 0.5, 0.5) + 0.12 * (cloudy(3 * x, 3 * y, 3 * z) - 0.5)
    return min(dark, 0.95), seam * min(1 - dark, 0.9), bright, 0.03 * (pores - 0.5), 0.0, 0.0


@jit
def _cloth(s: Any, x: float, y: float, z: float) -> Shade:
    """Woven cloth with stripes: s = (stripe spacing, stripe width, cross stripes, seed)."""
    flat = x + y
    warp, weft = math.sin(2600 * flat), math.sin(2600 * z)
    weave = 0.5 + 0.25 * (warp * weft) + 0.35 * (noise(700 * flat, 60 * z, s[3]) - 0.5)
    stripe = 0.0
    if s[0] > 0:
        near = abs(flat / s[0] - round(flat / s[0])) * s[0]
        stripe = 1 - _step(s[1] / 2, near, 0.003)
        if s[2] > 0:
            near = abs(z / s[0] - round(z / s[0])) * s[0]
            stripe = 1 - (1 - 0.7 * stripe) * (1 - 0.7 * (1 - _step(s[1] / 2, near, 0.003)))
    fold = cloudy(2.2 * x + s[3], 2 * y, 2.2 * z)
    across = 0.45 * (noise(4.5 * x + s[3], 3 * y, 3.5 * z) - 0.5) + 0.06 * warp
    along = 0.45 * (noise(4.1 * x, 3 * y + s[3], 4 * z) - 0.5) + 0.06 * weft
    return stripe, 0.0, 0.78 + 0.22 * weave + 0.12 * (fold - 0.5), across, 0.0, along


@jit
def _wall(s: Any, x: float, y: float, z: float) -> Shade:
    """Plaster above boarded panelling: s = (height of the panelling, board width, bumps, seed)."""
    along = x + z
    if y < s[0]:
        place = along / s[1]
        inside = abs(place - math.floor(place) - 0.5) * 2
        groove = _step(0.9, inside, 0.1)
        rail = _step(s[0] - 0.09, y, 0.004) + (1 - _step(0.14, y, 0.004))
        groove *= 1 - min(rail, 1.0)
        lip = 1 - _step(0.0, abs(y - (s[0] - 0.09)) - 0.006, 0.004)
        worn = 0.10 * cloudy(4 * along + s[3], 4 * y, 2.0) + 0.05 * noise(150 * along, 12 * y, s[3])
        line = max(0.45 * groove, 0.28 * lip)
        return 1 - line, line, 0.88 + worn, 0.0, 0.0, 0.0
    bump = s[2] * (noise(38 * x, 38 * y, 38 * z) - 0.5)
    rise = s[2] * (noise(41 * x + 5, 41 * y, 41 * z) - 0.5)
    stain = 0.10 * _step(0.62, cloudy(1.3 * along + s[3], 1.1 * y, 3.0), 0.3)
    return 0.0, stain, 0.92 + 0.14 * cloudy(7 * along, 7 * y, s[3]), bump, rise, 0.0


@jit
def _curtain(s: Any, x: float, y: float, z: float) -> Shade:
    """Hanging folds: s = (fold width, depth, seed)."""
    along = x + z
    phase = 2 * math.pi * along / s[0] + 2.6 * noise(1.5 * along + s[2], 0.35 * y, 1.0)
    tilt = s[1] * math.cos(phase)
    deep = 0.5 + 0.5 * math.sin(phase)
    nap = noise(300 * along, 18 * y, 4.0)
    return 0.45 * (1 - deep), 0.0, 0.45 + 0.55 * deep + 0.12 * (nap - 0.5), tilt, 0.0, tilt


@jit
def _card(s: Any, u: float, v: float) -> Shade:
    """Return the print of a folded lot card with two figures: s = (number, ...); u, v across the card."""
    number = int(s[0])
    ink = 0.0
    if 0.14 < u < 0.86 and 0.24 < v < 0.80:
        place = (u - 0.14) / 0.72 * 2
        which = int(place)
        column, row = int((place - which) * 4), 4 - int((v - 0.24) / 0.56 * 5)
        digit = number // 10 % 10 if which == 0 else number % 10
        if column < 3 and _GLYPHS[digit][row * 3 + column] == 1:
            ink = 0.93
    if 0.08 < u < 0.92 and 0.10 < v < 0.125:
        ink = 0.6
    return ink, 0.0, 1.0, 0.0, 0.0, 0.0


@jit
def _tiles(s: Any, x: float, y: float, z: float) -> Shade:
    """Glazed wall tiles: s = (width, height, joint, seed)."""
    row = math.floor(y / s[1])
    place = (x + z) / s[0] + 0.5 * (row % 2)
    across, up = place - math.floor(place), y / s[1] - row
    edge = min(min(across, 1 - across) * s[0], min(up, 1 - up) * s[1])
    joint = 1 - _step(s[2], edge, 0.0015)
    tone = noise(7.7 * math.floor(place) + s[3], 5.1 * row, 0.5)
    rise = 0.05 * (noise(9.1 * math.floor(place), 3.3 * row, 2.5) - 0.5)
    return 0.0, joint * 0.9, 0.90 + 0.12 * tone, 0.05 * (tone - 0.5), rise, 0.0


@jit
def surface(pattern: int, s: Any, p: Any, local: Any) -> Shade:
    """Return what a point looks like.

    `p` is the place in the room; `local` is (x, y, z, angle) from a pot's foot, or (u, v) on a panel.
    """
    if pattern == GLAZE:
        return _glaze(s, local[0], local[1], local[2], local[3])
    if pattern == BANDS:
        return _bands(s, local[0], local[1], local[2], local[3])
    if pattern == PLANKS:
        return _planks(s, p[0], p[1], p[2])
    if pattern == CLOTH:
        return _cloth(s, p[0], p[1], p[2])
    if pattern == WALL:
        return _wall(s, p[0], p[1], p[2])
    if pattern == CURTAIN:
        return _curtain(s, p[0], p[1], p[2])
    if pattern == CARD:
        return _card(s, local[0], local[1])
    if pattern == TILES:
        return _tiles(s, p[0], p[1], p[2])
    mottle = cloudy(30 * p[0] + s[3], 30 * p[1], 30 * p[2])
    rise = 0.10 * (noise(40 * p[0], 900 * p[1], 40 * p[2]) - 0.5) if pattern == BRUSHED else 0.0
    return 0.25 * mottle * s[0], 0.0, 0.88 + 0.20 * mottle, 0.0, rise, 0.0
