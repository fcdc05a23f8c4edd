"""The still lifes of the evening: each fills a place with pots and says where the camera was."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import patterns as pt
from places import TABLE_M, cover, hall_place, plinths, side_room, stage_place, window_place
from pottery import OUTLINES
from tracer import Camera, Geometry, Look
from village_hall import GLAZES, PAINTED, Builder, camera

HEIGHTS_M = {
    "bottle": (0.28, 0.38), "vase": (0.24, 0.33), "jar": (0.18, 0.25), "moon jar": (0.22, 0.30), "bowl": (0.09, 0.12),
    "tea bowl": (0.075, 0.095), "dish": (0.032, 0.042), "beaker": (0.10, 0.13), "jug": (0.19, 0.25),
    "tall": (0.32, 0.42), "gourd": (0.26, 0.33),
}  # fmt: skip
ALL_GLAZES = (*GLAZES, *PAINTED)


@dataclass(frozen=True)
class Spread:
    """Pots scattered over a rectangle: x and z ranges, how many, of what."""

    x: tuple[float, float]
    z: tuple[float, float]
    count: int
    kinds: tuple[str, ...] = tuple(HEIGHTS_M)
    glazes: tuple[str, ...] = ALL_GLAZES
    y: float = TABLE_M
    cards: int = 2


def _reach(kind: str, height: float) -> float:
    return max(r for r, _ in OUTLINES[kind]) * height


def scatter(b: Builder, rng: np.random.Generator, s: Spread, taken: list[tuple[float, float, float]]) -> None:
    """Stand pots where there is room, tall ones towards the back; `taken` holds (x, z, radius)."""
    chosen = [
        str(k) for k in rng.permutation(np.resize(np.array(s.kinds), max(s.count, len(s.kinds))))[: s.count]
    ]
    chosen.sort(key=lambda kind: -HEIGHTS_M[kind][1])
    glazes = [str(g) for g in rng.permutation(np.resize(np.array(s.glazes), max(s.count, len(s.glazes))))]
    for place, kind in enumerate(chosen):
        height = float(rng.uniform(*HEIGHTS_M[kind]))
        depth = place / max(len(chosen) - 1, 1)
        for _ in range(200):
            radius = _reach(kind, height) + 0.012
            x = float(rng.uniform(s.x[0] + radius, s.x[1] - radius))
            z = s.z[0] + (s.z[1] - s.z[0]) * float(np.clip(depth + rng.normal(0, 0.22), 0, 1))
            z = float(np.clip(z, s.z[0] + radius, s.z[1] - radius))
            if all((x - a) ** 2 + (z - c) ** 2 > (radius + r) ** 2 for a, c, r in taken):
                taken.append((x, z, radius))
                seed, turn = float(rng.uniform(0, 9)), float(rng.uniform(-1.2, 1.2))
                b.pot(kind, (x, s.y, z), height, glazes[place], seed=seed, turn=turn + (x > 0) * 0.0)
                break
    _cards(b, rng, s, taken)


def _cards(b: Builder, rng: np.random.Generator, s: Spread, taken: list[tuple[float, float, float]]) -> None:
    for _ in range(s.cards):
        for _ in range(100):
            x, z = float(rng.uniform(s.x[0] + 0.05, s.x[1] - 0.08)), float(rng.uniform(*s.z))
            if z > s.z[0] + 0.5 * (s.z[1] - s.z[0]) and all(
                (x + 0.03 - a) ** 2 + (z - c) ** 2 > (0.055 + r) ** 2 for a, c, r in taken
            ):
                taken.append((x + 0.03, z, 0.05))
                b.card((x, s.y, z), int(rng.integers(10, 99)), turn=float(rng.uniform(-0.35, 0.35)))
                break


Arrange = Callable[[Builder, np.random.Generator], Camera]
OPEN = ("bowl", "tea bowl", "dish", "bowl", "beaker")
TALL = ("bottle", "vase", "tall", "gourd", "moon jar", "jar")


def _back_shelf(
    b: Builder, rng: np.random.Generator, x: tuple[float, float], y: float, z: float, count: int
) -> None:
    kinds = ("jar", "beaker", "tea bowl", "jug", "moon jar", "vase")
    scatter(b, rng, Spread(x, (z - 0.13, z + 0.13), count, kinds, y=y, cards=0), [])


def window_group(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up: eight pots on bare boards."""
    window_place(b)
    _back_shelf(b, rng, (-0.8, 1.8), 1.655, -1.78, 8)
    scatter(b, rng, Spread((-0.85, 0.75), (-0.42, 0.42), 9, cards=3), [])
    return camera((0.35, 1.30, 1.75), (-0.05, 0.91, 0.0), width_deg=42, aperture_m=0.010)


