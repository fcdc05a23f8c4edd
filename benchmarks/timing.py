"""Times as ratios: what is compared is run by turns, and the best of each is taken.

`clock` is wall time; ``speed.py --cpu`` makes it processor time, which says more on a machine that does other
things as well (but hides waiting for a disk, and cannot compare numbers of threads).
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass

cpu = False
"""Whether processor time is measured."""


@dataclass(frozen=True)
class Row:
    """One line of the table."""

    what: str
    value: float
    goal: float | None = None
    at_least: bool = False
    digits: int = 2
    unit: str = ""
    detail: str = ""

    @property
    def verdict(self) -> str:
        """Return whether the goal is met; empty where there is none."""
        if self.goal is None:
            return ""
        met = self.value >= self.goal if self.at_least else self.value <= self.goal
        return "met" if met else "missed"

    def cells(self) -> tuple[str, str, str, str]:
        """Return the row as text: what, here, goal, verdict."""
        value = f"{self.value:,.{self.digits}f}{self.unit}"
        sign = ">=" if self.at_least else "<="
        goal = "-" if self.goal is None else f"{sign} {self.goal:g}{self.unit}"
        return f"{self.what} ({self.detail})" if self.detail else self.what, value, goal, self.verdict


def by_turns(
    functions: dict[str, Callable[[], object]],
    *,
    rounds: int = 7,
    seconds: float = 0,
    before: Callable[[], object] | None = None,
) -> dict[str, float]:
    """Return the best time of each function in seconds; a first, untimed round warms up.

    ``before`` is called, untimed, before each.

    At least ``rounds`` rounds, and at least ``seconds`` in all: a busy machine needs more of them.
    """
    best = dict.fromkeys(functions, float("inf"))
    prepare = before or (lambda: None)
    for function in functions.values():
        prepare()
        function()
    clock = time.process_time if cpu else time.perf_counter
    end = time.perf_counter() + seconds
    done = 0
    while done < rounds or time.perf_counter() < end:
        for name, function in functions.items():
            prepare()
            start = clock()
            function()
            best[name] = min(best[name], clock() - start)
        done += 1
    return best


def table(rows: list[Row]) -> str:
    """Return rows as a Markdown table."""
    lines = ["| what | here | goal | |", "|---|---|---|---|"]
    lines += [f"| {' | '.join(row.cells())} |" for row in rows]
    return "\n".join(lines)
