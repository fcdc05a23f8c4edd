"""The lines of the log: from values, and back again.

Format ``grader-log/1``, published as ``docs/log.schema.json``; `grader.log_file` has the file.
"""

from __future__ import annotations

import base64
import math
import re
import zlib
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import fields
from typing import Any, NoReturn, get_args

import numpy as np
from numpy.typing import NDArray

from grader.errors import DamagedFile, GraderError
from grader.log_file import FINISHED, SCHEMA, Line, Log, LogWriter, encode_line, read_log
from grader.model import (
    Cast,
    Correction,
    Counts,
    Evidence,
    Header,
    Opponent,
    Reading,
    Referred,
    Sensor,
    Transform,
    Written,
)

__all__ = [
    "FINISHED",
    "SCHEMA",
    "Line",
    "Log",
    "LogWriter",
    "cast_from_line",
    "correction_from_line",
    "correction_object",
    "encode_line",
    "failed_line",
    "graded_line",
    "measured_line",
    "planned_line",
    "read_log",
    "run_line",
    "written_from_line",
]

_MAX_CANDIDATES = 1 << 16
_MAX_ARRAY = 64
_FORMATS = ("raw", "tiff", "jpeg", "png", "array")
_CAST_NUMBERS = ("yellow_blue", "green_magenta", "cct_k", "duv", "mired", "delta_e_2000", "doubt_deg")


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


def failed_line(
    file: str,
    error: GraderError,
    *,
    base: Mapping[str, Any] | None = None,
    status: str = "failed",
    **facts: Any,
) -> Line:
    """Return the line of a frame that failed (or was skipped): what happened and what to do."""
    line = dict(base or {"kind": "frame", "file": file}) | facts
    line["status"] = status
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
        "notes": [*planned.get("notes", []), *counts.notes, *written.notes],
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
#
# A log may come from anywhere: every value is looked at before it is used.


def cast_from_line(line: Mapping[str, Any]) -> Cast:
    """Rebuild a measured cast from its line, so that a shoot can be planned again without decoding.

    Raises
    ------
    DamagedFile
        The line does not hold what a measured line holds.
    """
    with _reading(line, "measured"):
        return _cast_from_line(line)


def correction_from_line(line: Mapping[str, Any]) -> Correction:
    """Rebuild the correction of a planned or graded line.

    Raises
    ------
    DamagedFile
        The line does not hold what such a line holds.
    """
    with _reading(line, "planned"):
        given = line["correction"]
        keep = given["keep"]
        return Correction(
            from_xy=_xy(given["from_xy"]),
            toward_xy=_xy(given["toward_xy"]) or _refuse("toward_xy"),
            matrix=_matrix(given["matrix"]),
            transform=_one_of(given["transform"], get_args(Transform)),
            degree=_number(given["degree"]),
            keep_yellow_blue=_number(keep["yellow_blue"]),
            keep_green_magenta=_number(keep["green_magenta"]),
            shift_mired=_number_or_none(given["shift_mired"]),
            shift_duv=_number_or_none(given["shift_duv"]),
            stretch=_text_or_none(line.get("stretch")),
            doubt_deg=_number_or_none(given.get("doubt_deg")),
            reason=_text(given["reason"]),
        )


def written_from_line(line: Mapping[str, Any]) -> tuple[Written, Counts]:
    """Rebuild what a graded line tells about its output.

    Raises
    ------
    DamagedFile
        The line does not hold what a graded line holds.
    """
    with _reading(line, "graded"):
        given = line["output"]
        written = Written(
            file=_text(given["file"]),
            sha256=_digest(given["sha256"]),
            format=_text(given["format"]),
            space=_text(given["space"]),
            notes=_texts(line["notes"]),
        )
        return written, Counts(_number(given["clipped_fraction"]), _number(given["out_of_gamut_fraction"]))


@contextmanager
def _reading(line: Mapping[str, Any], status: str) -> Iterator[None]:
    try:
        yield
    except (LookupError, TypeError, ValueError, ArithmeticError, AttributeError, zlib.error) as error:
        file = line.get("file")
        raise DamagedFile(
            f"a {status} line of the log cannot be used ({error})",
            path=file if isinstance(file, str) else None,
            hint="run anew",
        ) from error


