"""The page about the Python API is what the docstrings say."""

import importlib.util
from pathlib import Path


def test_api_page_is_current():
    script = Path(__file__).parents[1] / "docs" / "make_api.py"
    spec = importlib.util.spec_from_file_location("make_api", script)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    assert module.TARGET.read_text(encoding="utf-8") == module.document(), "run: python docs/make_api.py"
