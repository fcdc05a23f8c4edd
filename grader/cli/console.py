"""What a person sees while a batch runs and when it ends; all of it on stderr."""

from __future__ import annotations

import signal
import sys
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

import click

from grader.model import EYE_FLAGS, FLAGS

if TYPE_CHECKING:
    from grader.batch import Batch
    from grader.workers import Stop

_LISTED = 12
_STAGES = {"measure": "measuring", "grade": "grading"}


class ProgressBar:
    """A bar for each stage, on a terminal only."""

    def __init__(self, *, quiet: bool) -> None:
        self._off = quiet or not sys.stderr.isatty()
        self._bar: Any = None
        self._stage = ""

    def __call__(self, stage: str, done: int, total: int) -> None:
        """Show that ``done`` of ``total`` frames have passed ``stage``."""
        if self._off:
            return
        if stage != self._stage:
            from tqdm import tqdm  # noqa: PLC0415 - only on a terminal

            self.close()
            self._bar = tqdm(total=total, desc=_STAGES.get(stage, stage), unit="frame", file=sys.stderr)
            self._stage = stage
        self._bar.update(done - self._bar.n)

    def close(self) -> None:
        """Leave the bar as it stands."""
        if self._bar is not None:
            self._bar.close()


def plain(text: str) -> str:
    r"""Return text as a terminal can show it: control and direction-changing characters spelt out.

    File names and metadata may hold any of them.

    Examples
    --------
    >>> plain("a\x1b[2J.tif")
    'a\\x1b[2J.tif'
    """
    if text.isprintable():
        return text
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in text)


@contextmanager
def stopping_on_interrupt(stop: Stop, *, in_this_process: bool = False) -> Iterator[None]:
    """Let Ctrl-C ask the batch to stop: once after the frames in flight, twice at once.

    A frame that is computed ``in_this_process`` is given up by KeyboardInterrupt; its output stays whole or absent.
    """

    def ask(_signal: int, _frame: object) -> None:
        stop.ask()
        words = (
            "stopping at once; the same command with --resume goes on from here"
            if stop.at_once
            else "finishing the frames in flight; Ctrl-C again stops at once"
        )
        click.echo(f"\n{words}", err=True)
        if stop.at_once and in_this_process:
            raise KeyboardInterrupt

    before = {number: signal.signal(number, ask) for number in (signal.SIGINT, signal.SIGTERM)}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def tell_failure(line: Mapping[str, Any]) -> None:
    """Say that a frame failed, why, and what to do."""
    error = line["error"]
    hint = f"; {error['hint']}" if error.get("hint") else ""
    click.echo(plain(f"{line['file']}: {error['message']}{hint}"), err=True)


def tell_end(batch: Batch) -> None:
    """Say what came of the batch."""
    summary = batch.summary
    for text in _counts(batch), _casts(summary), *_by_eye(batch):
        if text:
            click.echo(text, err=True)
    if batch.log_path is not None and not batch.options.dry_run:
        click.echo(f"log: {batch.log_path}", err=True)
    if summary.get("interrupted"):
        click.echo("interrupted; the same command with --resume goes on from here", err=True)


def _counts(batch: Batch) -> str:
    summary = batch.summary
    done = summary["graded"] if batch.out is not None and not batch.options.dry_run else summary["measured"]
    verb = "graded" if batch.out is not None and not batch.options.dry_run else "measured"
    where = f" into {batch.out}" if verb == "graded" else ""
    failed = f", {summary['failed']} failed" if summary["failed"] else ""
    return f"{verb} {done} of {summary['frames']} frames{where} in {summary['seconds']:.1f} s{failed}"


def _casts(summary: Mapping[str, Any]) -> str:
    before, after = summary["mean_cast_before"], summary["mean_cast_after"]
    if before is None:
        return ""
    text = f"mean cast before: {_cast(before)}"
    if after is None:
        return text
    return f"{text}\nmean cast after:  {_cast(after)}, as single frames measure it"


def _cast(cast: Mapping[str, float]) -> str:
    return (
        f"Delta E 2000 {cast['delta_e_2000']:5.2f}  "
        f"(yellow-blue {cast['yellow_blue']:+.4f}, green-magenta {cast['green_magenta']:+.4f})"
    )


def _by_eye(batch: Batch) -> Iterator[str]:
    lines = [
        line
        for line in batch.run.standing.values()
        if line["status"] != "failed" and not EYE_FLAGS.isdisjoint(line.get("flags") or ())
    ]
    if not lines:
        return
    yield f"look at {len(lines)} by eye:"
    lines.sort(key=lambda line: -((line.get("cast") or {}).get("doubt_deg") or 99.0))
    for line in lines[:_LISTED]:
        why = "; ".join(FLAGS.get(flag, flag) for flag in line["flags"] if flag in EYE_FLAGS)
        yield f"  {plain(line['file'])}: {why}"
    if len(lines) > _LISTED:
        yield f"  ... and {len(lines) - _LISTED} more; the log and the report list them all"
