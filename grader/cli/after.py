"""``grader report`` and ``grader check``: what comes after a run."""

from __future__ import annotations

import json
import os
from dataclasses import asdict

import click


@click.command(
    epilog="""\b
Examples:
  grader report graded/grader-log.jsonl --out report.html
  grader report graded/grader-log.jsonl --contact-sheet sheet.jpg --csv frames.csv

Pictures are read from where the log says the originals are; where they are gone the report says so."""
)
@click.argument("log", type=click.Path(dir_okay=False))
@click.option(
    "--out", "report_file", type=click.Path(dir_okay=False), metavar="FILE", help="The report, one HTML file."
)
@click.option(
    "--contact-sheet", type=click.Path(dir_okay=False), metavar="FILE.jpg", help="Before/after sheets."
)
@click.option("--csv", "csv_file", type=click.Path(dir_okay=False), metavar="FILE", help="One row a frame.")
def report(log: str, report_file: str | None, contact_sheet: str | None, csv_file: str | None) -> int:
    """Make the report of a finished run from its LOG."""
    from grader.log import read_log  # noqa: PLC0415 - after --help
    from grader.model import ReadLimits  # noqa: PLC0415
    from grader.reporting import write_extras  # noqa: PLC0415

    if not (report_file or contact_sheet or csv_file):
        raise click.UsageError("say what to write: --out FILE, --contact-sheet FILE.jpg or --csv FILE")
    write_extras(
        read_log(log).records(),
        ReadLimits(),
        report_file=report_file,
        contact_sheet=contact_sheet,
        csv_file=csv_file,
    )
    for written in filter(None, (report_file, contact_sheet, csv_file)):
        click.echo(f"wrote {written}", err=True)
    return 0


@click.command(
    epilog="""\b
Examples:
  grader check graded/
  grader check graded/ --tolerance 2 --json

Exit 0: all as logged; 3: something differs; 5: there is no readable log.  The re-measured cast of a picture
is an estimate like any other: a large one asks for your eye, it is no proof."""
)
@click.argument("folder", type=click.Path(file_okay=False))
@click.option(
    "--log", type=click.Path(dir_okay=False), metavar="FILE", help="The log. [DIR/grader-log.jsonl]"
)
@click.option(
    "--tolerance",
    type=click.FloatRange(min=0),
    metavar="DE2000",
    help="How far the cast measured in an output may lie from its correction's aim.",
)
@click.option(
    "--workers", type=click.IntRange(min=0), metavar="N", help="Processes; 0 = this one only. [cores]"
)
@click.option("--json", "as_json", is_flag=True, help="Write one JSON object a frame to stdout.")
@click.option("--quiet", is_flag=True, help="No closing words.")
def check(
    folder: str,
    log: str | None,
    tolerance: float | None,
    workers: int | None,
    as_json: bool,
    quiet: bool,
) -> int:
    """Re-read the finished run in FOLDER and tell what differs from its log."""
    from grader.checking import check as check_run  # noqa: PLC0415 - after --help
    from grader.cli.console import plain  # noqa: PLC0415
    from grader.workers import Pool  # noqa: PLC0415

    pool = Pool(processes=os.cpu_count() or 1 if workers is None else workers)
    seen = wrong = 0
    for finding in check_run(folder, log=log, tolerance_delta_e_2000=tolerance, pool=pool):
        seen += 1
        wrong += finding.problem is not None
        if as_json:
            click.echo(json.dumps(asdict(finding)))
        elif finding.problem is not None:
            click.echo(plain(f"{finding.output or finding.file}: {finding.problem}"))
    if not quiet:
        click.echo(f"{seen - wrong} of {seen} outputs are as logged", err=True)
    return 3 if wrong else 0
