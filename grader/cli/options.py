"""Options that several commands share, declared once; and what they mean together."""

from __future__ import annotations

import sys
from collections.abc import Callable
from typing import TYPE_CHECKING, Any, TypeVar

import click

from grader.errors import PresetError

if TYPE_CHECKING:
    from grader.batch import Options
    from grader.preset import Preset

Command = TypeVar("Command", bound=Callable[..., Any])
_FILE = click.Path(dir_okay=False)
_SPACES = "source|sRGB|Display P3|Rec.2020|ROMM RGB|opRGB|linear Rec.2020|ACEScg"


def _options(*declared: Callable[[Any], Any]) -> Callable[[Command], Command]:
    def decorate(command: Command) -> Command:
        for option in reversed(declared):
            command = option(command)
        return command

    return decorate


inputs = _options(
    click.argument("paths", nargs=-1, required=True, metavar="PATH..."),
    click.option("--recurse", is_flag=True, help="Look into sub-folders too."),
    click.option("-0", "--null", is_flag=True, help="With PATH '-': names on stdin end in a zero byte."),
)

recipe = _options(
    click.option("--preset", metavar="NAME|FILE", help="A saved recipe (see: grader presets)."),
    click.option(
        "--keep-yellow-blue",
        type=float,
        metavar="F",
        help="Fraction of the yellow-blue cast left in, 0 to 1. [0]",
    ),
    click.option(
        "--keep-green-magenta",
        type=float,
        metavar="F",
        help="Fraction of the green-magenta cast left in, 0 to 1. [0]",
    ),
    click.option(
        "--toward",
        metavar="AIM",
        help="White to aim at: neutral, a temperature in kelvin, or a frame to match. [neutral]",
    ),
    click.option(
        "--opponent",
        type=click.Choice(["oklab", "ciecam16", "cielab"]),
        help="Opponent space of the figures. [oklab]",
    ),
    click.option(
        "--adaptation",
        type=click.Choice(["cat16", "bradford", "cat02", "von-kries"]),
        help="Chromatic adaptation transform. [cat16]",
    ),
    click.option("--degree", type=float, metavar="F", help="Degree of adaptation, 0 to 1. [1]"),
    click.option(
        "--coloured-light",
        type=click.Choice(["leave", "correct"]),
        help="What to do with stage gels, neon and the like. [leave]",
    ),
    click.option(
        "--linear-tiff",
        type=click.Choice(["display", "scene"]),
        help="Float TIFFs in linear light: finished pictures, or raw light developed at the daylight setting. [display]",
    ),
    click.option("--per-frame", is_flag=True, help="Correct each frame by itself, without its neighbours."),
    click.option(
        "--match-bodies/--no-match-bodies", default=None, help="Bring camera bodies onto one look. [match]"
    ),
)

shoot = _options(
    click.option(
        "--clock",
        multiple=True,
        metavar="BODY=SECONDS",
        help="Seconds to add to a body's clock (repeatable).",
    ),
    click.option(
        "--grey-card",
        multiple=True,
        metavar="FRAME@X,Y,W,H",
        help="A known neutral in a frame; pins the light of its stretch (repeatable).",
    ),
    click.option(
        "--stretches", type=_FILE, metavar="CSV", help="Stretches fixed by hand: first file, last file."
    ),
)

encoding = _options(
    click.option(
        "--format",
        "output_format",
        type=click.Choice(["same", "tiff", "jpeg", "png", "dng"]),
        help="File format to write; dng: a copy of a DNG that opens with the planned balance. [same; RAW: tiff]",
    ),
    click.option("--space", metavar="SPACE", help=f"Colour space to write: {_SPACES}. [source]"),
    click.option(
        "--tone", type=click.Choice(["standard", "linear"]), help="Tone curve of RAW frames. [standard]"
    ),
    click.option(
        "--exposure", type=float, metavar="EV", help="Brighten (+) or darken (-) all frames alike. [0]"
    ),
    click.option(
        "--strip-location", is_flag=True, default=None, help="Leave the place of capture out of the results."
    ),
)

output = _options(
    click.option(
        "--out",
        required=True,
        type=click.Path(file_okay=False),
        metavar="DIR",
        help="Folder for the results.",
    ),
    encoding,
    click.option("--overwrite", is_flag=True, help="Replace results that are there already."),
    click.option("--resume", is_flag=True, help="Go on with an earlier run into the same folder."),
    click.option("--dry-run", is_flag=True, help="Measure and plan, write nothing."),
    click.option("--report", type=_FILE, metavar="FILE", help="Write the report as one HTML file."),
    click.option(
        "--contact-sheet", type=_FILE, metavar="FILE.jpg", help="Write before/after pictures on sheets."
    ),
    click.option("--csv", "csv_file", type=_FILE, metavar="FILE", help="Write one row a frame."),
)

