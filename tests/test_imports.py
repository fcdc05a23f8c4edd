"""The house's one-way rule: which part may import which."""

import ast
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).parents[1] / "grader"

# Each part may import itself and what stands here; DEVELOPERS.md draws it.  `grader/atomic.py` is a leaf.
LEAVES = {"errors", "model", "atomic"}
ALLOWED = {
    "errors": set(),
    "atomic": {"errors"},
    "model": {"errors"},
    "colour": LEAVES,
    "cast": LEAVES | {"colour"},
    "files": LEAVES | {"colour"},
    "pixels": LEAVES | {"colour"},
    "preset": LEAVES | {"colour"},
    "log": LEAVES,
    "clf": LEAVES | {"colour"},
    "report": LEAVES | {"colour"},
    "outcome": LEAVES,
    "processes": LEAVES | {"outcome"},
    "cluster": LEAVES | {"outcome"},
    "workers": LEAVES | {"cluster", "outcome", "processes"},
    "sources": LEAVES,
    "run": LEAVES | {"log"},
    "target": LEAVES,
    "resume": LEAVES | {"log"},
    "halt": LEAVES | {"target"},
    "records": LEAVES | {"cast", "colour", "files", "log", "resume"},
    "room": LEAVES | {"files", "workers"},
    "jobs": LEAVES | {"cast", "colour", "files", "pixels", "target"},
    "shootfile": LEAVES | {"cast", "colour", "files", "preset"},
    "reporting": LEAVES | {"files", "log", "pixels", "report"},
    "checking": LEAVES | {"cast", "colour", "files", "log", "resume", "room", "workers"},
    "exporting": LEAVES | {"cast", "clf", "log", "preset"},
    "options": LEAVES | {"workers"},
    "passes": LEAVES
    | {
        "cast",
        "colour",
        "halt",
        "jobs",
        "log",
        "options",
        "preset",
        "records",
        "resume",
        "room",
        "run",
        "shootfile",
    }
    | {"sources", "target", "workers"},
    "batch": LEAVES | {"log", "options", "passes", "preset", "workers"},
}
ALLOWED["cli"] = set(ALLOWED)
LATE = {("model", "colour"), ("passes", ""), ("cluster", ""), ("cli", ""), ("files", "")}
"""Imports inside functions that the rule would forbid: Frame.from_array, and the version number."""


def part_of(path: Path) -> str:
    name = path.relative_to(ROOT).parts[0].removesuffix(".py")
    for stem in ("pixels", "preset", "log"):  # a module and its private neighbours are one part
        if name.lstrip("_").startswith(stem):
            return stem
    return {"_kernel": "pixels"}.get(name, name)


def imports_of(path: Path) -> set[str]:
    found = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom) and node.module and node.module.split(".")[0] == "grader":
            rest = node.module.split(".")[1:]
            found |= {rest[0]} if rest else {alias.name for alias in node.names}
        elif isinstance(node, ast.Import):
            found |= {a.name.split(".")[1] for a in node.names if a.name.startswith("grader.")}
    return found


def test_every_module_imports_only_what_stands_below_it() -> None:
    wrong = []
    for path in sorted(ROOT.rglob("*.py")):
        part = part_of(path)
        if part in {"__init__", "__main__"}:
            continue
        for name in imports_of(path):
            other = part_of(ROOT / f"{name}.py") if name != "__version__" else ""
            if other == part or other in ALLOWED[part] or (part, other) in LATE:
                continue
            wrong.append(f"{path.relative_to(ROOT)} imports {name}")
    assert wrong == []


def test_the_parts_have_no_cycle() -> None:
    done: set[str] = set()
    while len(done) < len(ALLOWED):
        ready = {part for part, below in ALLOWED.items() if part not in done and below <= done}
        assert ready, f"a cycle among {sorted(set(ALLOWED) - done)}"
        done |= ready


def test_importing_grader_stays_cheap() -> None:
    code = "import sys, grader, grader.cli; grader.GraderError; print(*sys.modules)"
    loaded = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    ).stdout.split()
    assert not {"colour", "scipy", "plotly", "numba", "numpy", "pydantic"} & set(loaded)


def test_workers_do_not_load_colour_science() -> None:
    code = "import sys, grader.jobs; print(*sys.modules)"
    loaded = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    ).stdout.split()
    assert not {"colour", "plotly", "pydantic"} & set(loaded)
