"""Folders in memory, where the system has such: these tests flush thousands of files, whose disk is not in question."""

import os
import shutil
import tempfile
from collections.abc import Iterator
from pathlib import Path

import pytest

_MEMORY = Path("/dev/shm")
_ROOM = 1 << 30


@pytest.fixture
def tmp_path(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    """Give an empty folder for one test."""
    if not os.access(_MEMORY, os.W_OK) or shutil.disk_usage(_MEMORY).free < _ROOM:
        yield tmp_path_factory.mktemp("faults")
        return
    folder = Path(tempfile.mkdtemp(prefix="grader-faults-", dir=_MEMORY))
    yield folder
    shutil.rmtree(folder, ignore_errors=True)
