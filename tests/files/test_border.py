"""What leaves ``grader.files`` is ours, names the file, and says what to do."""

from __future__ import annotations

import errno
import logging
import pickle
import struct
import warnings
import zlib
from pathlib import Path

import imagecodecs
import pytest
import tifffile

from grader.errors import DamagedFile, GraderError, MissingFile, UnsupportedFile, WriteFailed
from grader.files import border

FOREIGN = [
    ZeroDivisionError("division by zero"),
    TypeError("'NoneType' object is not iterable"),
    UnicodeDecodeError("utf-8", b"\xff", 0, 1, "invalid start byte"),
    struct.error("unpack requires a buffer"),
    zlib.error("incorrect header check"),
    ValueError("cannot reshape"),
    IndexError("list index out of range"),
    KeyError(259),
    AssertionError(),
    AttributeError("no attribute"),
    EOFError("ended"),
    OSError("image file is truncated"),
    RecursionError("maximum recursion depth exceeded"),
    RuntimeError("decoder failed"),
    SyntaxError("broken PNG file"),
    OverflowError("too large"),
    tifffile.TiffFileError("corrupted"),
    imagecodecs.DelayedImportError("x") if hasattr(imagecodecs, "DelayedImportError") else ImportError("x"),
    DeprecationWarning("old"),
]


@pytest.mark.parametrize("problem", FOREIGN, ids=lambda p: type(p).__name__)
def test_foreign_exceptions_mean_damage(problem: Exception) -> None:
    with pytest.raises(DamagedFile) as caught, border.reading("hall.tif"):
        raise problem
    assert caught.value.path == "hall.tif"
    assert type(problem).__name__ in caught.value.message
    assert caught.value.hint
    assert caught.value.__cause__ is problem
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("number", "words"),
    [
        (errno.ENOENT, "no such file"),
        (errno.EACCES, "may not be opened"),
        (errno.EISDIR, "folder"),
        (errno.EIO, "read error"),
        (errno.EMFILE, "too many files"),
    ],
)
def test_what_the_system_says_about_a_path(number: int, words: str) -> None:
    with pytest.raises(MissingFile, match=words), border.reading("hall.tif"):
        raise OSError(number, "whatever the system calls it")


def test_memory_and_missing_abilities_are_no_damage() -> None:
    with pytest.raises(UnsupportedFile, match="memory"), border.reading("hall.tif"):
        raise MemoryError
    with pytest.raises(UnsupportedFile, match="chroma"), border.reading("hall.tif"):
        raise NotImplementedError("chroma subsampling not supported")


def test_our_own_errors_only_gain_the_path() -> None:
    with pytest.raises(DamagedFile) as caught, border.reading("hall.tif"):
        raise DamagedFile("cut short", hint="again")
    assert str(caught.value) == "hall.tif: cut short; again"
    with pytest.raises(DamagedFile) as caught, border.reading("hall.tif"), border.reading("inner.tif"):
        raise DamagedFile("cut short")
    assert caught.value.path == "inner.tif"


def test_interrupts_pass() -> None:
    with pytest.raises(KeyboardInterrupt), border.reading("hall.tif"):
        raise KeyboardInterrupt


def test_warnings_of_decoders_stay_inside() -> None:
    with border.reading("hall.tif"):
        warnings.warn("corrupt EXIF data", UserWarning, stacklevel=1)
    for name in ("tifffile", "PIL"):
        assert any(isinstance(h, logging.NullHandler) for h in logging.getLogger(name).handlers)


def test_encoders_fail_as_write_failed() -> None:
    for problem in (ValueError("bad"), MemoryError(), OSError("encoder error -2")):
        with pytest.raises(WriteFailed) as caught, border.writing("out.jpg"):
            raise problem
        assert caught.value.path == "out.jpg"


def test_errors_survive_a_process_boundary(tmp_path: Path) -> None:
    with pytest.raises(GraderError) as caught, border.reading(tmp_path):
        raise ValueError("x" * 1000)
    again = pickle.loads(pickle.dumps(caught.value))
    assert str(again) == str(caught.value)
    assert len(again.message) < 250
