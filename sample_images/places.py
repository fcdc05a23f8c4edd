"""The places of the evening: rooms, lamps and tables, ready for pots."""

from __future__ import annotations

import numpy as np
import patterns as pt
from pottery import revolve
from village_hall import Array, Builder, Point

TABLE_M = 0.78
"""Height of every table top."""


def aimed(b: Builder, centre: Point, target: Point, size: tuple[float, float], glow: float) -> None:
    """Hang a shining panel that faces a target."""
    toward = np.array(target) - np.array(centre)
    toward /= np.linalg.norm(toward)
    u = np.cross((0.0, 1.0, 0.0), toward)
    u *= size[0] / np.linalg.norm(u)
    v = np.cross(toward, u / np.linalg.norm(u)) * size[1]
    b.lamp_panel(_point(np.array(centre) - u / 2 - v / 2), _point(u), _point(v), glow)


def _point(p: Array) -> Point:
    return float(p[0]), float(p[1]), float(p[2])


def window_place(b: Builder, cloth: str | None = None) -> None:
    """Build a table by a tall window in the left wall; pale plaster and sage panelling."""
    b.room = ((-2.2, 0.0, -1.9), (3.4, 3.0, 4.0))
    wall = b.material(pt.WALL, "plaster", "sage paint", "dark wood", shape=(1.02, 0.12, 0.12, 1.0))
    floor = b.material(pt.PLANKS, "brown wood", "dark wood", "ink", shape=(0.14, 1, 2.0))
    ceiling = b.material(pt.PLAIN, "plaster", shape=(0.2,))
    frame = b.material(pt.PLAIN, "white glaze", "old plaster", shape=(0.6,))
    b.walls = [wall, wall, floor, ceiling, wall, wall]
    wood = b.material(pt.PLANKS, "pale wood", "brown wood", "ink", shape=(0.21, 0, 5.0))
    legs = b.material(pt.PLAIN, "dark wood", shape=(1.0,))
    b.table((-1.45, -0.55), (1.25, 0.60), TABLE_M, wood, legs)
    if cloth:
        cover(b, cloth, (-1.0, -0.40), (0.95, 0.61))
    b.lamp_panel((-2.19, 0.95, 0.85), (0.0, 0.0, -1.5), (0.0, 1.6, 0.0), 7.5)
    for k in range(4):
        z = 0.85 - 0.5 * k
        b.boxes.append(((-2.19, 0.92, z - 0.02), (-2.15, 2.58, z + 0.02), frame))
    for y in (0.93, 1.46, 2.0, 2.55):
        b.boxes.append(((-2.19, y - 0.02, -0.68), (-2.15, y + 0.02, 0.88), frame))
    b.boxes.append(((-2.2, 0.86, -0.75), (-2.02, 0.91, 0.95), frame))
    shelf = b.material(pt.PLANKS, "brown wood", "dark wood", "ink", shape=(0.3, 0, 3.0))
    b.boxes.append(((-0.9, 1.62, -1.9), (1.9, 1.655, -1.66), shelf))
    b.ambient = 0.07


def cover(b: Builder, cloth: str, low: tuple[float, float], high: tuple[float, float]) -> None:
    """Lay a cloth over the table, hanging over its front edge."""
    kinds = {
        "striped": (("linen", "indigo cloth"), (0.16, 0.022, 0.0, 3.0)),
        "checked": (("linen", "madder cloth"), (0.09, 0.030, 1.0, 5.0)),
        "plain": (("linen", "linen"), (0.0, 0.0, 0.0, 7.0)),
        "indigo": (("indigo cloth", "linen"), (0.22, 0.008, 0.0, 2.0)),
    }
    names, shape = kinds[cloth]
    material = b.material(pt.CLOTH, *names, shape=shape)
    b.boxes.append(((low[0], TABLE_M - 0.28, low[1]), (high[0], TABLE_M + 0.003, high[1]), material))