def _cast_from_line(line: Mapping[str, Any]) -> Cast:
    cast, header = line["cast"], line["header"]
    sensor = header["sensor"]
    return Cast(
        header=Header(
            file=_text(line["file"]),
            format=_one_of(header["format"], _FORMATS),
            width_px=_whole(header["width_px"]),
            height_px=_whole(header["height_px"]),
            referred=_one_of(header["referred"], get_args(Referred)),
            body=_text(line["body"]),
            taken_at=_text_or_none(line["taken_at"]),
            exposure_time_s=_number_or_none(header["exposure_time_s"]),
            f_number=_number_or_none(header["f_number"]),
            iso=_number_or_none(header["iso"]),
            flash=_flag_or_none(header["flash"]),
            orientation=_whole(header["orientation"]),
            daylight_from_decoded=_matrix_or_none(header["daylight_from_decoded"]),
            sensor=None
            if sensor is None
            else Sensor(
                _array(sensor["sensor_from_rec2020"]),
                _array(sensor["daylight_neutral"]),
                _array(sensor["as_shot_neutral"]),
            ),
            sha256=None if line["sha256"] is None else _digest(line["sha256"]),
            notes=_texts(line["notes"]),
        ),
        opponent=_one_of(cast["opponent"], get_args(Opponent)),
        white_xy=_xy(cast["white_xy"]),
        readings={
            _text(name): Reading(_number(reading["yellow_blue"]), _number(reading["green_magenta"]))
            for name, reading in line["readings"].items()
        },
        flags=_texts(line["flags"]),
        evidence=None if line["evidence"] is None else _evidence_from(line["evidence"]),
        **{name: _number_or_none(cast[name]) for name in _CAST_NUMBERS},
    )


def _evidence_from(value: Mapping[str, Any]) -> Evidence:
    packed = base64.b64decode(_text(value["zlib"]), validate=True)
    raw = zlib.decompressobj().decompress(packed, _MAX_CANDIDATES)
    return Evidence(
        grid=_text(value["grid"]), log_likelihood=np.frombuffer(raw, np.uint8), cells=_whole(value["cells"])
    )


def _refuse(value: object) -> NoReturn:
    raise ValueError(f"not as expected: {str(value)[:40]!r}")


def _number(value: Any) -> Any:
    ok = isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)
    return value if ok else _refuse(value)


def _number_or_none(value: Any) -> Any:
    return None if value is None else _number(value)


def _whole(value: Any) -> int:
    return value if isinstance(value, int) and not isinstance(value, bool) else _refuse(value)


def _flag_or_none(value: Any) -> bool | None:
    return value if value is None or isinstance(value, bool) else _refuse(value)


def _text(value: Any) -> str:
    return value if isinstance(value, str) else _refuse(value)


def _text_or_none(value: Any) -> str | None:
    return None if value is None else _text(value)


def _texts(value: Any) -> tuple[str, ...]:
    return tuple(_text(one) for one in value) if isinstance(value, list) else _refuse(value)


def _one_of(value: Any, known: tuple[str, ...]) -> Any:
    return value if isinstance(value, str) and value in known else _refuse(value)


def _digest(value: Any) -> str:
    return value if isinstance(value, str) and re.fullmatch("[0-9a-f]{64}", value) else _refuse(value)


def _xy(value: Any) -> tuple[float, float] | None:
    if value is None:
        return None
    x, y = value
    return _number(x), _number(y)


def _array(value: Any) -> NDArray[np.float64]:
    array = np.array(value, dtype=np.float64)
    return array if array.size <= _MAX_ARRAY and np.isfinite(array).all() else _refuse("array")


def _matrix(value: Any) -> NDArray[np.float64]:
    return _array(value).reshape(3, 3)


def _matrix_or_none(value: Any) -> NDArray[np.float64] | None:
    return None if value is None else _matrix(value)
