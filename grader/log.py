"""The log: JSON Lines, one object a line, flushed as each frame ends; and back again.

Format ``grader-log/1``, published as ``docs/log.schema.json``.  For one file the later line stands.
"""

from __future__ import annotations

import base64
import json
import os
import zlib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, fields
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np

from grader.errors import DamagedFile, GraderError, MissingFile, WriteFailed
from grader.model import Cast, Correction, Counts, Evidence, Header, Reading, Sensor, Written

SCHEMA = "grader-log/1"
FINISHED = ("graded", "failed", "skipped")
Line = dict[str, Any]

_MAX_LINE_BYTES = 1 << 20
_MAX_CANDIDATES = 1 << 16


def encode_line(line: Mapping[str, Any]) -> bytes:
    r"""Return one line of the log, newline included; never NaN or Infinity.

    Examples
    --------
    >>> encode_line({"kind": "frame", "file": "é.tif"}).decode()
    '{"kind":"frame","file":"é.tif"}\n'
    """
    compact = {"allow_nan": False, "separators": (",", ":")}
    try:
        return (json.dumps(line, ensure_ascii=False, **compact) + "\n").encode()  # type: ignore[arg-type]
    except UnicodeEncodeError:  # a file name that is no UTF-8: keep its bytes as escapes
        return (json.dumps(line, ensure_ascii=True, **compact) + "\n").encode()  # type: ignore[arg-type]


class LogWriter:
    """Append lines to a log, each flushed to the system as it is written."""

    def __init__(self, path: str | os.PathLike[str], *, keep_bytes: int | None = None) -> None:
        """Open ``path``; keep its first ``keep_bytes`` (a log that is continued), else start anew."""
        self.path = Path(path)
        try:
            self.path.parent.mkdir(parents=True, exist_ok=True)
            self._file: BinaryIO = self.path.open("wb" if keep_bytes is None else "r+b")
            if keep_bytes is not None:
                self._file.truncate(keep_bytes)
                self._file.seek(keep_bytes)
        except OSError as error:
            raise self._failed(error) from error

    def write(self, line: Mapping[str, Any]) -> None:
        """Write one line."""
        try:
            self._file.write(encode_line(line))
            self._file.flush()
        except OSError as error:
            raise self._failed(error) from error

    def close(self) -> None:
        """Flush to the disk and close."""
        if self._file.closed:
            return
        try:
            self._file.flush()
            os.fsync(self._file.fileno())
        except OSError as error:
            raise self._failed(error) from error
        finally:
            self._file.close()

    def _failed(self, error: OSError) -> WriteFailed:
        return WriteFailed(
            f"the log cannot be written ({error.strerror or error})",
            path=self.path,
            hint="choose another place with --log FILE, or free some space",
        )


@dataclass(slots=True)
class Log:
    """A log that was read: the run line, the lines of each file by status, the summary."""

    run: Line = field(default_factory=dict)
    lines: dict[str, dict[str, Line]] = field(default_factory=dict)
    summary: Line | None = None
    good_bytes: int = 0
    """Length of the part that is whole; what follows is a torn last line."""
    torn: bool = False

    def latest(self) -> list[Line]:
        """Return the line that stands for each file, in the order of first mention."""
        return [next(reversed(by_status.values())) for by_status in self.lines.values()]

    def records(self) -> list[Line]:
        """Return the run line, the line that stands for each file, and the summary if there is one."""
        return [self.run, *self.latest(), *([] if self.summary is None else [self.summary])]

    def add(self, line: Line) -> None:
        """Take one more line: the later line for a file stands."""
        kind = line.get("kind")
        if kind == "run":
            self.run = line
        elif kind == "summary":
            self.summary = line
        elif kind == "frame" and isinstance(line.get("file"), str):
            by_status = self.lines.setdefault(line["file"], {})
            by_status.pop(str(line.get("status")), None)
            by_status[str(line.get("status"))] = line


def read_log(path: str | os.PathLike[str]) -> Log:
    """Read a log; a torn last line is left out and noted, damage before it is an error.

    Raises
    ------
    MissingFile
        The log cannot be opened.
    DamagedFile
        A line is not JSON, or the file is no log of a schema that this version reads.
    """
    log = Log()
    try:
        with Path(path).open("rb") as file:
            _read_lines(file, log, os.fspath(path))
    except OSError as error:
        raise MissingFile(f"the log cannot be opened ({error.strerror or error})", path=path) from error
    if not log.run:
        raise DamagedFile("this is no grader log: it has no run line", path=path)
    return log


