"""Made-up shoots for the report's tests."""

import importlib.util
from pathlib import Path
from types import ModuleType

import pytest


@pytest.fixture(scope="session")
def shoots() -> ModuleType:
    """The maker of logs and pictures beside this file."""
    spec = importlib.util.spec_from_file_location("report_shoots", Path(__file__).with_name("shoots.py"))
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="session")
def lines(shoots) -> list:
    """The log of an afternoon: 120 frames, two bodies, four lights, two frames that failed."""
    return shoots.shoot(120)


@pytest.fixture(scope="session")
def bank(shoots, lines):
    """Pictures for any frame, drawn once and used again and again."""
    draw = shoots.pictures(240)
    pairs = [draw(line) for line in lines[1:60:6] if line.get("cast")]

    def thumbnails(record):
        return pairs[int(record["sha256"], 16) % len(pairs)] if record.get("cast") else (None, None)

    return thumbnails
