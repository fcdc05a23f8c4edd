"""``grader neutralise``, ``grader measure``, ``grader apply``: the commands over many files."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

import click

from grader.cli import options
from grader.errors import PresetError

if TYPE_CHECKING:
    from grader.batch import Batch
    from grader.log import Line
    from grader.preset import Preset


@click.command(
    epilog="""\b
Examples:
  grader neutralise shoot/ --out graded/
  grader neutralise shoot/ --out graded/ --preset evening-warmth --format jpeg
  grader neutralise shoot/ --out graded/ --toward hero.tif --report graded/report.html
  grader neutralise shoot/ --out graded/ --resume

Frames of one body under one light are measured together.  Light that falls on a scene without any neutral,
and two lights in one frame, cannot be told from the picture alone: such frames are listed for your eye; a
grey card (--grey-card) is better than any estimate."""
)
@options.inputs
@options.output
@options.recipe
@options.shoot
@options.running
def neutralise(paths: tuple[str, ...], **given: Any) -> int:
    """Measure a batch of photographs and write it with its colour casts removed."""
    preset = _load(given.get("preset"))
    if preset is not None and preset.kind == "fixed":
        raise PresetError(f"preset {preset.name!r} is a fixed correction", hint="use: grader apply")
    return _grade(preset, paths, given)


@click.command(
    epilog="""\b
Examples:
  grader apply hall.json shoot/ --out graded/
  find shoot -name '*.dng' -print0 | grader apply hall.json - -0 --out graded/

Whether one correction suits all frames is yours to know: a fixed preset is not checked against the light."""
)
@click.argument("preset", metavar="PRESET")
@options.inputs
@options.output
@options.running
def apply(preset: str, paths: tuple[str, ...], **given: Any) -> int:
    """Apply a saved preset, by name or file, to a batch."""
    return _grade(_load(preset), paths, given)


@click.command(
    epilog="""\b
Examples:
  grader measure shoot/
  grader measure stand/ --tolerance 1.5 --csv stand.csv
  grader measure stand/ --against first.dng --tolerance 1
  grader measure shoot/ --json | head -1

Exit 4 tells that a frame lies further than --tolerance from its stretch, or from --against."""
)
@options.inputs
@options.recipe
@options.shoot
@click.option(
    "--tolerance",
    "tolerance_delta_e_2000",
    type=click.FloatRange(min=0),
    metavar="DE2000",
    help="Largest Delta E 2000 of a mid grey from the stretch's light (or --against).",
)
@click.option("--against", metavar="FRAME|PRESET", help="Measure every frame against this one's light.")
@click.option(
    "--csv", "csv_file", type=click.Path(dir_okay=False), metavar="FILE", help="Write one row a frame."
)
@click.option(
    "--report", type=click.Path(dir_okay=False), metavar="FILE", help="Write the report as one HTML file."
)
@click.option(
    "--contact-sheet", type=click.Path(dir_okay=False), metavar="FILE.jpg", help="Write before/after sheets."
)
@click.option("--resume", is_flag=True, help="Use what an earlier --log already measured.")
@click.option("--overwrite", is_flag=True, help="Replace a log that is there already.")
@options.running
def measure(paths: tuple[str, ...], **given: Any) -> int:
    """Measure the cast of every frame and how the light drifts; write no pictures."""
    from grader.report import table  # noqa: PLC0415 - after --help

    preset = options.chosen_preset(_load(given.get("preset")), given)
    batch = _batch(paths, None, preset, given)
    code = _run(batch, given, batch.measure)
    if not given["as_json"]:
        click.echo(table(batch.summary, colour=_coloured(), width=_width()), nl=False)
    _write_extras(batch, given)
    return code


def _grade(preset: Preset | None, paths: tuple[str, ...], given: dict[str, Any]) -> int:
    chosen = options.chosen_preset(preset, given)
    batch = _batch(paths, given["out"], chosen, given)
    code = _run(batch, given, batch.grade)
    _write_extras(batch, given)
    return code


def _load(name: str | None) -> Preset | None:
    from grader.preset import load_preset  # noqa: PLC0415 - after --help

    return None if name is None else load_preset(name)


def _batch(paths: tuple[str, ...], out: str | None, preset: Preset, given: dict[str, Any]) -> Batch:
    from grader.batch import Batch  # noqa: PLC0415 - after --help
    from grader.cli.console import ProgressBar  # noqa: PLC0415

    names = options.read_paths(paths, null=given["null"])
    bar = ProgressBar(quiet=given["quiet"])
    return Batch(names, out, preset=preset, options=options.run_options(given), progress=bar)


def _run(batch: Batch, given: dict[str, Any], passes: Any) -> int:
    """Run the passes, telling failures as they come and the result at the end; return the exit code."""
    from grader.cli.console import plain, stopping_on_interrupt, tell_end, tell_failure  # noqa: PLC0415
    from grader.log import encode_line  # noqa: PLC0415

    inline = batch.options.pool.processes < 1 and batch.options.pool.cluster is None
    with stopping_on_interrupt(batch.stop, in_this_process=inline), batch:
        for note in [] if given["quiet"] else batch.notes:
            click.echo(f"note: {plain(note)}", err=True)
        lines: Iterator[Line] = passes()
        for line in lines:
            if line["status"] in ("failed", "skipped"):
                tell_failure(line)
            if given["as_json"]:
                click.echo(encode_line(line), nl=False)
    if not given["quiet"]:
        tell_end(batch)
    return exit_code(batch)


def exit_code(batch: Batch) -> int:
    """Return the exit code that a finished batch earns."""
    summary = batch.summary
    if summary["interrupted"]:
        return 130
    if summary["failed"] == summary["frames"]:
        codes = {line["error"]["code"] for line in batch.run.standing.values()}
        return 6 if codes == {"write-failed"} else 5
    if summary["failed"]:
        return 3
    return 4 if summary.get("beyond_tolerance") else 0


def _write_extras(batch: Batch, given: dict[str, Any]) -> None:
    from grader.reporting import write_extras  # noqa: PLC0415 - after --help

    if any(given.get(name) for name in ("report", "contact_sheet", "csv_file")):
        write_extras(
            batch.records(),
            batch.options.limits,
            report_file=given.get("report"),
            contact_sheet=given.get("contact_sheet"),
            csv_file=given.get("csv_file"),
        )


def _coloured() -> bool:
    import os  # noqa: PLC0415
    import sys  # noqa: PLC0415

    return sys.stdout.isatty() and not os.environ.get("NO_COLOR")


def _width() -> int:
    import shutil  # noqa: PLC0415

    return shutil.get_terminal_size((100, 24)).columns
