"""The README's sessions run exactly as they are written."""

import os
import re
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
SESSIONS = dict(re.findall(r"<!-- session: (\S+) -->\n```console\n(.*?)```", README, re.DOTALL))


def commands(session: str) -> list[str]:
    return [line[2:] for line in session.splitlines() if line.startswith("$ ")]


def test_the_jobs_are_there() -> None:
    assert {"neutralise", "drift", "bodies", "preset"} <= set(SESSIONS)
    assert all(commands(session) for session in SESSIONS.values())


@pytest.mark.parametrize("name", SESSIONS)
def test_a_session_runs_as_written(name: str, tmp_path: Path) -> None:
    shutil.copytree(ROOT / "sample_images", tmp_path / "sample_images")
    environment = {**os.environ, "PATH": f"{Path(sys.executable).parent}{os.pathsep}{os.environ['PATH']}"}
    for command in commands(SESSIONS[name]):
        done = subprocess.run(
            ["bash", "-c", command],
            cwd=tmp_path,
            env=environment,
            capture_output=True,
            text=True,
            check=False,
        )
        assert done.returncode == 0, f"{command}\n{done.stdout[-2000:]}\n{done.stderr[-2000:]}"
    assert {path.name for path in (tmp_path / "sample_images").iterdir()} == {
        path.name for path in (ROOT / "sample_images").iterdir()
    }, "a session wrote among the originals"


def test_the_first_paragraph_tells_the_job() -> None:
    assert "neutralises whole photo shoots" in README.split("\n\n")[1]


def test_links_lead_somewhere() -> None:
    for target in re.findall(r"\]\(([^)#]+)\)", README):
        assert (ROOT / target).exists(), target
