"""The log: what is written comes back, torn lines are repaired, nothing is NaN."""

import json
from pathlib import Path

import jsonschema
import numpy as np
import pytest

from grader.errors import DamagedFile, MissingFile, UnsupportedFile
from grader.log import (
    LogWriter,
    cast_from_line,
    encode_line,
    failed_line,
    graded_line,
    measured_line,
    planned_line,
    read_log,
    run_line,
)
from grader.model import Cast, Correction, Counts, Evidence, Header, Reading, Sensor, Written

SCHEMA = json.loads((Path(__file__).parents[1] / "docs" / "log.schema.json").read_text(encoding="utf-8"))
RUN = run_line(
    version="1",
    command=["measure", "x"],
    preset={"name": "p", "kind": "recipe", "digest": "0" * 64},
    started="2031-05-04T18:00:00+02:00",
)


def valid(line: dict) -> dict:
    line = json.loads(encode_line(line))
    jsonschema.validate(line, SCHEMA)
    return line


def a_cast(**changes: object) -> Cast:
    third = 1 / 3
    header = Header(
        file="a.dng",
        format="raw",
        referred="scene",
        body="Northlight N1 7",
        taken_at="2031-05-04T18:21:07.25+02:00",
        iso=800.0,
        flash=False,
        sha256="ab" * 32,
        daylight_from_decoded=np.array([[third, 0.1, 0.0], [0.0, 1.0, 0.0], [1e-17, 0.0, 2.0]]),
        sensor=Sensor(np.eye(3) * third, np.array([0.5, 1.0, 0.6]), np.array([0.4, 1.0, 0.8])),
        notes=("half size",),
    )
    values = {
        "yellow_blue": 0.1,
        "green_magenta": -0.01,
        "white_xy": (0.44, 0.40),
        "cct_k": 2900.0,
        "duv": 0.001,
        "mired": 344.8,
        "delta_e_2000": 21.0,
        "doubt_deg": 1.5,
        "readings": {"grey-world": Reading(0.12, 0.0)},
        "flags": ("dark",),
        "evidence": Evidence("v1", np.arange(256, dtype=np.uint8), 4000),
    }
    return Cast(header=header, **(values | changes))


def test_every_kind_of_line_fits_the_published_schema() -> None:
    measured = valid(measured_line("a.dng", a_cast(), seconds=0.1))
    correction = Correction(
        from_xy=(0.44, 0.40), toward_xy=(0.3127, 0.329), matrix=np.eye(3), reason="its own"
    )
    planned = valid(planned_line(measured, correction, residual={"yellow_blue": 0.0, "green_magenta": 0.0}))
    assert "evidence" not in planned
    graded = graded_line(planned, Written("a.tif", "cd" * 32, "tiff", "sRGB", notes=("n",)), Counts(0.1, 0.2))
    assert valid(graded)["notes"] == ["half size", "n"]
    valid(failed_line("b.tif", DamagedFile("cut", hint="copy it again")))
    valid(RUN)


def test_a_frame_without_a_light_fits_too() -> None:
    line = valid(measured_line("b.tif", Cast(header=Header(), flags=("nothing-measured",))))
    assert line["cast"]["white_xy"] is None
    back = cast_from_line(line)
    assert back.white_xy is None
    assert back.evidence is None


def test_a_measured_cast_comes_back_to_the_last_bit() -> None:
    cast = a_cast()
    back = cast_from_line(json.loads(encode_line(measured_line("a.dng", cast))))
    assert back.white_xy == cast.white_xy
    assert back.readings == dict(cast.readings)
    assert back.header.taken_at == cast.header.taken_at
    np.testing.assert_array_equal(back.header.daylight_from_decoded, cast.header.daylight_from_decoded)
    np.testing.assert_array_equal(back.header.sensor.as_shot_neutral, cast.header.sensor.as_shot_neutral)
    np.testing.assert_array_equal(back.evidence.log_likelihood, cast.evidence.log_likelihood)


def test_a_bomb_in_the_evidence_stays_small() -> None:
    line = measured_line("a.dng", a_cast(evidence=Evidence("v1", np.zeros(10_000_000, np.uint8), 1)))
    assert cast_from_line(line).evidence.log_likelihood.size <= 1 << 16


@pytest.mark.parametrize(
    "damage", [{"cast": None}, {"header": {}}, {"readings": {"x": {"y": 1}}}, {"evidence": {}}]
)
def test_a_measured_line_of_a_strangers_making_is_a_plain_error(damage: dict) -> None:
    with pytest.raises(DamagedFile, match="measured line"):
        cast_from_line(measured_line("a.dng", a_cast()) | damage)


def test_nan_never_reaches_the_log() -> None:
    with pytest.raises(ValueError, match="JSON"):
        encode_line({"seconds": float("nan")})


def test_names_that_are_no_utf_8_come_back() -> None:
    name = b"caf\xe9.tif".decode("utf-8", "surrogateescape")
    assert json.loads(encode_line({"file": name}))["file"] == name


def write(path: Path, *lines: dict) -> None:
    writer = LogWriter(path)
    for line in lines:
        writer.write(line)
    writer.close()


def test_the_later_line_stands(tmp_path: Path) -> None:
    measured = measured_line("a.dng", a_cast())
    failed = failed_line("a.dng", UnsupportedFile("no"))
    write(tmp_path / "log", RUN, measured, failed, {"kind": "summary", "frames": 1})
    log = read_log(tmp_path / "log")
    assert [line["status"] for line in log.latest()] == ["failed"]
    assert log.summary == {"kind": "summary", "frames": 1}
    assert [line["kind"] for line in log.records()] == ["run", "frame", "summary"]


def test_a_torn_last_line_is_left_out_and_written_over(tmp_path: Path) -> None:
    path = tmp_path / "log"
    write(path, RUN, failed_line("a.dng", UnsupportedFile("no")))
    whole = path.stat().st_size
    with path.open("ab") as file:
        file.write(b'{"kind":"frame","file":"b')
    log = read_log(path)
    assert log.torn
    assert log.good_bytes == whole
    writer = LogWriter(path, keep_bytes=log.good_bytes)
    writer.write(failed_line("c.dng", UnsupportedFile("no")))
    writer.close()
    assert list(read_log(path).lines) == ["a.dng", "c.dng"]


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"", "no run line"),
        (b"hello\nworld\n", "line 1"),
        (b'[1]\n{"kind":"run"}\n', "line 1"),
        (b'{"kind":"run","schema":"grader-log/9"}\n', "schema"),
        (b"\xff\xfe\n\n", "line 1"),
    ],
)
def test_what_is_no_log_is_refused(tmp_path: Path, content: bytes, words: str) -> None:
    (tmp_path / "log").write_bytes(content)
    with pytest.raises(DamagedFile, match=words):
        read_log(tmp_path / "log")


def test_a_missing_log(tmp_path: Path) -> None:
    with pytest.raises(MissingFile):
        read_log(tmp_path / "none")
