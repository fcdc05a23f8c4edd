"""The light transport: direct light, one bounce, glossy reflections, through a thin lens."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray
from patterns import surface
from tracer import (
    BANDS,
    EPS,
    NOTHING,
    PANEL,
    REVOLVED,
    STRATA,
    Camera,
    Geometry,
    Look,
    around,
    facing,
    jit,
    material_of,
    mix_bits,
    normal,
    pair,
    trace,
)

_FLAT = 1e-3
"""Mirror reflectances below this are not followed."""
_BRIGHTEST_BOUNCE, _BRIGHTEST_GLINT = 2.0, 120.0
"""Rarer and brighter contributions would only be specks."""


@jit
def _along(o: Any, t: float, d: Any) -> tuple[float, float, float]:
    return o[0] + t * d[0], o[1] + t * d[1], o[2] + t * d[2]


@jit
def _dot(a: Any, b: Any) -> float:
    return a[0] * b[0] + a[1] * b[1] + a[2] * b[2]


@jit
def _local(g: Any, kind: int, index: int, p: Any) -> tuple[float, float, float, float]:
    """Return the place on the object itself, as `surface` wants it."""
    if kind == REVOLVED:
        b = g.rev_base
        x, y, z = p[0] - b[index, 0], p[1] - b[index, 1], p[2] - b[index, 2]
        return x, y, z, math.atan2(z, x)
    if kind == PANEL:
        e = g.panels
        x, y, z = p[0] - e[index, 0, 0], p[1] - e[index, 0, 1], p[2] - e[index, 0, 2]
        ux, uy, uz = e[index, 1, 0], e[index, 1, 1], e[index, 1, 2]
        vx, vy, vz = e[index, 2, 0], e[index, 2, 1], e[index, 2, 2]
        u = (x * ux + y * uy + z * uz) / (ux * ux + uy * uy + uz * uz)
        v = (x * vx + y * vy + z * vz) / (vx * vx + vy * vy + vz * vz)
        return u, v, 0.0, 0.0
    return 0.0, 0.0, 0.0, 0.0


@jit
def _look_up(
    g: Any, look: Any, spectra: Any, hit: Any, p: Any, d: Any, colour: Any
) -> tuple[float, float, float]:
    """Write the reflectance at a hit; return the normal, texture included."""
    kind, index, part = hit
    m = material_of(g, kind, index)
    n = normal(g, kind, index, part, p, d)
    second, third, bright, x, y, z = surface(look.pattern[m], look.shape[m], p, _local(g, kind, index, p))
    first = 1 - second - third
    i, j, k = look.mix[m, 0], look.mix[m, 1], look.mix[m, 2]
    for band in range(BANDS):
        value = first * spectra[i, band] + second * spectra[j, band] + third * spectra[k, band]
        colour[band] = min(value * bright, 0.95)
    return facing((n[0] + x, n[1] + y, n[2] + z), d)


@jit
def _promise(g: Any, look: Any, which: int, p: Any, n: Any) -> float:
    """Return about how much one light would give at a point if nothing stood between."""
    kind, index = look.lights[which, 0], look.lights[which, 1]
    if kind == PANEL:
        weight, x, y, z = _toward_panel(g.panels, index, p, 0.5, 0.5)
        return look.glow[g.panel_material[index]] * weight * max(_dot(n, (x, y, z)), 0.02)
    s = g.spheres
    x, y, z = s[index, 0] - p[0], s[index, 1] - p[1], s[index, 2] - p[2]
    square = x * x + y * y + z * z
    cosine = max(_dot(n, (x, y, z)) / math.sqrt(square), 0.02)
    return look.glow[g.sphere_material[index]] * s[index, 3] ** 2 / square * cosine


@jit
def _choose(g: Any, look: Any, p: Any, n: Any, u: float) -> tuple[int, float, float]:
    """Draw a light by its promise; return it, its probability, and the number that is left of u."""
    total = 0.0
    for which in range(len(look.lights)):
        total += _promise(g, look, which, p, n)
    u *= total
    for which in range(len(look.lights)):
        part = _promise(g, look, which, p, n)
        if u < part or which == len(look.lights) - 1:
            return which, part / total, min(u / part, 1 - 1e-12)
        u -= part
    return 0, 1.0, u


@jit
def _toward_light(g: Any, look: Any, p: Any, n: Any, uv: Any) -> tuple[float, float, float, float]:
    """Return radiance times solid angle over probability, and a direction to a point on one light."""
    which, share, u = _choose(g, look, p, n, uv[0])
    v, index = uv[1], look.lights[which, 1]
    if look.lights[which, 0] == PANEL:
        weight, x, y, z = _toward_panel(g.panels, index, p, u, v)
        return weight * look.glow[g.panel_material[index]] / share, x, y, z
    s = g.spheres
    x, y, z = s[index, 0] - p[0], s[index, 1] - p[1], s[index, 2] - p[2]
    distance = math.sqrt(x * x + y * y + z * z)
    if distance <= s[index, 3] * 1.001:
        return 0.0, 0.0, 1.0, 0.0
    edge = math.sqrt(1 - (s[index, 3] / distance) ** 2)
    height = 1 - u * (1 - edge)
    x, y, z = around((x / distance, y / distance, z / distance), height * height, v, 1.0)
    return look.glow[g.sphere_material[index]] * 2 * math.pi * (1 - edge) / share, x, y, z


@jit
def _toward_panel(e: Any, i: int, p: Any, u: float, v: float) -> tuple[float, float, float, float]:
    """Return solid angle over probability and a direction to a point of a panel."""
    ax, ay, az = e[i, 1, 0], e[i, 1, 1], e[i, 1, 2]
    bx, by, bz = e[i, 2, 0], e[i, 2, 1], e[i, 2, 2]
    x = e[i, 0, 0] + u * ax + v * bx - p[0]
    y = e[i, 0, 1] + u * ay + v * by - p[1]
    z = e[i, 0, 2] + u * az + v * bz - p[2]
    square = x * x + y * y + z * z
    distance = math.sqrt(square)
    x, y, z = x / distance, y / distance, z / distance
    toward = -(x * e[i, 3, 0] + y * e[i, 3, 1] + z * e[i, 3, 2])
    area = math.sqrt((ay * bz - az * by) ** 2 + (az * bx - ax * bz) ** 2 + (ax * by - ay * bx) ** 2)
    return max(toward, 0.0) * area / square, x, y, z


@jit
def _direct(g: Any, look: Any, p: Any, n: Any, uv: Any) -> float:
    """Return the irradiance over pi that one sampled light gives at a point."""
    weight, x, y, z = _toward_light(g, look, p, n, uv)
    cosine = n[0] * x + n[1] * y + n[2] * z
    if weight <= 0 or cosine <= 0:
        return 0.0
    _, kind, index, _ = trace(g, _along(p, EPS, n), (x, y, z), 1e9)
    if look.glow[material_of(g, kind, index)] <= 0:
        return 0.0
    return weight * cosine / math.pi


@jit
def _glow(g: Any, look: Any, kind: int, index: int, d: Any) -> float:
    """Return the radiance of a hit seen along d; panels shine on their front only."""
    radiance = look.glow[material_of(g, kind, index)]
    if kind == PANEL and radiance > 0:
        e = g.panels
        if d[0] * e[index, 3, 0] + d[1] * e[index, 3, 1] + d[2] * e[index, 3, 2] > 0:
            return 0.0
    return radiance


@jit
def _far(g: Any, look: Any, spectra: Any, o: Any, d: Any, uv: Any, out: Any) -> float:
    """Write the light that comes along a secondary ray, its own glow left out; return that glow."""
    t, kind, index, part = trace(g, o, d, 1e9)
    glow = _glow(g, look, kind, index, d)
    if glow > 0 or kind == NOTHING:
        out[:] = 0.0
        return glow
    p = _along(o, t, d)
    n = _look_up(g, look, spectra, (kind, index, part), p, d, out)
    light = min(_direct(g, look, p, n, uv) + look.ambient, _BRIGHTEST_BOUNCE)
    for band in range(BANDS):
        out[band] *= light
    return 0.0


@jit
def _camera_ray(camera: Any, x: float, y: float, lens: Any) -> Any:
    radius, angle = camera.aperture * math.sqrt(lens[0]), 2 * math.pi * lens[1]
    lx, ly = radius * math.cos(angle), radius * math.sin(angle)
    right, up, forward, start = camera.right, camera.up, camera.forward, camera.position
    px, py = camera.focus * x - lx, camera.focus * y - ly
    dx = camera.focus * forward[0] + px * right[0] + py * up[0]
    dy = camera.focus * forward[1] + px * right[1] + py * up[1]
    dz = camera.focus * forward[2] + px * right[2] + py * up[2]
    length = math.sqrt(dx * dx + dy * dy + dz * dz)
    o = (
        start[0] + lx * right[0] + ly * up[0],
        start[1] + lx * right[1] + ly * up[1],
        start[2] + lx * right[2] + ly * up[2],
    )
    return o, (dx / length, dy / length, dz / length)


@jit
def _path(g: Any, look: Any, spectra: Any, ray: Any, draw: Any, scratch: Any, out: Any) -> None:
    """Add the light that arrives along one camera ray."""
    (o, d), (pixel, sample) = ray, draw
    colour, far = scratch
    t, kind, index, part = trace(g, o, d, 1e9)
    glow = _glow(g, look, kind, index, d)
    if glow > 0 or kind == NOTHING:
        out += glow
        return
    p = _along(o, t, d)
    n = _look_up(g, look, spectra, (kind, index, part), p, d, colour)
    direct = _direct(g, look, p, n, pair(pixel, sample, 2))
    start = _along(p, EPS, n)
    u, v = pair(pixel, sample, 3)
    _far(g, look, spectra, start, around(n, u, v, 1.0), pair(pixel, sample, 4), far)
    m = material_of(g, kind, index)
    mirror, rough = look.gloss[m, 0], look.gloss[m, 1]
    for band in range(BANDS):
        out[band] += (1 - mirror) * colour[band] * (direct + far[band])
    if mirror <= _FLAT:
        return
    cosine = -_dot(n, d)
    fresnel = mirror + (1 - mirror) * (1 - cosine) ** 5 * (1 - rough)
    u, v = pair(pixel, sample, 5)
    way = around(_along(d, 2 * cosine, n), max(u, 1e-9), v, 2.0 / max(rough * rough, 1e-6))
    if _dot(way, n) <= 0:
        return
    glow = _far(g, look, spectra, start, way, pair(pixel, sample, 6), far)
    for band in range(BANDS):
        out[band] += fresnel * (far[band] + min(glow, _BRIGHTEST_GLINT))


@jit
def _render(g: Any, look: Any, spectra: Any, camera: Any, frame: Any, scratch: Any, picture: Any) -> None:
    width, height, left, top, seed = frame
    count = STRATA * STRATA
    for row in range(top, top + picture.shape[0]):
        for column in range(left, left + picture.shape[1]):
            pixel = mix_bits(np.uint64(seed * 1000003 + row * width + column))
            out = picture[row - top, column - left]
            x = y = 0.0
            for sample in range(count):
                u, v = pair(pixel, sample, 0)
                x = ((column + u) / width * 2 - 1) * camera.half_width
                y = (1 - (row + v) / height * 2) * camera.half_width * height / width
                ray = _camera_ray(camera, x, y, pair(pixel, sample, 1))
                _path(g, look, spectra, ray, (pixel, sample), scratch, out)
            out /= count * (1 + x * x + y * y)


def render(
    geometry: Geometry,
    look: Look,
    spectra: NDArray[np.float64],
    camera: Camera,
    size_px: tuple[int, int],
    *,
    window: tuple[int, int, int, int] | None = None,
    seed: int = 0,
) -> NDArray[np.float64]:
    """Return (h, w, 31) radiance for an equal-energy light.

    ``size_px`` is (width, height); ``window`` is (left, top, right, bottom) in pixels, default all.
    """
    left, top, right, bottom = window or (0, 0, *size_px)
    picture = np.zeros((bottom - top, right - left, BANDS))
    scratch = (np.zeros(BANDS), np.zeros(BANDS))
    _render(geometry, look, spectra, camera, (*size_px, left, top, seed), scratch, picture)
    return picture