def window_pair(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up a moon jar and a bowl, close."""
    window_place(b, "striped")
    b.pot("moon jar", (-0.13, TABLE_M, -0.02), 0.29, "white", seed=1.3)
    b.pot("tea bowl", (0.15, TABLE_M, 0.20), 0.09, "tenmoku", seed=2.2)
    taken = [(-0.13, -0.02, 0.17), (0.15, 0.20, 0.09)]
    scatter(b, rng, Spread((-0.7, 0.8), (-0.42, -0.2), 3, TALL, cards=0), taken)
    b.card((-0.33, TABLE_M, 0.24), 12, turn=0.3)
    return camera(
        (0.42, 1.12, 1.05), (-0.02, 0.90, 0.05), width_deg=34, aperture_m=0.014, focus=(-0.1, 0.9, 0.12)
    )


def window_against(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up: against the window, its panes burnt out."""
    window_place(b)
    scatter(b, rng, Spread((-1.40, -0.55), (-0.45, 0.45), 8, cards=1), [])
    return camera(
        (0.65, 1.22, 0.95), (-1.2, 1.02, -0.02), width_deg=40, aperture_m=0.009, focus=(-0.8, 0.9, 0.1)
    )


def window_bowls(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up: bowls and dishes from above on a checked cloth."""
    window_place(b, "checked")
    scatter(b, rng, Spread((-0.62, 0.60), (-0.36, 0.48), 9, OPEN, cards=2), [])
    return camera((0.05, 1.95, 0.85), (-0.02, 0.80, 0.04), width_deg=44, aperture_m=0.006)


def window_row(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up a row of jugs along the table."""
    window_place(b)
    glazes = rng.permutation(np.array(ALL_GLAZES))
    for k in range(7):
        at = (0.85 - 0.32 * k, TABLE_M, 0.12 - 0.06 * k + float(rng.uniform(-0.03, 0.03)))
        kind = "jug" if k % 2 == 0 else "beaker"
        b.pot(kind, at, 0.23 if kind == "jug" else 0.125, str(glazes[k]), seed=1.1 * k + 0.4, turn=0.5)
    b.card((0.62, TABLE_M, 0.33), 31, turn=-0.5)
    _back_shelf(b, rng, (-0.8, 1.8), 1.655, -1.78, 7)
    return camera(
        (1.55, 1.22, 1.05), (0.30, 0.88, 0.0), width_deg=38, aperture_m=0.012, focus=(0.55, 0.9, 0.05)
    )


def hall_group(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up the auction table with the hall behind."""
    hall_place(b)
    scatter(b, rng, Spread((-3.0, 2.6), (-3.1, -2.7), 10, TALL, cards=0), [])
    scatter(b, rng, Spread((-0.95, 0.95), (-0.45, 0.45), 10, cards=3), [])
    return camera(
        (0.25, 1.42, 2.05), (-0.05, 1.02, -0.1), width_deg=46, aperture_m=0.014, focus=(0.0, 0.9, 0.1)
    )


def hall_cloth(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up: white and celadon lots on a plain cloth."""
    hall_place(b, "plain")
    scatter(b, rng, Spread((-3.0, 2.6), (-3.1, -2.7), 8, TALL, cards=0), [])
    pale = ("white", "celadon", "cream", "blue on white", "rose", "grey")
    scatter(b, rng, Spread((-0.8, 0.7), (-0.42, 0.40), 8, glazes=pale, cards=2), [])
    return camera(
        (-0.55, 1.32, 1.80), (-0.02, 0.94, -0.05), width_deg=42, aperture_m=0.016, focus=(0, 0.9, 0.1)
    )


def hall_close(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up a cobalt bottle and its neighbours, close."""
    hall_place(b, "indigo")
    b.pot("bottle", (0.0, TABLE_M, 0.0), 0.36, "cobalt", seed=2.3)
    b.pot("jug", (0.27, TABLE_M, 0.05), 0.22, "iron on cream", seed=3.7, turn=0.3)
    b.pot("bowl", (-0.28, TABLE_M, 0.10), 0.10, "ochre", seed=5.1)
    taken = [(0, 0, 0.13), (0.27, 0.05, 0.14), (-0.28, 0.1, 0.14)]
    scatter(b, rng, Spread((-0.9, 0.9), (-0.45, -0.2), 4, TALL, cards=0), taken)
    b.card((0.10, TABLE_M, 0.25), 46, turn=-0.2)
    return camera((0.15, 1.18, 1.30), (0.0, 0.95, 0.0), width_deg=38, aperture_m=0.016)


def hall_bowls(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up: bowls under a pendant, from above."""
    hall_place(b, "striped")
    scatter(b, rng, Spread((-0.70, 0.62), (-0.42, 0.46), 9, OPEN, cards=3), [])
    return camera((-0.20, 1.75, 1.15), (-0.04, 0.80, 0.03), width_deg=42, aperture_m=0.008)


def hall_long(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up: along the table towards the far bulbs."""
    hall_place(b)
    scatter(b, rng, Spread((-1.5, 1.2), (-0.45, 0.45), 13, cards=3), [])
    scatter(b, rng, Spread((-3.0, 2.6), (-3.1, -2.7), 8, TALL, cards=0), [])
    return camera(
        (1.85, 1.30, 1.35), (0.15, 0.95, -0.25), width_deg=44, aperture_m=0.013, focus=(0.7, 0.9, 0.15)
    )


def side_shelves(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up: shelves of waiting lots."""
    side_room(b)
    for y in (1.15, 1.55, 1.95):
        kinds = ("jar", "beaker", "jug", "tea bowl", "vase", "bowl")
        scatter(b, rng, Spread((-1.2, 1.2), (-1.22, -0.95), 7, kinds, y=y, cards=1), [])
    scatter(b, rng, Spread((-0.9, 0.9), (-0.4, 0.35), 5, OPEN, cards=1), [])
    return camera((0.1, 1.55, 2.35), (0.0, 1.38, -1.0), width_deg=46, aperture_m=0.005, focus=(0, 1.4, -1.0))


def side_table(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up: lots on the steel table."""
    side_room(b)
    for y in (1.15, 1.55):
        scatter(b, rng, Spread((-1.3, 1.3), (-1.22, -0.95), 7, ("jar", "jug", "vase"), y=y, cards=0), [])
    scatter(b, rng, Spread((-0.75, 0.75), (-0.42, 0.40), 9, cards=3), [])
    return camera((-0.40, 1.38, 1.70), (0.0, 0.95, -0.05), width_deg=42, aperture_m=0.010)


def side_jugs(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up: three jugs on a cloth."""
    side_room(b, "checked")
    for k, (x, z, glaze) in enumerate(
        ((-0.26, -0.02, "slip on red"), (0.03, 0.08, "blue on white"), (0.30, -0.06, "copper"))
    ):
        b.pot("jug", (x, TABLE_M, z), 0.25 - 0.03 * (k == 1), glaze, seed=2.0 + k, turn=0.6)
    for y in (1.15, 1.55):
        scatter(b, rng, Spread((-1.3, 1.3), (-1.22, -0.95), 7, ("jar", "moon jar", "vase"), y=y, cards=0), [])
    b.card((-0.12, TABLE_M, 0.27), 58, turn=0.2)
    return camera((0.25, 1.18, 1.15), (0.02, 0.92, 0.0), width_deg=40, aperture_m=0.012)


def side_tall(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up: tall vases before the tiles."""
    side_room(b, "plain")
    scatter(b, rng, Spread((-0.72, 0.72), (-0.40, 0.10), 7, ("tall", "bottle", "vase", "gourd"), cards=0), [])
    scatter(b, rng, Spread((-0.6, 0.6), (0.16, 0.44), 3, ("tea bowl", "beaker"), cards=1), [])
    return camera((0.05, 1.20, 1.75), (0.0, 0.98, -0.1), width_deg=42, aperture_m=0.010)


def stage_three(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up: three plinths."""
    stage_place(b)
    plinths(
        b,
        [
            (-0.62, -0.25, 0.95, "vase", 0.42, "celadon"),
            (0.0, 0.05, 0.75, "moon jar", 0.40, "white"),
            (0.62, -0.2, 1.0, "gourd", 0.40, "oxblood"),
        ],
    )
    return camera((0.1, 1.35, 3.2), (0.0, 1.02, -0.1), width_deg=36, aperture_m=0.012)


def stage_hero(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up the best lot, close, with a table of others behind."""
    stage_place(b)
    plinths(b, [(0.0, 0.0, 0.9, "bottle", 0.46, "copper"), (-0.75, -0.8, 1.0, "jar", 0.30, "cream")])
    plinths(b, [(0.8, -0.7, 0.8, "jug", 0.34, "iron on cream")])
    b.card((0.06, 0.9, 0.13), 64, turn=-0.3, size=0.06)
    return camera((-0.45, 1.40, 1.75), (0.0, 1.10, -0.05), width_deg=36, aperture_m=0.016)


def stage_table(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up the stage table with the last lots."""
    stage_place(b)
    wood = b.material(pt.PLANKS, "brown wood", "dark wood", "ink", shape=(0.22, 0, 3.0))
    b.table((-0.95, -0.5), (0.95, 0.5), TABLE_M, wood, wood)
    cover(b, "plain", (-0.96, -0.51), (0.96, 0.51))
    scatter(b, rng, Spread((-0.8, 0.8), (-0.42, 0.40), 9, cards=2), [])
    return camera((0.45, 1.40, 1.85), (0.0, 0.93, -0.05), width_deg=42, aperture_m=0.010)


def stage_pair(b: Builder, rng: np.random.Generator) -> Camera:
    """Set up: two plinths, two jars."""
    stage_place(b)
    plinths(b, [(-0.35, 0.0, 0.80, "moon jar", 0.38, "rose"), (0.40, -0.25, 0.92, "tall", 0.46, "turquoise")])
    return camera(
        (0.55, 1.30, 2.2), (0.0, 1.06, -0.1), width_deg=38, aperture_m=0.014, focus=(-0.3, 1.1, 0.1)
    )


STILL_LIFES: dict[str, Arrange] = {
    f.__name__.replace("_", " "): f
    for f in (
        window_group, window_pair, window_against, window_bowls, window_row,
        hall_group, hall_cloth, hall_close, hall_bowls, hall_long,
        side_shelves, side_table, side_jugs, side_tall,
        stage_three, stage_hero, stage_table, stage_pair,
    )
}  # fmt: skip


def scene(name: str, seed: int) -> tuple[Geometry, Look, Camera]:
    """Return a still life by name; the seed places and glazes what is left to chance."""
    builder = Builder(((-1.0, 0.0, -1.0), (1.0, 1.0, 1.0)))
    view = STILL_LIFES[name](builder, np.random.default_rng(seed))
    return *builder.build(), view
