"""Compile number loops with numba where that is possible, and say once where it is not.

Three steps down, each still right: compiled and cached beside the package (or in the user's cache
folder); compiled and cached in a private temporary folder; compiled anew in every process.  Where numba
itself cannot be imported, `AVAILABLE` is False, `jit` leaves functions as they are, and the callers take
their plain-numpy way.
"""

from __future__ import annotations

import os
import stat
import tempfile
import warnings
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar, overload

try:
    import numba

    AVAILABLE = True
    """True where numba can be imported."""
except (
    ImportError,
    OSError,
    SystemError,
) as problem:  # no wheel, a library that will not load, a wrong numpy
    AVAILABLE = False
    warnings.warn(
        f"numba cannot be used ({problem}); results are the same, but much slower",
        RuntimeWarning,
        stacklevel=2,
    )

_Function = TypeVar("_Function", bound=Callable[..., Any])
_told = False


@overload
def jit(function: _Function) -> _Function: ...
@overload
def jit(
    *, fastmath: bool | set[str] = False, error_model: str = "python"
) -> Callable[[_Function], _Function]: ...
def jit(
    function: _Function | None = None, *, fastmath: bool | set[str] = False, error_model: str = "python"
) -> Any:
    """Return the function compiled without the interpreter lock, its machine code cached on disk.

    Parameters
    ----------
    function : callable, optional
        A function in numba's nopython subset; without it, a decorator is returned.
    fastmath : bool or set of str
        Passed on to numba. [names of LLVM fast-math flags]
    error_model : {"python", "numpy"}
        Whether a division by zero raises, or gives an infinity (which alone lets loops become vector code).

    Returns
    -------
    callable
        The compiled function; the function itself where numba is missing.

    Examples
    --------
    >>> @jit
    ... def twice(x):
    ...     return x + x
    >>> twice(4)
    8
    """
    if function is None:
        return lambda wrapped: _compile(wrapped, fastmath, error_model)
    return _compile(function, False, "python")


def _compile(function: _Function, fastmath: bool | set[str], error_model: str) -> Any:
    if not AVAILABLE:
        return function
    options: dict[str, Any] = {"nogil": True, "fastmath": fastmath, "error_model": error_model}
    if not Path(function.__code__.co_filename).exists():  # typed at a prompt: nothing to cache by
        return numba.njit(**options)(function)
    try:
        return numba.njit(cache=True, **options)(function)
    except RuntimeError:  # "cannot cache function: no locator available"
        return _cached_elsewhere(function, options)


def _cached_elsewhere(function: _Function, options: dict[str, Any]) -> Any:
    folder = _private_folder()
    if folder is None:
        _tell_once("compiled code cannot be cached anywhere; every process compiles anew (some seconds)")
        return numba.njit(**options)(function)
    before = numba.config.CACHE_DIR
    numba.config.CACHE_DIR = str(folder)
    try:
        return numba.njit(cache=True, **options)(function)
    except RuntimeError:
        _tell_once("compiled code cannot be cached anywhere; every process compiles anew (some seconds)")
        return numba.njit(**options)(function)
    finally:
        numba.config.CACHE_DIR = before


def _private_folder() -> Path | None:
    """Return a temporary folder that only this user can write (cached code is run), or None."""
    user = os.getuid() if hasattr(os, "getuid") else os.environ.get("USERNAME", "user")
    folder = Path(tempfile.gettempdir()) / f"grader-compiled-{user}"
    try:
        folder.mkdir(mode=0o700, exist_ok=True)
        found = folder.lstat()
    except OSError:
        return None
    if not stat.S_ISDIR(found.st_mode):
        return None
    if hasattr(os, "getuid") and (found.st_uid != os.getuid() or found.st_mode & 0o022):
        return None
    return folder


def _tell_once(message: str) -> None:
    global _told  # noqa: PLW0603 - one warning in a process, however many functions
    if not _told:
        _told = True
        warnings.warn(message, RuntimeWarning, stacklevel=4)
