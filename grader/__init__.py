"""Measure, remove and track colour casts over whole photo shoots.

Everything a script needs is here; the modules behind it load when they are first used, so that
``import grader`` stays cheap.

Examples
--------
>>> import numpy as np, grader
>>> greys = np.random.default_rng(1).integers(40, 200, (64, 64, 1), np.uint8)
>>> frame = grader.Frame.from_array(greys.repeat(3, axis=2))
>>> sorted(grader.measure(frame).readings)
['grey-edge', 'grey-world', 'shades-of-grey', 'white-patch']
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from grader.batch import apply, measure_files, neutralise
    from grader.cast import measure, plan
    from grader.checking import check
    from grader.errors import (
        DamagedFile,
        GraderError,
        MissingFile,
        PresetError,
        TooFewUsablePixels,
        UnsupportedFile,
        WorkerFailed,
        WriteFailed,
    )
    from grader.files import read, write
    from grader.model import Cast, Correction, Fixed, Frame, Header, Output, Reading, Recipe
    from grader.pixels import correct_frame as correct
    from grader.preset import load_preset

__version__ = "0.1.0"

_HOME = {
    "apply": "grader.batch",
    "check": "grader.checking",
    "measure_files": "grader.batch",
    "neutralise": "grader.batch",
    "measure": "grader.cast",
    "plan": "grader.cast",
    "read": "grader.files",
    "write": "grader.files",
    "correct": "grader.pixels",
    "load_preset": "grader.preset",
    **dict.fromkeys(
        ("Cast", "Correction", "Fixed", "Frame", "Header", "Output", "Reading", "Recipe"), "grader.model"
    ),
    **dict.fromkeys(
        (
            "DamagedFile",
            "GraderError",
            "MissingFile",
            "PresetError",
            "TooFewUsablePixels",
            "UnsupportedFile",
            "WorkerFailed",
            "WriteFailed",
        ),
        "grader.errors",
    ),
}

__all__ = [
    "Cast",
    "Correction",
    "DamagedFile",
    "Fixed",
    "Frame",
    "GraderError",
    "Header",
    "MissingFile",
    "Output",
    "PresetError",
    "Reading",
    "Recipe",
    "TooFewUsablePixels",
    "UnsupportedFile",
    "WorkerFailed",
    "WriteFailed",
    "__version__",
    "apply",
    "check",
    "correct",
    "load_preset",
    "measure",
    "measure_files",
    "neutralise",
    "plan",
    "read",
    "write",
]


def __getattr__(name: str) -> Any:
    """Load a public name from its home on first use (PEP 562)."""
    home = _HOME.get(name)
    if home is None:
        raise AttributeError(f"module 'grader' has no attribute {name!r}")
    value = getattr(import_module(home), "correct_frame" if name == "correct" else name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """List the public names."""
    return sorted(__all__)