def hall_place(b: Builder, cloth: str | None = None) -> None:
    """Build the hall under enamel pendants, a string of bulbs far behind."""
    b.room = ((-4.5, 0.0, -4.2), (4.5, 4.2, 5.0))
    wall = b.material(pt.WALL, "old plaster", "brown wood", "dark wood", shape=(1.15, 0.16, 0.1, 4.0))
    floor = b.material(pt.PLANKS, "brown wood", "dark wood", "ink", shape=(0.12, 1, 1.0))
    ceiling = b.material(pt.PLANKS, "dark wood", "dark wood", shape=(0.3, 0, 6.0))
    b.walls = [wall, wall, floor, ceiling, wall, wall]
    wood = b.material(pt.PLANKS, "brown wood", "dark wood", "ink", shape=(0.24, 0, 8.0))
    legs = b.material(pt.PLAIN, "dark wood", shape=(1.0,))
    b.table((-1.6, -0.55), (1.6, 0.60), TABLE_M, wood, legs)
    b.table((-3.6, -3.3), (3.2, -2.5), TABLE_M, wood, legs)
    if cloth:
        cover(b, cloth, (-1.61, -0.56), (1.61, 0.61))
    enamel = b.material(pt.PLAIN, "enamel", "white glaze", shape=(0.3,), gloss=(0.05, 0.12))
    cord = b.material(pt.PLAIN, "ink")
    for x, z in ((-0.95, 0.1), (0.35, -0.2), (1.7, 0.3)):
        b.revolved.append(((x, 1.95, z), revolve("shade", 0.15, wall=0.004), enamel))
        b.rods.append([((x, 2.1, z), (x, 4.2, z), 0.005, cord)])
        b.lamp_bulb((x, 1.975, z), 0.034, 620.0)
    for k in range(9):
        x = -3.4 + 0.85 * k
        y = 1.78 - 0.22 * (1 - ((k % 4) - 2) ** 2 / 4)
        b.lamp_bulb((x, y, -3.75), 0.028, 90.0)
        if k < 8:
            following = 1.78 - 0.22 * (1 - (((k + 1) % 4) - 2) ** 2 / 4)
            b.rods.append([((x, y + 0.045, -3.75), (x + 0.85, following + 0.045, -3.75), 0.004, cord)])
    b.ambient = 0.05


def side_room(b: Builder, cloth: str | None = None) -> None:
    """Build a tiled side room with two long tubes: shelves of lots that wait."""
    b.room = ((-1.9, 0.0, -1.25), (1.9, 2.55, 3.2))
    tiles = b.material(
        pt.TILES,
        "white glaze",
        "white glaze",
        "old plaster",
        shape=(0.15, 0.15, 0.003, 2.0),
        gloss=(0.045, 0.12),
    )
    side = b.material(pt.WALL, "plaster", "blue paint", "dark wood", shape=(1.2, 0.2, 0.1, 2.0))
    floor = b.material(pt.TILES, "slate", "slate", "ink", shape=(0.3, 0.3, 0.004, 8.0))
    ceiling = b.material(pt.PLAIN, "plaster", shape=(0.2,))
    b.walls = [side, side, floor, ceiling, tiles, side]
    board = b.material(pt.PLANKS, "pale wood", "brown wood", "ink", shape=(0.3, 0, 2.0))
    steel = b.material(pt.BRUSHED, "old plaster", "slate", shape=(0.8,), gloss=(0.25, 0.2))
    b.table((-1.5, -0.5), (1.5, 0.50), TABLE_M, steel, steel)
    if cloth:
        cover(b, cloth, (-0.9, -0.51), (0.9, 0.51))
    for y in (1.12, 1.52, 1.92):
        b.boxes.append(((-1.55, y, -1.25), (1.55, y + 0.03, -0.93), board))
    for x in (-1.57, 0.0, 1.54):
        b.boxes.append(((x, 0.0, -0.96), (x + 0.03, 2.2, -0.93), steel))
    for z in (0.15, 1.35):
        b.lamp_panel((-0.9, 2.5, z), (1.8, 0.0, 0.0), (0.0, 0.0, 0.12), 26.0)
    b.ambient = 0.10


def stage_place(b: Builder, cloth: str | None = None) -> None:
    """Build the stage: curtain, boards, plinths, two panels from the wings."""
    b.room = ((-4.0, 0.0, -1.7), (4.0, 4.5, 6.0))
    curtain = b.material(pt.CURTAIN, "curtain", "ink", shape=(0.23, 0.85, 3.0))
    dark = b.material(pt.PLAIN, "slate", shape=(0.5,))
    floor = b.material(pt.PLANKS, "pale wood", "dark wood", "ink", shape=(0.12, 0, 4.0))
    b.walls = [dark, dark, floor, dark, curtain, dark]
    aimed(b, (2.3, 2.9, 2.4), (0.0, 1.0, 0.0), (0.7, 0.5), 92.0)
    aimed(b, (-2.9, 2.2, 1.6), (0.0, 1.0, 0.0), (0.5, 0.5), 42.0)
    b.ambient = 0.03


def _plinth(b: Builder, x: float, z: float, height: float, girth: float = 1.0) -> None:
    paint = b.material(pt.PLAIN, "old plaster", "slate", shape=(1.0, 0, 0, x))
    b.revolved.append(((x, 0.0, z), revolve("plinth", height, girth=girth / height, hollow=False), paint))


def plinths(b: Builder, spots: list[tuple[float, float, float, str, float, str]]) -> None:
    """Stand one pot on each plinth: (x, z, plinth height, kind, pot height, glaze)."""
    for k, (x, z, high, kind, height, glaze) in enumerate(spots):
        _plinth(b, x, z, high, 0.85)
        b.pot(kind, (x, high, z), height, glaze, seed=1.7 + k, turn=0.5 - k)
