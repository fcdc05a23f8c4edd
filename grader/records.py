"""The log lines of frames, made of what the passes know of them."""

from __future__ import annotations

from dataclasses import replace

from grader import cast as casts
from grader import files
from grader.colour.difference import grey_delta_e_2000
from grader.log import Line, graded_line, planned_line
from grader.model import Cast, Correction
from grader.resume import Finished


def planned_record(measured: Line, cast: Cast, correction: Correction, output: str | None) -> Line:
    """Return the line of a planned frame.

    Parameters
    ----------
    measured : dict
        Its measured line.
    cast : Cast
    correction : Correction
    output : str, optional
        Where its result is going to be, below the output folder.
    """
    facts = {} if output is None else {"output": {"file": output}}
    line = planned_line(measured, correction, residual=_residual(cast, correction), **facts)
    if correction.from_xy is not None:
        multipliers = files.sensor_multipliers(cast.header, correction.from_xy)
        line["correction"]["sensor_multipliers"] = None if multipliers is None else multipliers.tolist()
    return line


def graded_before_record(
    measured: Line, cast: Cast, planned: Correction, finished: Finished, planned_line_: Line
) -> Line:
    """Return the line of an output that an earlier run wrote: its matrix, in the words of the present plan."""
    line = planned_line_
    if finished.correction.matrix.tolist() != planned.matrix.tolist():
        as_graded = replace(finished.correction, stretch=planned.stretch, flags=planned.flags)
        line = planned_record(measured, cast, as_graded, finished.written.file)
    line = graded_line(line, finished.written, finished.counts, seconds=finished.seconds)
    return line | {"notes": list(finished.written.notes)}


def _residual(cast: Cast, correction: Correction) -> dict[str, float] | None:
    """Return the cast that the frame's own measurement would still show after its correction."""
    left = casts.residual(cast, correction)
    if left is None or cast.white_xy is None:
        return None
    xy = casts.corrected_xy(cast.white_xy, cast.header, correction)
    return {"yellow_blue": left[0], "green_magenta": left[1], "delta_e_2000": float(grey_delta_e_2000(xy))}
