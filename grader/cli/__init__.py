"""The command line: arguments in, calls out; no picture arithmetic.

The commands' modules load when they are used, so that ``grader --help`` answers at once.
"""

from __future__ import annotations

import sys
from importlib import import_module
from typing import Any, Final

import click

_COMMANDS: Final = {
    "neutralise": ("grader.cli.batches", "Measure a batch and write it with its colour casts removed."),
    "measure": ("grader.cli.batches", "Measure the cast of every frame, and its drift; write no pictures."),
    "apply": ("grader.cli.batches", "Apply a saved preset to a batch."),
    "sample": ("grader.cli.saved", "Measure a known neutral once and save the correction as a preset."),
    "presets": ("grader.cli.saved", "List the presets that have a name."),
    "export": ("grader.cli.saved", "Write corrections as Common LUT Format files or JSON for other systems."),
    "report": ("grader.cli.after", "Make the report of a finished run from its log."),
    "check": ("grader.cli.after", "Re-read a finished run and tell what differs from its log."),
}


class _Commands(click.Group):
    """A group whose commands load when they are used."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(_COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        home = _COMMANDS.get(cmd_name)
        if home is None:
            return None
        command: click.Command = getattr(import_module(home[0]), cmd_name)
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl([(name, text) for name, (_, text) in _COMMANDS.items()])


def _version(context: click.Context, _parameter: click.Parameter, wanted: bool) -> None:
    if wanted and not context.resilient_parsing:
        from grader import __version__  # noqa: PLC0415 - only when asked

        click.echo(f"grader {__version__}")
        context.exit()


@click.command(
    cls=_Commands,
    context_settings={"help_option_names": ["-h", "--help"], "auto_envvar_prefix": "GRADER"},
    epilog="""\b
Examples:
  grader neutralise shoot/ --out graded/ --report graded/report.html
  grader measure stand/ --tolerance 1.5
  grader sample card.dng --patch 1200,800,200,200 --save hall.json
  grader apply hall.json shoot/ --out graded/

Each command has its own --help.  Exit: 0 all done; 2 usage or preset; 3 some frames failed, the rest are
done; 4 beyond tolerance; 5 nothing (more) could be read; 6 cannot write; 130 interrupted, resumable; 1 a fault of
grader's own.""",
)
@click.option(
    "--version", is_flag=True, is_eager=True, expose_value=False, callback=_version, help="Show the version."
)
def grader() -> None:
    """Measure, remove and track colour casts over whole photo shoots."""


def main(arguments: list[str] | None = None) -> None:
    """Run the command line and exit with its code."""
    sys.exit(run(arguments))


def run(arguments: list[str] | None = None) -> int:
    """Run the command line and return its exit code; errors become one plain line on stderr."""
    from grader.errors import GraderError, PresetError, WriteFailed  # noqa: PLC0415 - after --help

    try:
        result: Any = grader.main(args=arguments, prog_name="grader", standalone_mode=False)
    except (click.exceptions.Abort, KeyboardInterrupt):
        click.echo("interrupted", err=True)
        return 130
    except click.ClickException as error:
        error.show()
        return error.exit_code
    except GraderError as error:
        from grader.cli.console import plain  # noqa: PLC0415 - after --help

        click.echo(f"grader: {plain(str(error))}", err=True)
        return 2 if isinstance(error, PresetError) else 6 if isinstance(error, WriteFailed) else 5
    return result if isinstance(result, int) else 0
