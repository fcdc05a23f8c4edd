"""The invented evening: a pottery auction in a village hall, its five places and their pictures.

`scene(name)` builds one still life; `SHOTS` in make_samples.py says when which body took it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
import patterns as pt
from numpy.typing import NDArray
from pottery import HANDLED, OPEN_KINDS, handle, revolve
from spectra import SURFACES
from tracer import PANEL, SPHERE, Camera, Geometry, Look

Array = NDArray[np.float64]
Point = tuple[float, float, float]

GLAZES: dict[str, tuple[str, str, str]] = {
    "white": ("white glaze", "buff clay", "dark clay"),
    "cream": ("cream glaze", "terracotta", "ochre"),
    "celadon": ("celadon", "buff clay", "copper green"),
    "cobalt": ("cobalt", "buff clay", "turquoise"),
    "tenmoku": ("tenmoku", "dark clay", "oxblood"),
    "oxblood": ("oxblood", "buff clay", "tenmoku"),
    "ochre": ("ochre", "dark clay", "dark clay"),
    "copper": ("copper green", "terracotta", "tenmoku"),
    "turquoise": ("turquoise", "buff clay", "cobalt"),
    "rose": ("rose glaze", "buff clay", "oxblood"),
    "grey": ("old plaster", "dark clay", "dark clay"),
}
PAINTED: dict[str, tuple[str, str]] = {
    "blue on white": ("white glaze", "cobalt"),
    "iron on cream": ("cream glaze", "dark clay"),
    "slip on red": ("terracotta", "cream glaze"),
    "green on buff": ("buff clay", "copper green"),
}


@dataclass
class Builder:
    """Collects a scene."""

    room: tuple[Point, Point]
    materials: list[tuple[int, tuple[int, ...], tuple[float, ...], tuple[float, float], float]] = field(
        default_factory=list
    )
    revolved: list[tuple[Point, Array, int]] = field(default_factory=list)
    boxes: list[tuple[Point, Point, int]] = field(default_factory=list)
    panels: list[tuple[Point, Point, Point, int]] = field(default_factory=list)
    spheres: list[tuple[Point, float, int]] = field(default_factory=list)
    rods: list[list[tuple[Point, Point, float, int]]] = field(default_factory=list)
    """Groups that lie close together."""
    walls: list[int] = field(default_factory=lambda: [0] * 6)
    lights: list[tuple[int, int]] = field(default_factory=list)
    ambient: float = 0.05

    def material(
        self,
        pattern: int,
        *names: str,
        shape: tuple[float, ...] = (),
        gloss: tuple[float, float] = (0.0, 0.5),
        glow: float = 0.0,
    ) -> int:
        """Add a material of up to three surfaces and return its number."""
        chosen = (*names, *(names[-1:] * 3))[:3]
        padded = (*shape, 0.0, 0.0, 0.0, 0.0)[:4]
        self.materials.append((pattern, tuple(SURFACES.index(n) for n in chosen), padded, gloss, glow))
        return len(self.materials) - 1

    def lamp_panel(self, origin: Point, u: Point, v: Point, glow: float) -> None:
        """Add a shining panel; it shines towards u x v."""
        self.panels.append((origin, u, v, self.material(pt.PLAIN, "card", glow=glow)))
        self.lights.append((PANEL, len(self.panels) - 1))

    def lamp_bulb(self, centre: Point, radius: float, glow: float) -> None:
        """Add a shining sphere."""
        self.spheres.append((centre, radius, self.material(pt.PLAIN, "card", glow=glow)))
        self.lights.append((SPHERE, len(self.spheres) - 1))

    def glaze(self, name: str, height: float, seed: float, *, bare_foot: bool = True) -> int:
        """Add a poured or painted glaze for a pot of a height."""
        if name in PAINTED:
            shape = (0.52 * height, 0.11 * height, 0.028 * height, seed)
            return self.material(pt.BANDS, *PAINTED[name], shape=shape, gloss=(0.045, 0.06))
        speckle = 0.8 if name in ("white", "grey", "cream") else 0.35
        drip = (0.10 + 0.10 * (seed % 1)) * height if bare_foot else -1.0
        shape = (drip, speckle, 0.05 if seed % 2 < 1 else 0.02, seed)
        return self.material(pt.GLAZE, *GLAZES[name], shape=shape, gloss=(0.045, 0.05))

    def pot(
        self,
        kind: str,
        at: Point,
        height: float,
        glaze: str,
        *,
        girth: float = 1.0,
        seed: float = 0.3,
        turn: float = 0.4,
    ) -> None:
        """Stand a pot somewhere."""
        material = self.glaze(glaze, height, seed, bare_foot=kind not in OPEN_KINDS)
        self.revolved.append((at, revolve(kind, height, girth=girth, wall=0.004 + 0.006 * height), material))
        for side in range(HANDLED.get(kind, 0)):
            glazed = self.glaze(glaze, height, seed, bare_foot=False)
            pieces = handle(kind, height, girth, turn, side=side)
            self.rods.append([(_plus(at, a), _plus(at, b), radius, glazed) for a, b, radius in pieces])

    def card(self, at: Point, number: int, *, turn: float = 0.0, size: float = 0.07) -> None:
        """Stand a folded lot card."""
        front = self.material(pt.CARD, "card", "ink", shape=(float(number),))
        cos, sin = math.cos(turn), math.sin(turn)
        width = (size * 0.8 * cos, 0.0, -size * 0.8 * sin)
        for lean in (0.32, -0.32):
            rise = (-size * lean * sin, size * 0.9, -size * lean * cos)
            foot = (at[0] + size * lean * sin, at[1] + 0.001, at[2] + size * lean * cos)
            self.panels.append((foot, width, rise, front))

    def table(
        self, low: tuple[float, float], high: tuple[float, float], top: float, material: int, legs: int
    ) -> None:
        """Add a table top and four legs; (x, z) corners."""
        self.boxes.append(((low[0], top - 0.04, low[1]), (high[0], top, high[1]), material))
        for x in (low[0] + 0.04, high[0] - 0.10):
            for z in (low[1] + 0.04, high[1] - 0.10):
                self.boxes.append(((x, 0.0, z), (x + 0.06, top - 0.04, z + 0.06), legs))

    def build(self) -> tuple[Geometry, Look]:
        """Return the flat arrays that the tracer walks."""
        segments = [s for _, s, _ in self.revolved]
        counts = np.cumsum([0, *(len(s) for s in segments)])
        bounds = [(s[:, [0, 2]].max() + 1e-6, s[:, [1, 3]].min(), s[:, [1, 3]].max()) for s in segments]
        rods = [rod for group in self.rods for rod in group]
        geometry = Geometry(
            rev_base=_floats([p for p, _, _ in self.revolved], 3),
            rev_bound=_floats(bounds, 3),
            rev_first=counts.astype(np.int64),
            segments=np.vstack(segments) if segments else np.zeros((0, 8)),
            box_low=_floats([low for low, _, _ in self.boxes], 3),
            box_high=_floats([high for _, high, _ in self.boxes], 3),
            panels=np.array([_panel(*p[:3]) for p in self.panels]).reshape(-1, 4, 3),
            spheres=_floats([(*c, r) for c, r, _ in self.spheres], 4),
            rods=_floats([(*a, *b, r) for a, b, r, _ in rods], 7),
            rod_bound=_floats([_around(group) for group in self.rods], 4),
            rod_first=np.cumsum([0, *(len(group) for group in self.rods)]).astype(np.int64),
            room=_floats(self.room, 3),
            rev_material=_ints([m for _, _, m in self.revolved]),
            box_material=_ints([m for _, _, m in self.boxes]),
            panel_material=_ints([p[3] for p in self.panels]),
            sphere_material=_ints([m for _, _, m in self.spheres]),
            rod_material=_ints([m for *_, m in rods]),
            room_material=_ints(self.walls),
        )
        look = Look(
            pattern=_ints([m[0] for m in self.materials]),
            mix=np.array([m[1] for m in self.materials], np.int64),
            shape=_floats([m[2] for m in self.materials], 4),
            gloss=_floats([m[3] for m in self.materials], 2),
            glow=np.array([m[4] for m in self.materials]),
            lights=np.array(self.lights, np.int64),
            ambient=self.ambient,
        )
        return geometry, look


def _floats(rows: object, width: int) -> Array:
    return np.array(rows, np.float64).reshape(-1, width)


def _plus(at: Point, offset: Array) -> Point:
    x, y, z = np.add(at, offset)
    return float(x), float(y), float(z)


def _around(rods: list[tuple[Point, Point, float, int]]) -> tuple[float, ...]:
    """Return a sphere around rods."""
    ends = np.array([end for a, b, _, _ in rods for end in (a, b)])
    centre = (ends.min(axis=0) + ends.max(axis=0)) / 2
    radius = np.linalg.norm(ends - centre, axis=1).max() + max(r for _, _, r, _ in rods)
    return (*centre, radius + 1e-6)


def _ints(values: list[int]) -> NDArray[np.int64]:
    return np.array(values, np.int64)


def _panel(origin: Point, u: Point, v: Point) -> Array:
    normal = np.cross(u, v)
    return np.array([origin, u, v, normal / np.linalg.norm(normal)])


def camera(
    at: Point, toward: Point, *, width_deg: float, aperture_m: float = 0.006, focus: Point | None = None
) -> Camera:
    """Return a camera; it focuses on `toward` unless told otherwise."""
    position = np.array(at)
    forward = np.array(toward) - position
    forward /= np.linalg.norm(forward)
    right = np.cross(forward, (0.0, 1.0, 0.0))
    right /= np.linalg.norm(right)
    focus_m = float((np.array(focus or toward) - position) @ forward)
    half_width = math.tan(math.radians(width_deg / 2))
    return Camera(position, right, np.cross(right, forward), forward, half_width, aperture_m, focus_m)
