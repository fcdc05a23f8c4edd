"""Memory and disk are foreseen from headers: fewer frames side by side rather than a machine that swaps."""

import sys
from pathlib import Path

import imagecodecs
import numpy as np
import pytest
import tifffile
from faults.faultkit import write_shoot
from PIL import Image

from grader import cli, files, room, workers
from grader.errors import WorkerFailed
from grader.files.extent import Extent, extent
from grader.model import Output, ReadLimits
from grader.room import Sizes
from grader.workers import Pool
from tests.files.conftest import write_sensor_file

GB = 1 << 30
RAW_24 = Extent("raw", 6000, 4000, 2)


def sizes(*pictures: Extent) -> Sizes:
    named = {f".{number}": picture for number, picture in enumerate(pictures)}
    return Sizes(dict.fromkeys(named, 10_000_000), dict.fromkeys(named, 100), named)


def test_the_header_tells_what_the_decoder_finds(tmp_path: Path) -> None:
    # tifffile, imagecodecs and Pillow write; grader's own readers decode.
    grey = np.zeros((30, 50), np.uint16)
    tifffile.imwrite(tmp_path / "a.tif", np.dstack([grey] * 3), photometric="rgb")
    tifffile.imwrite(tmp_path / "f.tif", np.zeros((30, 50, 3), np.float32), photometric="rgb")
    (tmp_path / "a.png").write_bytes(imagecodecs.png_encode(np.dstack([grey] * 3)))
    Image.new("RGB", (50, 30)).save(tmp_path / "b.png")
    Image.new("RGB", (50, 30)).save(tmp_path / "a.jpg")
    write_sensor_file(tmp_path / "a.dng", np.full((30, 50, 3), 0.2))
    for name, kind, sample_bytes in (
        ("a.tif", "tiff", 2),
        ("f.tif", "tiff", 4),
        ("a.png", "png", 2),
        ("b.png", "png", 1),
        ("a.jpg", "jpeg", 1),
        ("a.dng", "raw", 2),
    ):
        frame = files.read(tmp_path / name)
        assert extent(tmp_path / name) == Extent(kind, 50, 30, sample_bytes)
        assert (frame.header.width_px, frame.header.height_px) == (50, 30)
        assert frame.pixels.dtype.itemsize == sample_bytes


def test_as_many_frames_at_a_time_as_memory_holds() -> None:
    pool, notes = room.fitted(Pool(processes=8), sizes(RAW_24), 8 * GB)
    assert pool.processes == 4 * GB // room.peak_bytes(RAW_24) == 3
    assert pool.worker_bytes == 4 * GB // 3
    assert "3 frames at a time instead of 8" in notes[0]
    pool, notes = room.fitted(Pool(processes=2), sizes(RAW_24), 64 * GB)
    assert (pool.processes, notes) == (2, [])


def test_one_frame_at_a_time_at_the_least_with_all_that_is_free() -> None:
    pool, notes = room.fitted(Pool(processes=4), sizes(RAW_24), GB)
    assert pool.processes == 1
    assert pool.worker_bytes == GB * 9 // 10
    assert "1 frame at a time" in notes[0]


def test_what_was_asked_for_is_kept_to() -> None:
    pool, _ = room.fitted(Pool(processes=4, memory_bytes=2 * GB), sizes(RAW_24), 64 * GB)
    assert (pool.processes, pool.worker_bytes) == (1, 2 * GB)
    assert room.alone(Pool(processes=4, memory_bytes=2 * GB)).worker_bytes == 2 * GB
    assert room.alone(Pool(processes=4)).processes == 1


def test_nothing_is_bounded_where_nothing_is_known_or_nothing_runs_beside() -> None:
    for pool in (Pool(), Pool(cluster="local:4"), Pool(processes=4)):
        assert room.fitted(pool, sizes(RAW_24), None) == (pool, [])
    assert room.make_room(Pool(), ["nothing.tif"], ReadLimits(), None, None) == (Pool(), [])


def test_free_memory_is_what_the_system_says() -> None:
    psutil = pytest.importorskip("psutil")
    free = room.free_memory()
    assert free is not None
    assert 0 < free <= psutil.virtual_memory().total


def test_results_are_sized_by_what_they_become() -> None:
    raw, tiff = sizes(RAW_24), sizes(Extent("tiff", 6000, 4000, 2))
    assert room.output_bytes(raw, Output()) == 100 * 24_000_000 * 6
    assert room.output_bytes(raw, Output(format="jpeg")) == 100 * 24_000_000
    assert room.output_bytes(raw, Output(format="dng")) == 11_000_000
    assert room.output_bytes(tiff, Output()) == 11_000_000
    assert room.output_bytes(tiff, Output(format="png")) == 100 * 24_000_000 * 6


def test_the_command_line_tells_that_it_takes_fewer_workers(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    shoot = write_shoot(tmp_path / "shoot", 2)
    command = ["measure", str(shoot), "--log", str(tmp_path / "log"), "--workers", "3", "--memory", "600M"]
    assert cli.run(command) == 0
    assert "note: 1 frame at a time instead of 3" in capsys.readouterr().err


def hoard(size: int) -> int:
    return len(bytearray(size))


@pytest.mark.skipif(sys.platform != "linux", reason="RLIMIT_DATA bounds allocations on Linux alone")
def test_a_worker_may_not_take_more_than_its_share() -> None:
    pool = Pool(processes=1, worker_bytes=GB)
    outcomes = {outcome.job: outcome for outcome in workers.run(hoard, [GB // 4, 2 * GB, GB // 2], pool)}
    assert outcomes[GB // 4].result == GB // 4
    assert outcomes[GB // 2].result == GB // 2, "the worker goes on after it was refused memory"
    assert isinstance(outcomes[2 * GB].error, WorkerFailed)
    assert "memory" in outcomes[2 * GB].error.message
