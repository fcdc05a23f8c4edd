"""2,000 damaged files of every kind through whole batches: each ends as a picture or as one plain error.

``GRADER_MUTANTS=20000`` runs ten times as many; ``GRADER_MUTANTS_SEED`` changes what is damaged and how.
"""

from __future__ import annotations

import os
import random
from collections import Counter
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from faults.faultkit import digests, unfinished

import grader
from grader import files
from grader.batch import Options
from grader.model import ReadLimits, Recipe
from grader.workers import Pool
from tests.files.conftest import write_sensor_file
from tests.files.variants import all_variants

COUNT = int(os.environ.get("GRADER_MUTANTS", "2000"))
SEED = int(os.environ.get("GRADER_MUTANTS_SEED", "8"))
OURS = {"damaged", "unsupported", "missing", "too-few-pixels", "write-failed"}
"""Errors that say something about a file; ``error`` is a fault of grader's own, ``worker`` a lost process."""
SMALL = ReadLimits(max_pixels=4_000_000)


def seeds(folder: Path) -> list[tuple[str, bytes]]:
    """Return sound files of every kind: the matrix of file kinds, and raw files."""
    found = [(variant.suffix, variant.make()) for variant in all_variants()]
    light = np.random.default_rng(1).uniform(0.02, 0.7, (48, 64, 3))
    for kind in ("rggb", "linear", "grey", "six"):
        data = write_sensor_file(folder / "x.dng", light, kind=kind).read_bytes()
        found += [(".dng", data)] * 8
    return found


def mutated(data: bytes, chance: random.Random) -> bytes:
    """Damage a file in one to four ways, near its structures as often as in its pixels."""
    changed = bytearray(data)
    for _ in range(chance.choice([1, 1, 1, 2, 4])):
        _WAYS[chance.randrange(len(_WAYS))](changed, chance)
    return bytes(changed)


def _place(data: bytearray, chance: random.Random) -> int:
    reach = chance.choice([len(data), min(len(data), 512), min(len(data), 64)])
    place = chance.randrange(max(reach, 1))
    return place if chance.random() < 0.8 else max(len(data) - 1 - place, 0)


def _flip(data: bytearray, chance: random.Random) -> None:
    if data:
        data[_place(data, chance)] ^= 1 << chance.randrange(8)


def _set(data: bytearray, chance: random.Random) -> None:
    if data:
        data[_place(data, chance)] = chance.choice([0, 1, 127, 128, 255, chance.randrange(256)])


def _word(data: bytearray, chance: random.Random) -> None:
    place, size = _place(data, chance), chance.choice([2, 4, 8])
    value = chance.choice([0, 1, (1 << (8 * size)) - 1, 1 << (8 * size - 1), chance.getrandbits(8 * size)])
    data[place : place + size] = value.to_bytes(size, chance.choice(["little", "big"]))


def _cut_out(data: bytearray, chance: random.Random) -> None:
    place = _place(data, chance)
    del data[place : place + chance.choice([1, 2, 4, 16, 256])]


def _put_in(data: bytearray, chance: random.Random) -> None:
    data[_place(data, chance) : 0] = chance.randbytes(chance.choice([1, 2, 4, 16, 256]))


def _copy(data: bytearray, chance: random.Random) -> None:
    start, end = _place(data, chance), _place(data, chance)
    size = chance.choice([4, 12, 64])
    data[end : end + size] = data[start : start + size]


def _zero(data: bytearray, chance: random.Random) -> None:
    place, size = _place(data, chance), chance.choice([8, 64, 1024])
    data[place : place + size] = bytes(len(data[place : place + size]))


def _end(data: bytearray, chance: random.Random) -> None:
    del data[_place(data, chance) :]


_WAYS: list[Callable[[bytearray, random.Random], None]] = [
    _flip, _set, _word, _cut_out, _put_in, _copy, _zero, _end,
]  # fmt: skip


@pytest.fixture(scope="module")
def mutants(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("mutants")
    sound = seeds(folder)
    (folder / "in").mkdir()
    for number in range(COUNT):
        chance = random.Random(f"{SEED}/{number}")
        suffix, data = sound[number % len(sound)]
        (folder / "in" / f"m{number:06}{suffix}").write_bytes(mutated(data, chance))
    return folder / "in"


@pytest.mark.parametrize("preset", [Recipe(), Recipe(pooling=False)], ids=["shoot", "each"])
def test_every_mutant_is_a_picture_or_one_plain_error(preset: Recipe, mutants: Path, tmp_path: Path) -> None:
    chosen = sorted(mutants.iterdir())[:: 1 if preset.pooling else 5]
    before = {path: path.stat().st_mtime_ns for path in chosen}
    options = Options(pool=Pool(processes=2, timeout_s=60.0), limits=SMALL)
    lines = list(grader.neutralise(chosen, tmp_path / "out", preset=preset, options=options))
    assert len(lines) == len(chosen)
    failed = {line["file"]: line["error"] for line in lines if line["status"] == "failed"}
    strange = {Path(file).name: error for file, error in failed.items() if error["code"] not in OURS}
    assert strange == {}
    assert all(error["message"] and "\n" not in error["message"] for error in failed.values())
    assert len(digests(tmp_path / "out")) == len(lines) - len(failed)
    assert unfinished(tmp_path / "out") == []
    assert {path: path.stat().st_mtime_ns for path in chosen} == before, "originals stay"
    print(f"\n{len(lines)} mutants: {Counter(error['code'] for error in failed.values())}")
    for line in lines[:: max(len(lines) // 50, 1)]:
        if line["status"] == "graded":
            files.read(tmp_path / "out" / line["output"]["file"])