def _read_lines(file: BinaryIO, log: Log, path: str) -> None:
    number = 0
    while raw := file.readline(_MAX_LINE_BYTES):
        number += 1
        try:
            line = json.loads(raw) if raw.endswith(b"\n") else None
        except ValueError:
            line = None
        if not isinstance(line, dict):
            if not file.read(1):
                log.torn = True
                return
            raise DamagedFile(f"line {number} of the log is not a JSON object", path=path, hint="run anew")
        if line.get("kind") == "run" and line.get("schema") != SCHEMA:
            raise DamagedFile(
                f"the log has schema {line.get('schema')!r}; this version reads {SCHEMA!r}",
                path=path,
                hint="measure the frames again with this version",
            )
        log.add(line)
        log.good_bytes += len(raw)


# ---------------------------------------------------------------- values -> lines


def run_line(
    *, version: str, command: Iterable[str], preset: Mapping[str, Any], started: str, **facts: Any
) -> Line:
    """Return the first line of a log."""
    return {
        "kind": "run",
        "schema": SCHEMA,
        "version": version,
        "command": list(command),
        "preset": dict(preset),
        "started": started,
        **facts,
    }


def failed_line(file: str, error: GraderError, *, base: Mapping[str, Any] | None = None) -> Line:
    """Return the line of a frame that failed: what happened and what to do."""
    line = dict(base or {"kind": "frame", "file": file})
    line["status"] = "failed"
    line["error"] = {"code": error.code, "message": error.message, "hint": error.hint}
    return line


def measured_line(file: str, cast: Cast, *, seconds: float | None = None) -> Line:
    """Return the line of a measured frame: header, readings, cast, flags, evidence."""
    header = cast.header
    return {
        "kind": "frame",
        "file": file,
        "sha256": header.sha256,
        "body": header.body,
        "taken_at": header.taken_at,
        "status": "measured",
        "readings": {
            name: {"yellow_blue": r.yellow_blue, "green_magenta": r.green_magenta}
            for name, r in cast.readings.items()
        },
        "cast": _cast_object(cast),
        "stretch": None,
        "flags": list(dict.fromkeys((*header.flags, *cast.flags))),
        "notes": list(header.notes),
        "header": _header_object(header),
        "evidence": None if cast.evidence is None else _evidence_object(cast.evidence),
        "error": None,
        "seconds": seconds,
    }


def planned_line(
    measured: Mapping[str, Any], correction: Correction, *, residual: Mapping[str, float] | None, **facts: Any
) -> Line:
    """Return the line of a planned frame: the measured line with its stretch and correction."""
    line = {key: value for key, value in measured.items() if key not in {"evidence", "header", "seconds"}}
    line |= {
        "status": "planned",
        "stretch": correction.stretch,
        "flags": list(dict.fromkeys((*measured["flags"], *correction.flags))),
        "correction": correction_object(correction),
        "residual": None if residual is None else dict(residual),
        **facts,
    }
    return line


def graded_line(
    planned: Mapping[str, Any], written: Written, counts: Counts, *, seconds: float | None = None
) -> Line:
    """Return the line of a graded frame: the planned line with its output."""
    line = dict(planned)
    line |= {
        "status": "graded",
        "output": {
            "file": written.file,
            "sha256": written.sha256,
            "format": written.format,
            "space": written.space,
            "clipped_fraction": counts.clipped_fraction,
            "out_of_gamut_fraction": counts.out_of_gamut_fraction,
        },
        "notes": [*planned.get("notes", []), *written.notes],
        "seconds": seconds,
    }
    return line


def correction_object(correction: Correction) -> Line:
    """Return a correction as it stands in the log."""
    return {
        "from_xy": None if correction.from_xy is None else list(correction.from_xy),
        "toward_xy": list(correction.toward_xy),
        "shift_mired": correction.shift_mired,
        "shift_duv": correction.shift_duv,
        "transform": correction.transform,
        "degree": correction.degree,
        "keep": {
            "yellow_blue": correction.keep_yellow_blue,
            "green_magenta": correction.keep_green_magenta,
        },
        "matrix": np.asarray(correction.matrix, dtype=float).tolist(),
        "doubt_deg": correction.doubt_deg,
        "reason": correction.reason,
    }


