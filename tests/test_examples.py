"""The example scripts run."""

import importlib.util
import json
from pathlib import Path

import numpy as np
import pytest
import tifffile

from grader.model import Fixed
from grader.preset import make_preset, save_preset

EXAMPLES = Path(__file__).parents[1] / "examples"


def _script(name):
    spec = importlib.util.spec_from_file_location(name, EXAMPLES / f"{name}.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def _page(path, grey, body=""):
    """A copied page: paper with writing, and a grey strip along the top."""
    rng = np.random.default_rng(4)
    pixels = np.full((120, 160, 3), 0.75)
    pixels[30:110:8, 10:150] *= rng.uniform(0.2, 0.9, (10, 140, 1))
    pixels[:12] = 0.45
    extra = [(272, 2, 0, body, True)] if body else []
    encoded = np.rint(np.clip(pixels * grey, 0, 1) * 65535).astype(np.uint16)
    tifffile.imwrite(path, encoded, photometric="rgb", extratags=extra, metadata=None)


def test_watch_grades_what_is_there_and_tells_when_the_light_moves(tmp_path, capsys):
    script = _script("watch_copy_stand")
    incoming = tmp_path / "in"
    incoming.mkdir()
    _page(incoming / "a.tif", (1.0, 1.0, 1.0))
    fixed = Fixed((0.3127, 0.3290), (0.3127, 0.3290))
    save_preset(make_preset("stand", fixed), tmp_path / "stand.json")
    run = [
        str(incoming),
        str(tmp_path / "out"),
        str(tmp_path / "stand.json"),
        "--patch",
        "10%,1%,80%,8%",
        "--once",
    ]
    assert script.main(run) == 0
    assert (tmp_path / "out" / "a.tif").is_file()
    _page(incoming / "b.tif", (1.0, 0.98, 0.90))
    (incoming / "c.tif").write_bytes(b"no picture")
    assert script.main([*run[:1], str(tmp_path / "more"), *run[2:]]) == 4
    told = capsys.readouterr()
    assert "b.tif  Delta E 2000" in told.out
    assert "THE LIGHT HAS MOVED" in told.out
    assert "c.tif" in told.err


def test_watch_waits_until_a_file_stops_growing(tmp_path, monkeypatch):
    script = _script("watch_copy_stand")
    path = tmp_path / "a.tif"
    path.write_bytes(b"1")
    looks = iter([b"12", b"12", b"12"])
    monkeypatch.setattr(script.time, "sleep", lambda _s: path.write_bytes(next(looks)))
    assert next(script.new_files(tmp_path, 1.0, once=False)) == path
    assert len(list(looks)) == 1


def test_split_by_body_gives_each_body_its_folder(tmp_path, capsys):
    script = _script("split_by_body")
    shoot = tmp_path / "shoot"
    shoot.mkdir()
    for name, body in (("a", "Northlight N1"), ("b", "Northlight N2"), ("c", "Northlight N1")):
        _page(shoot / f"{name}.tif", (1.0, 0.97, 0.9), body)
    assert script.main([str(shoot), str(tmp_path / "out"), "--for", "Northlight N2=one-by-one"]) == 0
    made = sorted(p.relative_to(tmp_path / "out").as_posix() for p in (tmp_path / "out").rglob("*.tif"))
    assert made == ["Northlight-N1/a.tif", "Northlight-N1/c.tif", "Northlight-N2/b.tif"]
    assert "2 graded, 0 failed" in capsys.readouterr().out


def test_plot_of_a_log(tmp_path):
    pytest.importorskip("pandas")
    script = _script("plot_log")
    lines = [{"kind": "run"}]
    for i in range(6):
        cast = {"mired": 250.0 + i, "duv": 0.001, "doubt_deg": 1.0}
        for status in ("measured", "planned"):
            lines.append(
                {"kind": "frame", "file": f"{i}.tif", "body": "N1", "status": status, "cast": cast}
                | {"stretch": None if status == "measured" else "A1", "taken_at": f"2031-05-02T10:00:0{i}.25"}
            )
    log = tmp_path / "log.jsonl"
    log.write_text("".join(json.dumps(line) + "\n" for line in lines), encoding="utf-8")
    frames = script.read_frames(log)
    table = script.stretches(frames)
    assert list(table["frames"]) == [6]
    assert table["mired"][0] == pytest.approx(252.5)
    assert len(script.plot(frames).data[0].x) == 6
