"""``grader export``: corrections as files for other systems, from a preset or from a run's log."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator, Mapping
from os import PathLike
from pathlib import Path
from typing import Any

from grader import cast as casts
from grader import clf
from grader.atomic import write_atomic
from grader.errors import DamagedFile, PresetError, WriteFailed
from grader.log import correction_from_line, read_log
from grader.model import Correction, Fixed, Header
from grader.preset import load_preset

Written = dict[str, Any]


def export_preset(
    name_or_path: str, out: str | PathLike[str], *, space: str = "sRGB", overwrite: bool = False
) -> Iterator[Written]:
    """Write a fixed preset as a Common LUT Format file and as JSON.

    Parameters
    ----------
    name_or_path : str
        The preset.
    out : path-like
        Folder for the files; made if it is not there.
    space : str
        Colour space of the pictures that the file is for.
    overwrite : bool
        Replace files that are there already.

    Yields
    ------
    dict
        ``file`` and what it holds.

    Raises
    ------
    PresetError
        The preset is a recipe: what it does depends on the frames.
    WriteFailed
        A file could not be written.
    """
    preset = load_preset(name_or_path)
    if not isinstance(preset.settings, Fixed):
        raise PresetError(
            f"preset {preset.name!r} is a recipe; its corrections depend on the frames",
            hint="run it and export the log, or make a fixed preset with: grader sample",
        )
    correction = casts.fixed_correction(preset.settings, Header())
    yield from _write_pair(
        correction,
        _folder(out),
        preset.name,
        space,
        preset.description,
        preset.settings.output.exposure_ev,
        overwrite,
    )


def export_log(
    log: str | PathLike[str], out: str | PathLike[str], *, space: str = "sRGB", overwrite: bool = False
) -> Iterator[Written]:
    """Write one Common LUT Format file for each stretch of a run, and one JSON of every frame's matrix.

    A stretch whose light moved has several corrections: the file holds the middle one, and says so.
    Raw frames are left out of the first (their matrix acts on the decoded raw); their ``sensor_multipliers``
    are in the JSON.
    """
    lines = [line for line in read_log(log).latest() if line.get("correction")]
    if not lines:
        raise DamagedFile(
            "there is no correction in this log", path=log, hint="run grader measure or neutralise first"
        )
    folder = _folder(out)
    stretches: dict[str, list[Mapping[str, Any]]] = {}
    for line in lines:
        if line["correction"].get("sensor_multipliers") is None:
            stretches.setdefault(str(line.get("stretch") or Path(line["file"]).name), []).append(line)
    for stretch, members in stretches.items():
        middle = members[len(members) // 2]
        text = f"Stretch {stretch}: {len(members)} frames, the correction of {Path(middle['file']).name}."
        yield from _write_pair(
            correction_from_line(middle), folder, f"stretch-{stretch}", space, text, 0.0, overwrite
        )
    frames = [{"file": line["file"], "stretch": line.get("stretch"), **line["correction"]} for line in lines]
    target = folder / "frames.json"
    write_atomic(target, (json.dumps({"frames": frames}, indent=1) + "\n").encode(), overwrite=overwrite)
    yield {"file": str(target), "kind": "json", "frames": len(frames)}


def _write_pair(
    correction: Correction,
    folder: Path,
    name: str,
    space: str,
    text: str,
    exposure_ev: float,
    overwrite: bool,
) -> Iterator[Written]:
    stem = re.sub(r"[^\w.-]+", "-", name).strip(".-") or "correction"
    look = folder / f"{stem}.clf"
    clf.write_clf(
        correction, space, look, title=name, description=text, exposure_ev=exposure_ev, overwrite=overwrite
    )
    yield {"file": str(look), "kind": "clf", "space": space}
    plain = folder / f"{stem}.json"
    matrix = clf.matrix_json(correction, space, exposure_ev=exposure_ev)
    write_atomic(plain, (json.dumps(matrix, indent=1) + "\n").encode(), overwrite=overwrite)
    yield {"file": str(plain), "kind": "json", "space": space}


def _folder(out: str | PathLike[str]) -> Path:
    folder = Path(out)
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise WriteFailed(f"the folder cannot be made ({error.strerror or error})", path=folder) from error
    return folder
