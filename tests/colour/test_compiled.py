"""Compiled loops where nothing can be cached, or compiled.  Each case has its own process."""

import subprocess
import sys
import textwrap

import pytest

HEAD = """
    import os, sys, warnings
    from pathlib import Path
    warnings.simplefilter("always")
"""
NOWHERE_BESIDE_THE_PACKAGE = """
    from numba.core import caching
    caching.CacheImpl._locator_classes = [caching.UserProvidedCacheLocator]
"""
USE = """
    from grader.colour import compiled
    import two
    print(compiled.AVAILABLE, two.double(21), two.triple(14))
"""
MODULE = """
from grader.colour import compiled

@compiled.jit
def double(x):
    return x * 2

@compiled.jit(error_model="numpy")
def triple(x):
    return x * 3
"""


def run(tmp_path, *parts, temp=None):
    (tmp_path / "two.py").write_text(MODULE)
    code = "".join(textwrap.dedent(part) for part in (HEAD, *parts, USE))
    environment = {"PYTHONPATH": str(tmp_path), "TMPDIR": str(temp or tmp_path), "PATH": "/usr/bin:/bin"}
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=False, env=environment
    )
    assert done.returncode == 0, done.stderr
    return done.stdout.strip(), done.stderr


def test_code_is_cached_beside_the_module(tmp_path):
    out, err = run(tmp_path)
    assert out == "True 42 42"
    assert "RuntimeWarning" not in err
    assert list(tmp_path.glob("__pycache__/two.double*.nbi"))


@pytest.mark.skipif(sys.platform == "win32", reason="POSIX permissions")
def test_where_that_cannot_be_written_a_private_folder_takes_it(tmp_path):
    out, err = run(tmp_path, NOWHERE_BESIDE_THE_PACKAGE)
    assert out == "True 42 42"
    assert "RuntimeWarning" not in err
    (folder,) = tmp_path.glob("grader-compiled-*")
    assert folder.stat().st_mode & 0o077 == 0
    assert list(folder.rglob("two.double*.nbi"))


@pytest.mark.skipif(sys.platform == "win32", reason="POSIX permissions")
def test_a_folder_that_others_can_write_is_not_trusted(tmp_path):
    run(tmp_path, NOWHERE_BESIDE_THE_PACKAGE)
    (folder,) = tmp_path.glob("grader-compiled-*")
    folder.chmod(0o777)
    out, err = run(tmp_path, NOWHERE_BESIDE_THE_PACKAGE)
    assert out == "True 42 42"
    assert err.count("RuntimeWarning: compiled code cannot be cached") == 1


def test_where_nothing_can_be_written_it_still_works_with_one_warning(tmp_path):
    occupied = tmp_path / "a file"
    occupied.write_text("")
    block = f"""
        import tempfile
        tempfile.tempdir = r"{occupied}"
    """
    out, err = run(tmp_path, NOWHERE_BESIDE_THE_PACKAGE, block)
    assert out == "True 42 42"
    assert err.count("RuntimeWarning: compiled code cannot be cached") == 1


@pytest.mark.parametrize("how", ['sys.modules["numba"] = None', "sys.path.insert(0, BROKEN)"])
def test_without_numba_functions_stay_python_with_one_warning(tmp_path, how):
    (tmp_path / "broken").mkdir()
    (tmp_path / "broken" / "numba.py").write_text("raise OSError('a library will not load')")
    out, err = run(tmp_path, f"BROKEN = r'{tmp_path}/broken'\n{how}\n")
    assert out == "False 42 42"
    assert err.count("RuntimeWarning: numba cannot be used") == 1
