"""Names that people, cameras and other systems make: all are graded, told apart, logged and shown safely."""

import json
import os
import re
import shutil
import sys
import unicodedata
from pathlib import Path
from xml.etree import ElementTree as ET

import pytest
import tifffile
from faults.faultkit import comparable, digests, write_shoot

import grader
from grader import cli
from grader.batch import Options
from grader.log import read_log
from grader.options import LOG_NAME
from grader.workers import Pool

NAMES = [
    "two words.tif",
    " leading and trailing .tif",
    "quote'.tif",
    'double".tif',
    "line\nbreak.tif",
    "tab\tand\rreturn.tif",
    "escape\x1b[31m\x07.tif",
    "right\u202eto left.tif",
    "-0.tif",
    "--resume.tif",
    "$(touch gotcha).tif",
    "`touch gotcha`;&|.tif",
    "*?[x].tif",
    "=cmd|' |calc'!A0.tif",
    "<script>alert(1)</script>.tif".replace("/", "\u2215"),
    "%2e%2e..tif.tif",
    "\U0001f3df\ufe0f night.tif",
    "Hall.tif",
    "hall.tif",
    "HALL.TIF",
    unicodedata.normalize("NFC", "Prélude.tif"),
    unicodedata.normalize("NFD", "Prélude.tif"),
    "straße.tif",
    "STRASSE.tif",
    "l" * 240 + ".tif",
]
BYTES = [b"caf\xe9.tif", b"\xff\xfe\x80.tif", b"\xc3\x28.tif"]


@pytest.fixture(scope="module")
def shoot(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Write a frame under each name that this file system takes."""
    folder = tmp_path_factory.mktemp("names") / "shoot"
    one = write_shoot(folder.parent / "one", 1) / "f0000.tif"
    folder.mkdir()
    for name in [*map(os.fsencode, NAMES), *(BYTES if sys.platform == "linux" else [])]:
        try:
            shutil.copy(one, folder / os.fsdecode(name))
        except OSError:
            continue
    assert len(list(folder.iterdir())) > 20
    return folder


def test_every_name_is_graded_once_and_known_again(shoot: Path, tmp_path: Path) -> None:
    out, count = tmp_path / "out", len(list(shoot.iterdir()))
    lines = list(grader.neutralise([shoot], out))
    assert [line["status"] for line in lines] == ["graded"] * count
    assert len(digests(out)) == count
    assert len({unicodedata.normalize("NFC", name).casefold() for name in digests(out)}) == count
    assert {line["file"] for line in read_log(out / LOG_NAME).latest()} == {str(p) for p in shoot.iterdir()}
    before = {path: path.stat().st_mtime_ns for path in out.rglob("*.tif")}
    again = list(grader.neutralise([shoot], out, options=Options(resume=True)))
    assert [line["status"] for line in again] == ["graded"] * count
    assert {path: path.stat().st_mtime_ns for path in out.rglob("*.tif")} == before
    assert all(finding.problem is None for finding in grader.check(out))


def test_workers_know_them_too(shoot: Path, tmp_path: Path) -> None:
    list(grader.neutralise([shoot], tmp_path / "one"))
    list(grader.neutralise([shoot], tmp_path / "two", options=Options(pool=Pool(processes=2))))
    assert digests(tmp_path / "one") == digests(tmp_path / "two")
    assert comparable(tmp_path / "one") == comparable(tmp_path / "two")


def test_what_is_written_for_people_and_spreadsheets_is_harmless(
    shoot: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    broken = tmp_path / "in" / "broken\x1b]0;gotcha\x07\n.tif"
    broken.parent.mkdir()
    broken.write_bytes(b"II*\0nothing")
    files = ["--report", "report.html", "--csv", "frames.csv"]
    code = cli.run(["neutralise", str(shoot), str(broken), "--out", "out", "--workers", "0", *files[:2]])
    assert code == 3
    assert cli.run(["report", f"out/{LOG_NAME}", "--csv", "frames.csv"]) == 0
    said = capsys.readouterr().err
    assert "broken\\x1b]0;gotcha\\x07\\n.tif" in said
    assert not re.search(r"[\x00-\x08\x0b-\x1f\x7f\u202e]", said)
    html = (tmp_path / "report.html").read_text(encoding="utf-8")
    assert "<script>alert" not in html
    table = (tmp_path / "frames.csv").read_text(encoding="utf-8")
    # OWASP, "CSV Injection": cells must not begin with = + - @, tab or return.
    assert not re.search(r'(^|[,;\n])"?[=+@\t\r]', table)
    assert "gotcha" not in {path.name for path in tmp_path.rglob("*")}


def test_the_log_stays_json_for_other_readers(shoot: Path, tmp_path: Path) -> None:
    list(grader.neutralise([shoot], tmp_path / "out"))
    lines = (tmp_path / "out" / LOG_NAME).read_bytes().split(b"\n")[:-1]
    assert lines
    for line in lines:
        assert isinstance(json.loads(line.decode("utf-8"), parse_constant=pytest.fail), dict)


def test_the_source_is_named_in_xmp_that_other_readers_can_parse(shoot: Path, tmp_path: Path) -> None:
    # expat is the outside reader: it refuses characters that XML 1.0 does not have.
    list(grader.neutralise([shoot], tmp_path / "out"))
    written = list((tmp_path / "out").glob("*.tif"))
    assert written
    for path in written:
        with tifffile.TiffFile(path) as tif:
            packet = tif.pages.first.tags[700].value
        assert b"SourceFile" in packet
        ET.fromstring(bytes(packet))
