"""Shapes of pots: profiles of solids of revolution, walls and rims included."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

# (radius, height) of the outside from foot to rim, for a pot of height 1.
OUTLINES: dict[str, tuple[tuple[float, float], ...]] = {
    "bottle": ((0.17, 0), (0.27, 0.12), (0.29, 0.32), (0.17, 0.55), (0.075, 0.72), (0.07, 0.9), (0.11, 1)),
    "vase": ((0.20, 0), (0.25, 0.1), (0.38, 0.42), (0.34, 0.66), (0.17, 0.84), (0.15, 0.92), (0.22, 1)),
    "jar": ((0.28, 0), (0.38, 0.15), (0.49, 0.45), (0.46, 0.72), (0.30, 0.9), (0.29, 0.95), (0.33, 1)),
    "moon jar": ((0.26, 0), (0.42, 0.2), (0.54, 0.5), (0.44, 0.82), (0.26, 0.95), (0.26, 1)),
    "bowl": ((0.42, 0), (0.42, 0.10), (0.72, 0.28), (1.05, 0.62), (1.18, 1)),
    "tea bowl": ((0.32, 0), (0.33, 0.07), (0.52, 0.18), (0.60, 0.5), (0.60, 0.85), (0.62, 1)),
    "dish": ((1.1, 0), (1.12, 0.2), (2.0, 0.45), (2.9, 0.8), (3.3, 1)),
    "beaker": ((0.27, 0), (0.31, 0.06), (0.33, 0.4), (0.36, 0.8), (0.39, 1)),
    "jug": ((0.26, 0), (0.34, 0.14), (0.38, 0.36), (0.28, 0.66), (0.22, 0.82), (0.26, 1)),
    "tall": ((0.14, 0), (0.15, 0.1), (0.18, 0.45), (0.21, 0.75), (0.16, 0.9), (0.14, 0.95), (0.19, 1)),
    "gourd": (
        (0.22, 0),
        (0.34, 0.15),
        (0.36, 0.3),
        (0.19, 0.5),
        (0.24, 0.66),
        (0.22, 0.78),
        (0.09, 0.92),
        (0.11, 1),
    ),
    "shade": ((0.95, 0), (0.80, 0.25), (0.42, 0.6), (0.16, 0.85), (0.12, 1)),
    "plinth": ((0.24, 0), (0.24, 0.04), (0.205, 0.08), (0.19, 0.5), (0.205, 0.92), (0.25, 0.96), (0.25, 1)),
}
OPEN_KINDS = ("bowl", "tea bowl", "dish")
"""Glazed inside and out."""
HANDLED = {"jug": 1, "beaker": 1, "gourd": 2}


def _smooth(points: Array, steps: int) -> Array:
    """Return a centripetal Catmull-Rom curve through the points."""
    padded = np.vstack([2 * points[0] - points[1], points, 2 * points[-1] - points[-2]])
    out = []
    for p in np.lib.stride_tricks.sliding_window_view(padded, 4, axis=0).transpose(0, 2, 1):
        knots = np.concatenate([[0], np.cumsum(np.sqrt(np.linalg.norm(np.diff(p, axis=0), axis=1)))])
        t = np.linspace(knots[1], knots[2], steps, endpoint=False)[:, None]
        level = p
        for order in range(1, 4):
            level_next = []
            for i in range(4 - order):
                span = knots[i + order] - knots[i]
                left, right = (level[i], level[i + 1])
                level_next.append((knots[i + order] - t) / span * left + (t - knots[i]) / span * right)
            level = level_next
        out.append(level[0])
    return np.vstack([*out, points[-1:]])


def _chain(points: Array, *, smooth: bool) -> Array:
    """Return (n, 8) segments with normals to the left of the path."""
    step = np.diff(points, axis=0)
    flat = np.stack([step[:, 1], -step[:, 0]], axis=1)
    flat /= np.linalg.norm(flat, axis=1, keepdims=True)
    if not smooth:
        return np.hstack([points[:-1], points[1:], flat, flat])
    at = np.vstack([flat[:1], flat[:-1] + flat[1:], flat[-1:]])
    at /= np.linalg.norm(at, axis=1, keepdims=True)
    return np.hstack([points[:-1], points[1:], at[:-1], at[1:]])


def revolve(
    kind: str, height: float, *, girth: float = 1.0, wall: float = 0.004, hollow: bool = True
) -> Array:
    """Return (n, 8) segments of a pot: foot, outside, round rim, inside, bottom; lengths in metres."""
    outline = np.array(OUTLINES[kind]) * [height * girth, height]
    outside = _smooth(outline, 4)
    foot = np.array([[1e-6, 0.0], outside[0]])
    if not hollow:
        lid = np.array([outside[-1], [1e-6, outside[-1, 1]]])
        return np.vstack(
            [_chain(foot, smooth=False), _chain(outside, smooth=True), _chain(lid, smooth=False)]
        )
    tip, angles = outside[-1] - [wall / 2, 0], np.linspace(0, np.pi, 5)
    rim = tip + wall / 2 * np.stack([np.cos(angles), np.sin(angles)], axis=1)
    inside = (outside - [wall, 0])[::-1]
    inside = inside[(inside[:, 1] > 1.5 * wall) & (inside[:, 0] > 1e-3)]
    floor = np.array([inside[-1], [1e-6, inside[-1, 1]]])
    parts = [(foot, False), (outside, True), (rim, True), (inside, True), (floor, False)]
    return np.vstack([_chain(points, smooth=smooth) for points, smooth in parts])


def handle(
    kind: str, height: float, girth: float, turn: float, *, side: int = 0
) -> list[tuple[Array, Array, float]]:
    """Return rods (a, b, radius) of a handle, relative to the pot's foot."""
    outline = np.array(OUTLINES[kind]) * [height * girth, height]
    low, high = (0.25, 0.78) if kind != "gourd" else (0.52, 0.82)
    y = np.array([low, high]) * height
    r = np.interp(y, outline[:, 1], outline[:, 0]) - 0.002
    t = np.linspace(0, np.pi, 11)
    bulge = 0.22 * height if kind != "gourd" else 0.09 * height
    radius = np.interp(t, [0, np.pi], r) + bulge * np.sin(t) ** 0.8
    up = (y[0] + y[1]) / 2 - (y[1] - y[0]) / 2 * np.cos(t) + 0.05 * height * np.sin(t)
    angle = turn + np.pi * side
    points = np.stack([radius * np.cos(angle), up, radius * np.sin(angle)], axis=1)
    thick = 0.028 * height + 0.001
    return [(a, b, thick) for a, b in pairwise(points)]