def correction_from_line(line: Mapping[str, Any]) -> Correction:
    """Rebuild the correction of a planned or graded line.

    Raises
    ------
    DamagedFile
        The line does not hold what such a line holds.
    """
    try:
        given = line["correction"]
        keep = given["keep"]
        return Correction(
            from_xy=None if given["from_xy"] is None else (given["from_xy"][0], given["from_xy"][1]),
            toward_xy=(given["toward_xy"][0], given["toward_xy"][1]),
            matrix=np.array(given["matrix"], dtype=np.float64).reshape(3, 3),
            transform=given["transform"],
            degree=given["degree"],
            keep_yellow_blue=keep["yellow_blue"],
            keep_green_magenta=keep["green_magenta"],
            shift_mired=given["shift_mired"],
            shift_duv=given["shift_duv"],
            stretch=line.get("stretch"),
            doubt_deg=given.get("doubt_deg"),
            reason=given["reason"],
        )
    except (KeyError, TypeError, ValueError, IndexError) as error:
        raise DamagedFile(
            f"a planned line of the log cannot be used ({error})", path=line.get("file"), hint="run anew"
        ) from error


def _cast_object(cast: Cast) -> Line:
    return {
        "yellow_blue": cast.yellow_blue,
        "green_magenta": cast.green_magenta,
        "white_xy": None if cast.white_xy is None else list(cast.white_xy),
        "cct_k": cast.cct_k,
        "duv": cast.duv,
        "mired": cast.mired,
        "delta_e_2000": cast.delta_e_2000,
        "doubt_deg": cast.doubt_deg,
        "opponent": cast.opponent,
    }


_HEADER_FIELDS = (
    "format", "width_px", "height_px", "referred", "exposure_time_s", "f_number", "iso", "flash", "orientation",
)  # fmt: skip


def _header_object(header: Header) -> Line:
    line: Line = {name: getattr(header, name) for name in _HEADER_FIELDS}
    line["daylight_from_decoded"] = _list_or_none(header.daylight_from_decoded)
    line["sensor"] = (
        None
        if header.sensor is None
        else {f.name: np.asarray(getattr(header.sensor, f.name)).tolist() for f in fields(Sensor)}
    )
    return line


def _list_or_none(array: Any) -> list[Any] | None:
    return None if array is None else np.asarray(array, dtype=float).tolist()


def _evidence_object(evidence: Evidence) -> Line:
    packed = zlib.compress(np.ascontiguousarray(evidence.log_likelihood, dtype=np.uint8).tobytes(), 6)
    return {"grid": evidence.grid, "cells": evidence.cells, "zlib": base64.b64encode(packed).decode()}


# ---------------------------------------------------------------- lines -> values


def cast_from_line(line: Mapping[str, Any]) -> Cast:
    """Rebuild a measured cast from its line, so that a shoot can be planned again without decoding.

    Raises
    ------
    DamagedFile
        The line does not hold what a measured line holds.
    """
    try:
        return _cast_from_line(line)
    except (KeyError, TypeError, ValueError, AttributeError, zlib.error) as error:
        raise DamagedFile(
            f"a measured line of the log cannot be used ({error})", path=line.get("file"), hint="run anew"
        ) from error


def _cast_from_line(line: Mapping[str, Any]) -> Cast:
    cast, header = line["cast"], line["header"]
    sensor = header["sensor"]
    return Cast(
        header=Header(
            file=line["file"],
            body=line["body"],
            taken_at=line["taken_at"],
            sha256=line["sha256"],
            daylight_from_decoded=_array_or_none(header["daylight_from_decoded"]),
            sensor=None if sensor is None else Sensor(**{k: np.array(v, float) for k, v in sensor.items()}),
            notes=tuple(line["notes"]),
            **{name: header[name] for name in _HEADER_FIELDS},
        ),
        white_xy=None if cast["white_xy"] is None else (cast["white_xy"][0], cast["white_xy"][1]),
        readings={name: Reading(**reading) for name, reading in line["readings"].items()},
        flags=tuple(line["flags"]),
        evidence=None if line["evidence"] is None else _evidence_from(line["evidence"]),
        **{k: v for k, v in cast.items() if k != "white_xy"},
    )


def _array_or_none(value: Any) -> Any:
    return None if value is None else np.array(value, dtype=np.float64).reshape(3, 3)


def _evidence_from(value: Mapping[str, Any]) -> Evidence:
    packed = base64.b64decode(value["zlib"], validate=True)
    raw = zlib.decompressobj().decompress(packed, _MAX_CANDIDATES)
    return Evidence(
        grid=value["grid"], log_likelihood=np.frombuffer(raw, np.uint8), cells=int(value["cells"])
    )
