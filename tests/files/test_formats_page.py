"""docs/FORMATS.md says what the code does."""

from __future__ import annotations

import importlib.util
from pathlib import Path

DOCS = Path(__file__).resolve().parents[2] / "docs"


def test_the_page_is_what_its_script_writes() -> None:
    specification = importlib.util.spec_from_file_location("make_formats", DOCS / "make_formats.py")
    assert specification is not None
    assert specification.loader is not None
    script = importlib.util.module_from_spec(specification)
    specification.loader.exec_module(script)
    written = (DOCS / "FORMATS.md").read_text(encoding="utf-8")
    assert written == script.page(), "run: python docs/make_formats.py"
