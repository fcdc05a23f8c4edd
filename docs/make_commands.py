"""Write docs/COMMANDS.md from the commands' own help: ``python docs/make_commands.py``."""

from pathlib import Path

import click

from grader import cli

TARGET = Path(__file__).with_name("COMMANDS.md")
HEAD = """# Commands

Made from the commands' own help by `python docs/make_commands.py`. Data goes to stdout, everything else to stderr; no command
ever asks a question. Options can be given as environment variables too, as click names them
(`GRADER_NEUTRALISE_WORKERS=2`).

Exit codes: 0 all done; 1 a fault of grader's own; 2 usage or preset; 3 some frames failed, the rest are done; 4 beyond
tolerance; 5 nothing (more) could be read; 6 cannot write; 130 interrupted, resumable.

Completion: `eval "$(_GRADER_COMPLETE=bash_source grader)"` (or `zsh_source`); for fish
`_GRADER_COMPLETE=fish_source grader | source`.
"""


def document() -> str:
    """Return the whole page."""
    parent = click.Context(
        cli.grader, info_name="grader", help_option_names=["-h", "--help"], terminal_width=100
    )
    parts = [HEAD]
    for name in cli.grader.list_commands(parent):
        command = cli.grader.get_command(parent, name)
        context = click.Context(command, info_name=name, parent=parent, terminal_width=100)
        parts.append(f"\n## grader {name}\n\n```text\n{command.get_help(context)}\n```\n")
    return "".join(parts)


if __name__ == "__main__":
    TARGET.write_text(document(), encoding="utf-8")
