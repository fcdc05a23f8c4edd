"""A long run holds no more handles, memory or files at its end than after its start.

``GRADER_SOAK_FRAMES=5000`` makes it as long as a large shoot.
"""

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

FRAMES = int(os.environ.get("GRADER_SOAK_FRAMES", "240"))
WORKER_PER_FRAME, PARENT_PER_FRAME, NOISE = 4_000, 20_000, 2_000_000
"""A leaked frame of this test takes 6,720 bytes as pixels and 26,880 as linear light; the parent keeps a record
of each frame for the summary and the report.  [bytes]"""


def test_a_long_run_leaks_nothing(tmp_path: Path) -> None:
    pytest.importorskip("psutil")
    (tmp_path / "tmp").mkdir()
    done = subprocess.run(
        [sys.executable, Path(__file__).with_name("soak.py"), tmp_path, str(FRAMES)],
        env=os.environ | {"TMPDIR": str(tmp_path / "tmp")},
        capture_output=True,
        text=True,
        check=False,
        timeout=3000,
    )
    assert done.returncode == 0, done.stderr
    told = json.loads(done.stdout)
    assert (told["graded"], told["outputs"]) == (FRAMES, FRAMES)
    assert told["unfinished"] == []
    assert told["temporary"] == []
    for stage in ("measure", "grade"):
        samples = [s for s in told["samples"] if s["stage"] == stage]
        early, late = samples[len(samples) // 4], samples[-1]
        frames = late["done"] - early["done"]
        for who, per_frame in (("worker", WORKER_PER_FRAME), ("parent", PARENT_PER_FRAME)):
            grown = late[who]["rss"] - early[who]["rss"]
            assert grown <= per_frame * frames + NOISE, f"{who} grew by {grown / frames:.0f} bytes a frame"
            assert late[who]["threads"] == early[who]["threads"]
            handles = [sample[who]["handles"] for sample in samples]
            assert max(handles) <= min(handles) + 2, f"handles of the {who} while {stage}: {handles}"