running = _options(
    click.option("--workers", type=click.IntRange(min=0), metavar="N", help="Processes; 0 = this one only. [cores]"),
    click.option("--cluster", metavar="ADDRESS", help="Compute on a Dask scheduler (tcp://HOST:PORT or local:N)."),
    click.option("--frame-timeout", type=click.FloatRange(min=1), default=300.0, metavar="S", help="Longest time for one frame. [300]"),
    click.option("--memory", metavar="SIZE", help="Memory for all workers, as 8G or 900M. [half of what is free]"),
    click.option("--max-pixels", type=click.IntRange(min=1), metavar="N", help="Refuse larger pictures. [500000000]"),
    click.option("--log", type=_FILE, metavar="FILE", help="Where to write the log. [DIR/grader-log.jsonl]"),
    click.option("--json", "as_json", is_flag=True, help="Write the log lines of the frames to stdout."),
    click.option("--quiet", is_flag=True, help="No progress, no closing words."),
)  # fmt: skip


def read_paths(paths: tuple[str, ...], *, null: bool) -> list[str]:
    """Return the paths, with ``-`` replaced by the names on standard input."""
    if "-" not in paths:
        return list(paths)
    data = sys.stdin.buffer.read()
    names = data.split(b"\0") if null else data.splitlines()
    listed = [name.decode(sys.getfilesystemencoding(), "surrogateescape") for name in names if name]
    return [path for given in paths for path in (listed if given == "-" else [given])]


def chosen_preset(preset: Preset | None, given: dict[str, Any]) -> Preset:
    """Return the preset (or the default recipe) with what was given on the command line on top."""
    from grader.model import Recipe  # noqa: PLC0415 - after --help
    from grader.preset import fixed_with, make_preset, recipe_with  # noqa: PLC0415

    base = Recipe() if preset is None else preset.settings
    changes = {name: given.get(name) for name in _RECIPE_FIELDS}
    changes |= {"pooling": False if given.get("per_frame") else None}
    changes |= {name: given.get(option) for name, option in _OUTPUT_FIELDS.items()}
    changes = {name: value for name, value in changes.items() if value is not None}
    if given.get("toward") is not None:
        changes["toward"] = _aim(given["toward"])
    if preset is not None and not changes:
        return preset
    name = "unsaved" if preset is None else preset.name
    settings = recipe_with(base, **changes) if isinstance(base, Recipe) else fixed_with(base, **changes)
    return make_preset(name, settings, "" if preset is None else preset.description)


def _aim(toward: str) -> str:
    """Return the aim in figures where it names a frame to match."""
    from grader.model import ReadLimits, Recipe  # noqa: PLC0415 - after --help
    from grader.shootfile import resolve_toward  # noqa: PLC0415

    resolved = resolve_toward(Recipe(toward=toward), ReadLimits())
    return resolved.toward if isinstance(resolved, Recipe) else toward


_RECIPE_FIELDS = (
    "keep_yellow_blue", "keep_green_magenta", "toward", "opponent", "adaptation", "degree", "coloured_light",
    "linear_tiff",     "match_bodies", "tolerance_delta_e_2000",
)  # fmt: skip
_OUTPUT_FIELDS = {
    "format": "output_format",
    "space": "space",
    "tone": "tone",
    "exposure_ev": "exposure",
    "strip_location": "strip_location",
}


def run_options(given: dict[str, Any]) -> Options:
    """Return the batch options that the command line asks for."""
    from grader.batch import Options  # noqa: PLC0415 - after --help
    from grader.model import ReadLimits  # noqa: PLC0415

    limits = ReadLimits() if given.get("max_pixels") is None else ReadLimits(max_pixels=given["max_pixels"])
    return Options(
        recurse=given["recurse"],
        pool=_pool(given),
        limits=limits,
        log=given.get("log"),
        overwrite=given.get("overwrite", False),
        resume=given.get("resume", False),
        dry_run=given.get("dry_run", False),
        clocks=dict(map(_clock, given.get("clock", ()))),
        grey_cards=tuple(given.get("grey_card", ())),
        stretches=given.get("stretches"),
        against=given.get("against"),
        command=tuple(sys.argv[1:]),
    )


def _pool(given: dict[str, Any]) -> Any:
    import os  # noqa: PLC0415

    from grader.workers import Pool  # noqa: PLC0415 - after --help

    workers = given.get("workers")
    if workers is None:
        workers = os.cpu_count() or 1
    return Pool(
        processes=workers,
        cluster=given.get("cluster"),
        timeout_s=given.get("frame_timeout"),
        memory_bytes=_bytes(given["memory"]) if given.get("memory") else None,
    )


def _clock(text: str) -> tuple[str, float]:
    body, _, seconds = text.rpartition("=")
    try:
        return body, float(seconds)
    except ValueError:
        raise PresetError(
            f"--clock {text!r} is not BODY=SECONDS", hint="write for example --clock B=-3.5"
        ) from None


def _bytes(text: str) -> int:
    units = {"K": 1 << 10, "M": 1 << 20, "G": 1 << 30, "T": 1 << 40}
    number, unit = (text[:-1], text[-1:].upper()) if text[-1:].upper() in units else (text, "")
    try:
        size = int(float(number) * units.get(unit, 1))
    except ValueError:
        size = 0
    if size < 1 << 20:
        raise PresetError(
            f"--memory {text!r} is not a size of a megabyte or more", hint="write for example 8G"
        )
    return size
