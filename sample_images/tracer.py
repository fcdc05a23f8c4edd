"""A small path tracer for still lifes: solids of revolution, boxes, panels, spheres and rods in a room.

Works in 31 spectral bands with one spectrum of light per picture, which is multiplied in afterwards.  Every
pixel draws its own random numbers from its place alone, so a window of a picture equals the same window of
the whole.  Lengths are in metres, y points up.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numba
import numpy as np
from numpy.typing import NDArray

BANDS = 31
STRATA = 5
"""Samples per pixel and dimension pair are STRATA squared; a prime."""
NOTHING, REVOLVED, BOX, PANEL, SPHERE, ROD, ROOM = -1, 0, 1, 2, 3, 4, 5
EPS = 1e-4

jit = numba.njit(cache=True, error_model="numpy", _nrt=False)
"""Without reference counts (nothing in here allocates): they would take half of the time."""


class Geometry(NamedTuple):
    """Flat arrays of everything in a scene; see `village_hall.Builder` for how they are filled."""

    rev_base: NDArray[np.float64]  # (n, 3)
    rev_bound: NDArray[np.float64]  # (n, 3) radius, bottom, top
    rev_first: NDArray[np.int64]  # (n + 1,)
    segments: NDArray[np.float64]  # (m, 8) r0 y0 r1 y1, normals nr0 ny0 nr1 ny1
    box_low: NDArray[np.float64]
    box_high: NDArray[np.float64]
    panels: NDArray[np.float64]  # (n, 4, 3) origin, u, v, normal
    spheres: NDArray[np.float64]  # (n, 4)
    rods: NDArray[np.float64]  # (n, 7) a, b, radius
    rod_bound: NDArray[np.float64]  # (groups, 4) centre, radius
    rod_first: NDArray[np.int64]  # (groups + 1,)
    room: NDArray[np.float64]  # (2, 3)
    rev_material: NDArray[np.int64]
    box_material: NDArray[np.int64]
    panel_material: NDArray[np.int64]
    sphere_material: NDArray[np.int64]
    rod_material: NDArray[np.int64]
    room_material: NDArray[np.int64]  # (6,) -x +x floor ceiling -z +z


class Look(NamedTuple):
    """Materials and lights of a scene."""

    pattern: NDArray[np.int64]  # (k,)
    mix: NDArray[np.int64]  # (k, 3) surfaces
    shape: NDArray[np.float64]  # (k, 4) pattern parameters
    gloss: NDArray[np.float64]  # (k, 2) reflectance at normal incidence, roughness
    glow: NDArray[np.float64]  # (k,) radiance
    lights: NDArray[np.int64]  # (n, 2) kind, index
    ambient: float


class Camera(NamedTuple):
    """A thin lens."""

    position: NDArray[np.float64]
    right: NDArray[np.float64]
    up: NDArray[np.float64]
    forward: NDArray[np.float64]
    half_width: float
    aperture: float
    focus: float


# --- random numbers and noise -----------------------------------------------------------------------


@jit
def mix_bits(x: np.uint64) -> np.uint64:
    """Scramble 64 bits (the finaliser of splitmix64: Steele, Lea & Flood 2014)."""
    x = np.uint64(x) + np.uint64(0x9E3779B97F4A7C15)
    x = (x ^ (x >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    x = (x ^ (x >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return x ^ (x >> np.uint64(31))


@jit
def _unit(x: np.uint64) -> float:
    return float(x >> np.uint64(11)) * (1.0 / 9007199254740992.0)


@jit
def pair(pixel: np.uint64, sample: int, dimension: int) -> tuple[float, float]:
    """Return sample number `sample` of a jittered, shuffled stratified square."""
    cells = STRATA * STRATA
    key = mix_bits(pixel * np.uint64(64) + np.uint64(dimension))
    step = 1 + int(key % np.uint64(STRATA - 1)) + STRATA * int((key >> np.uint64(20)) % np.uint64(STRATA))
    cell = (step * sample + int((key >> np.uint64(32)) % np.uint64(cells))) % cells
    jitter = mix_bits(key + np.uint64(sample + 1))
    other = mix_bits(jitter)
    return (cell % STRATA + _unit(jitter)) / STRATA, (cell // STRATA + _unit(other)) / STRATA


@jit
def _lattice(x: int, y: int, z: int) -> float:
    return _unit(mix_bits(np.uint64((x * 73856093) ^ (y * 19349663) ^ (z * 83492791))))


@jit
def noise(x: float, y: float, z: float) -> float:
    """Return smooth value noise, 0 to 1."""
    i, j, k = math.floor(x), math.floor(y), math.floor(z)
    u, v, w = x - i, y - j, z - k
    u, v, w = u * u * (3 - 2 * u), v * v * (3 - 2 * v), w * w * (3 - 2 * w)
    i, j, k = int(i), int(j), int(k)
    out = 0.0
    for dx in range(2):
        for dy in range(2):
            for dz in range(2):
                weight = (u if dx else 1 - u) * (v if dy else 1 - v) * (w if dz else 1 - w)
                out += weight * _lattice(i + dx, j + dy, k + dz)
    return out


@jit
def cloudy(x: float, y: float, z: float) -> float:
    """Return three octaves of noise, 0 to 1."""
    return (4 * noise(x, y, z) + 2 * noise(2 * x + 7.3, 2 * y, 2 * z) + noise(4 * x, 4 * y + 3.1, 4 * z)) / 7


# --- intersections ----------------------------------------------------------------------------------


@jit
def _inside_cylinder(bound: Any, i: int, o: Any, d: Any, limit: float) -> tuple[float, float]:
    """Return where a ray enters and leaves the cylinder around a solid; o is relative to its foot."""
    a, b, c = d[0] * d[0] + d[2] * d[2], o[0] * d[0] + o[2] * d[2], o[0] * o[0] + o[2] * o[2]
    enter, leave, square = 0.0, limit, bound[i, 0] * bound[i, 0]
    if a > 1e-14:
        disc = b * b - a * (c - square)
        if disc <= 0:
            return 1.0, 0.0
        root = math.sqrt(disc)
        enter, leave = max(enter, (-b - root) / a), min(leave, (-b + root) / a)
    elif c > square:
        return 1.0, 0.0
    if abs(d[1]) > 1e-12:
        t0, t1 = (bound[i, 1] - o[1]) / d[1], (bound[i, 2] - o[1]) / d[1]
        enter, leave = max(enter, min(t0, t1) - EPS), min(leave, max(t0, t1) + EPS)
    return enter, leave


@jit
def _hit_ring(r0: float, r1: float, y: float, o: Any, d: Any, nearest: float) -> float:
    """Meet a flat ring."""
    if abs(d[1]) < 1e-12:
        return nearest
    t = (y - o[1]) / d[1]
    x, z = o[0] + t * d[0], o[2] + t * d[2]
    within = min(r0, r1) ** 2 <= x * x + z * z <= max(r0, r1) ** 2
    return t if within and EPS < t < nearest else nearest


@jit
def _hit_cone(segment: Any, o: Any, d: Any, nearest: float) -> float:
    """Meet a piece of a cone."""
    r0, y0, r1, y1 = segment
    slope = (r1 - r0) / (y1 - y0)
    q = r0 + slope * (o[1] - y0)
    a = d[0] * d[0] + d[2] * d[2] - slope * slope * d[1] * d[1]
    b = o[0] * d[0] + o[2] * d[2] - slope * d[1] * q
    disc = b * b - a * (o[0] * o[0] + o[2] * o[2] - q * q)
    if disc < 0 or abs(a) < 1e-14:
        return nearest
    root = math.sqrt(disc)
    for sign in (-1.0, 1.0):
        t = (-b + sign * root) / a
        y = o[1] + t * d[1]
        if EPS < t < nearest and min(y0, y1) <= y <= max(y0, y1) and r0 + slope * (y - y0) >= 0:
            nearest = t
    return nearest


@jit
def _hit_revolved(g: Any, i: int, origin: Any, d: Any, nearest: float) -> tuple[float, int]:
    """Return the distance and segment where a ray meets a solid of revolution."""
    base, s = g.rev_base, g.segments
    o = (origin[0] - base[i, 0], origin[1] - base[i, 1], origin[2] - base[i, 2])
    enter, leave = _inside_cylinder(g.rev_bound, i, o, d, nearest)
    if enter > leave:
        return nearest, -1
    y_in, y_out = o[1] + enter * d[1], o[1] + leave * d[1]
    low, high = min(y_in, y_out) - EPS, max(y_in, y_out) + EPS
    found = -1
    for k in range(g.rev_first[i], g.rev_first[i + 1]):
        r0, y0, r1, y1 = s[k, 0], s[k, 1], s[k, 2], s[k, 3]
        if max(y0, y1) < low or min(y0, y1) > high:
            continue
        flat = abs(y1 - y0) < 1e-9
        t = _hit_ring(r0, r1, y0, o, d, nearest) if flat else _hit_cone((r0, y0, r1, y1), o, d, nearest)
        if t < nearest:
            nearest, found = t, k
    return nearest, found


@jit
def _hit_box(low: Any, high: Any, i: int, o: Any, d: Any, nearest: float) -> float:
    enter, leave = EPS, nearest
    for k in range(3):
        if abs(d[k]) < 1e-12:
            if o[k] < low[i, k] or o[k] > high[i, k]:
                return nearest
            continue
        t0, t1 = (low[i, k] - o[k]) / d[k], (high[i, k] - o[k]) / d[k]
        enter, leave = max(enter, min(t0, t1)), min(leave, max(t0, t1))
        if enter >= leave:
            return nearest
    return enter if enter > EPS else nearest


@jit
def _hit_panel(p: Any, i: int, o: Any, d: Any, nearest: float) -> float:
    facing = d[0] * p[i, 3, 0] + d[1] * p[i, 3, 1] + d[2] * p[i, 3, 2]
    if abs(facing) < 1e-12:
        return nearest
    ax, ay, az = p[i, 0, 0] - o[0], p[i, 0, 1] - o[1], p[i, 0, 2] - o[2]
    t = (ax * p[i, 3, 0] + ay * p[i, 3, 1] + az * p[i, 3, 2]) / facing
    if t <= EPS or t >= nearest:
        return nearest
    x, y, z = t * d[0] - ax, t * d[1] - ay, t * d[2] - az
    for k in (1, 2):
        reach = x * p[i, k, 0] + y * p[i, k, 1] + z * p[i, k, 2]
        if reach < 0 or reach > p[i, k, 0] ** 2 + p[i, k, 1] ** 2 + p[i, k, 2] ** 2:
            return nearest
    return t


@jit
def _hit_sphere(x: float, y: float, z: float, r: float, o: Any, d: Any, nearest: float) -> float:
    ox, oy, oz = o[0] - x, o[1] - y, o[2] - z
    b = ox * d[0] + oy * d[1] + oz * d[2]
    disc = b * b - (ox * ox + oy * oy + oz * oz - r * r)
    if disc < 0:
        return nearest
    root = math.sqrt(disc)
    t = -b - root
    if t <= EPS:
        t = -b + root
    return t if EPS < t < nearest else nearest


@jit
def _hit_rod(rods: Any, i: int, o: Any, d: Any, nearest: float) -> float:
    """Cylinder with round ends."""
    ax, ay, az, r = rods[i, 0], rods[i, 1], rods[i, 2], rods[i, 6]
    bx, by, bz = rods[i, 3] - ax, rods[i, 4] - ay, rods[i, 5] - az
    ox, oy, oz = o[0] - ax, o[1] - ay, o[2] - az
    bb, bd, bo = bx * bx + by * by + bz * bz, bx * d[0] + by * d[1] + bz * d[2], bx * ox + by * oy + bz * oz
    od, oo = ox * d[0] + oy * d[1] + oz * d[2], ox * ox + oy * oy + oz * oz
    a, b, c = bb - bd * bd, bb * od - bo * bd, bb * oo - bo * bo - r * r * bb
    disc = b * b - a * c
    if disc < 0:
        return nearest
    if a > 1e-14:
        t = (-b - math.sqrt(disc)) / a
        along = bo + t * bd
        if 0 < along < bb and EPS < t < nearest:
            return t
    nearest = _hit_sphere(ax, ay, az, r, o, d, nearest)
    return _hit_sphere(rods[i, 3], rods[i, 4], rods[i, 5], r, o, d, nearest)


@jit
def trace(g: Any, o: Any, d: Any, limit: float) -> tuple[float, int, int, int]:  # noqa: C901 - one loop a kind
    """Return distance, kind, object and part of the nearest hit."""
    best, kind, index, part = limit, NOTHING, -1, 0
    for k in range(3):
        if abs(d[k]) > 1e-12:
            side = 1 if d[k] > 0 else 0
            t = (g.room[side, k] - o[k]) / d[k]
            if EPS < t < best:
                best, kind, index = t, ROOM, 2 * k + side
    for i in range(g.box_low.shape[0]):
        t = _hit_box(g.box_low, g.box_high, i, o, d, best)
        if t < best:
            best, kind, index = t, BOX, i
    for i in range(g.panels.shape[0]):
        t = _hit_panel(g.panels, i, o, d, best)
        if t < best:
            best, kind, index = t, PANEL, i
    for i in range(g.spheres.shape[0]):
        t = _hit_sphere(g.spheres[i, 0], g.spheres[i, 1], g.spheres[i, 2], g.spheres[i, 3], o, d, best)
        if t < best:
            best, kind, index = t, SPHERE, i
    for i in range(g.rev_base.shape[0]):
        t, s = _hit_revolved(g, i, o, d, best)
        if s >= 0:
            best, kind, index, part = t, REVOLVED, i, s
    b = g.rod_bound
    for group in range(b.shape[0]):
        if _hit_sphere(b[group, 0], b[group, 1], b[group, 2], b[group, 3], o, d, 1e9) >= 1e9:
            continue
        for i in range(g.rod_first[group], g.rod_first[group + 1]):
            t = _hit_rod(g.rods, i, o, d, best)
            if t < best:
                best, kind, index = t, ROD, i
    return best, kind, index, part


@jit
def material_of(g: Any, kind: int, index: int) -> int:
    """Return the number of the material of an object."""
    if kind == REVOLVED:
        return g.rev_material[index]
    if kind == BOX:
        return g.box_material[index]
    if kind == PANEL:
        return g.panel_material[index]
    if kind == SPHERE:
        return g.sphere_material[index]
    return g.rod_material[index] if kind == ROD else g.room_material[index]


@jit
def normal(g: Any, kind: int, index: int, part: int, p: Any, d: Any) -> tuple[float, float, float]:
    """Return the unit normal at a hit, facing the ray."""
    if kind == REVOLVED:
        x, y, z = p[0] - g.rev_base[index, 0], p[1] - g.rev_base[index, 1], p[2] - g.rev_base[index, 2]
        return facing(_normal_revolved(g.segments, part, x, y, z), d)
    if kind == BOX:
        return facing(_normal_box(g, index, p), d)
    if kind == PANEL:
        return facing((g.panels[index, 3, 0], g.panels[index, 3, 1], g.panels[index, 3, 2]), d)
    if kind == SPHERE:
        return facing((p[0] - g.spheres[index, 0], p[1] - g.spheres[index, 1], p[2] - g.spheres[index, 2]), d)
    if kind == ROD:
        return facing(_normal_rod(g.rods, index, p), d)
    return facing(_axis(index // 2), d)


@jit
def _axis(k: int) -> tuple[float, float, float]:
    return (1.0 if k == 0 else 0.0), (1.0 if k == 1 else 0.0), (1.0 if k == 2 else 0.0)


@jit
def _normal_revolved(s: Any, i: int, x: float, y: float, z: float) -> tuple[float, float, float]:
    r = max(math.sqrt(x * x + z * z), 1e-9)
    run, rise = s[i, 2] - s[i, 0], s[i, 3] - s[i, 1]
    f = ((r - s[i, 0]) * run + (y - s[i, 1]) * rise) / (run * run + rise * rise)
    f = min(max(f, 0.0), 1.0)
    outward, upward = s[i, 4] + f * (s[i, 6] - s[i, 4]), s[i, 5] + f * (s[i, 7] - s[i, 5])
    return outward * x / r, upward, outward * z / r


@jit
def _normal_box(g: Any, index: int, p: Any) -> tuple[float, float, float]:
    worst, axis = 1e9, 0
    for k in range(3):
        off = min(abs(p[k] - g.box_high[index, k]), abs(p[k] - g.box_low[index, k]))
        if off < worst:
            worst, axis = off, k
    return _axis(axis)


@jit
def _normal_rod(rods: Any, i: int, p: Any) -> tuple[float, float, float]:
    bx, by, bz = rods[i, 3] - rods[i, 0], rods[i, 4] - rods[i, 1], rods[i, 5] - rods[i, 2]
    x, y, z = p[0] - rods[i, 0], p[1] - rods[i, 1], p[2] - rods[i, 2]
    f = min(max((x * bx + y * by + z * bz) / (bx * bx + by * by + bz * bz), 0.0), 1.0)
    return x - f * bx, y - f * by, z - f * bz


@jit
def facing(n: Any, d: Any) -> tuple[float, float, float]:
    """Return n normalised and turned against d."""
    length = math.sqrt(n[0] * n[0] + n[1] * n[1] + n[2] * n[2])
    if n[0] * d[0] + n[1] * d[1] + n[2] * d[2] > 0:
        length = -length
    return n[0] / length, n[1] / length, n[2] / length


@jit
def around(n: Any, u: float, v: float, power: float) -> tuple[float, float, float]:
    """Return a direction around n, density as cosine to the power (1 = diffuse, more = narrow)."""
    height = u ** (1.0 / (power + 1.0))
    radius, angle = math.sqrt(max(1 - height * height, 0.0)), 2 * math.pi * v
    tx, ty, tz = (0.0, n[2], -n[1]) if abs(n[0]) < 0.7 else (-n[2], 0.0, n[0])
    length = math.sqrt(tx * tx + ty * ty + tz * tz)
    tx, ty, tz = tx / length, ty / length, tz / length
    bx, by, bz = n[1] * tz - n[2] * ty, n[2] * tx - n[0] * tz, n[0] * ty - n[1] * tx
    x, y = radius * math.cos(angle), radius * math.sin(angle)
    return (
        x * tx + y * bx + height * n[0],
        x * ty + y * by + height * n[1],
        x * tz + y * bz + height * n[2],
    )
