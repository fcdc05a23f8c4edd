"""``grader sample``, ``grader presets``, ``grader export``: corrections that are measured once and kept."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from grader.cli import options
from grader.errors import PresetError

if TYPE_CHECKING:
    from grader.cast.patch import PatchSample
    from grader.model import Frame, Header
    from grader.preset import Preset


@click.command(
    epilog="""\b
Examples:
  grader sample card.dng --patch 1200,800,200,200 --save hall.json
  grader sample card.dng --patch 40%,40%,10%,10% --save hall.json
  grader sample card.dng --save hall.json --picture found.png
  grader sample target.tif --target 210,180,910,190,900,650,205,640 --save hall.json
  grader sample hero.dng --hero --toward 5000 --save hero.json

Without --patch, --target or --hero the grey card is looked for; look at --picture before you trust it.
Several frames give one robust mean.  A patch that is clipped, too small, textured or coloured is refused."""
)
@click.argument("frames", nargs=-1, required=True, metavar="FRAME...")
@click.option(
    "--patch", metavar="X,Y,W,H", help="The neutral, in pixels as you see the picture, or as fractions or %."
)
@click.option(
    "--target",
    metavar="X,Y,...",
    help="Four corners (8 numbers) of a 24-patch target: its grey row is measured.",
)
@click.option("--hero", is_flag=True, help="Take the measured light of the whole frame.")
@click.option(
    "--save",
    "target_file",
    required=True,
    type=click.Path(dir_okay=False),
    metavar="FILE.json",
    help="The preset.",
)
@click.option("--name", metavar="NAME", help="The preset's name. [the file's name]")
@click.option(
    "--picture",
    type=click.Path(dir_okay=False),
    metavar="FILE.png",
    help="A small picture showing the patch.",
)
@click.option("--overwrite", is_flag=True, help="Replace a preset that is there already.")
@click.option("--json", "as_json", is_flag=True, help="Write what was measured to stdout as JSON.")
@options.recipe
@options.encoding
def sample(frames: tuple[str, ...], **given: Any) -> int:
    """Measure a known neutral once and save the correction as a preset."""
    from grader.cast.sample import fixed_from_sample, robust_mean  # noqa: PLC0415 - after --help
    from grader.preset import load_preset, make_preset, save_preset  # noqa: PLC0415

    ways = [name for name in ("patch", "target", "hero") if given[name]]
    if len(ways) > 1:
        raise click.UsageError(f"--{ways[0]} and --{ways[1]} exclude each other")
    base = load_preset(given["preset"]) if given["preset"] else None
    recipe = options.chosen_preset(base, given).recipe
    if recipe is None:
        raise PresetError("--preset must be a recipe here", hint="see: grader presets")
    measured = [_measure(path, given) for path in frames]
    found = robust_mean([one for one, _ in measured])
    saved = make_preset(
        given["name"] or Path(given["target_file"]).stem,
        fixed_from_sample(found, recipe, measured[0][1]),
        f"Measured on {', '.join(Path(path).name for path in frames)}.",
    )
    save_preset(saved, given["target_file"], overwrite=given["overwrite"])
    _tell_sample(found, saved, given)
    return 0


def _measure(path: str, given: dict[str, Any]) -> tuple[PatchSample, Header]:
    from grader import files  # noqa: PLC0415 - after --help
    from grader.cast import measure  # noqa: PLC0415
    from grader.cast.box import parse_box, stored_box  # noqa: PLC0415
    from grader.cast.sample import sample_hero, sample_patch  # noqa: PLC0415
    from grader.cast.target import sample_target  # noqa: PLC0415

    frame = files.read(path)
    if given["hero"]:
        found = sample_hero(measure(frame))
    elif given["target"]:
        found = sample_target(frame, _corners(given["target"], frame.header))
    elif given["patch"]:
        found = sample_patch(frame, stored_box(parse_box(given["patch"]), frame.header))
    else:
        found = _find_card(frame)
    if given["picture"]:
        _write_picture(frame, found, given["picture"])
    return found, frame.header


def _find_card(frame: Frame) -> PatchSample:
    from grader.cast.card import find_grey_card  # noqa: PLC0415 - after --help

    card = find_grey_card(frame)
    place = ",".join(map(str, card.box_px))
    click.echo(f"{frame.header.file}: took the area at {place} (as stored) for the grey card", err=True)
    return card.sample


def _write_picture(frame: Frame, found: PatchSample, target: str) -> None:
    import imagecodecs  # noqa: PLC0415 - after --help

    from grader.atomic import write_atomic  # noqa: PLC0415
    from grader.cast import build_proxy  # noqa: PLC0415
    from grader.cast.card import mark_box  # noqa: PLC0415

    if found.box_px is None:
        raise PresetError("there is no patch to show", hint="leave out --picture")
    picture = mark_box(build_proxy(frame), found.box_px)
    write_atomic(target, bytes(imagecodecs.png_encode(picture)), overwrite=True)


def _corners(text: str, header: Header) -> Any:
    """Return the four corners in pixels of the stored orientation."""
    from grader.cast.box import stored_box  # noqa: PLC0415 - after --help

    try:
        numbers = [float(number) for number in text.split(",")]
    except ValueError:
        numbers = []
    if len(numbers) != 8:
        raise PresetError(
            f"--target {text!r} is not eight numbers",
            hint="write the four corners in turn: X1,Y1,X2,Y2,X3,Y3,X4,Y4",
        )
    corners = zip(numbers[::2], numbers[1::2], strict=True)
    return tuple(stored_box((x, y, 0.0, 0.0), header)[:2] for x, y in corners)


def _tell_sample(found: PatchSample, saved: Preset, given: dict[str, Any]) -> None:
    x, y = found.light_xy
    if given["as_json"]:
        values = {"light_xy": [x, y], "duv": found.duv, "doubt_deg": found.doubt_deg, "by": found.by}
        click.echo(
            json.dumps(
                values | {"notes": list(found.notes), "preset": given["target_file"], "digest": saved.digest}
            )
        )
    else:
        click.echo(
            f"light x {x:.4f}, y {y:.4f}, Duv {found.duv:+.4f}; doubt {found.doubt_deg:.1f} degrees", err=True
        )
        for note in found.notes:
            click.echo(f"note: {note}", err=True)
        click.echo(f"saved {given['target_file']}", err=True)


@click.command(
    epilog="""\b
Examples:
  grader presets
  grader presets --json"""
)
@click.option("--json", "as_json", is_flag=True, help="Write one JSON object a preset to stdout.")
def presets(*, as_json: bool) -> int:
    """List the presets that have a name: shipped, and your own."""
    from grader.preset import list_presets, user_folder  # noqa: PLC0415 - after --help

    def tell_broken(error: PresetError) -> None:
        click.echo(f"grader: {error}", err=True)

    found = list_presets(broken=tell_broken)
    width = max((len(preset.name) for preset in found), default=0)
    for preset in found:
        if as_json:
            values = {"name": preset.name, "kind": preset.kind, "description": preset.description}
            click.echo(json.dumps(values | {"digest": preset.digest, "file": str(preset.source)}))
        else:
            click.echo(f"{preset.name:{width}}  {preset.description}")
    if not as_json:
        click.echo(f"your own go into {user_folder()}", err=True)
    return 0


@click.command(
    epilog="""\b
Examples:
  grader export hall.json --out luts/ --space sRGB
  grader export graded/grader-log.jsonl --out luts/ --space "Display P3"

A Common LUT Format file holds the matrix between the space's curves.  It cannot hold what depends on the
neighbourhood of white or of the gamut's edge: blending of highlights, pulling colours into the gamut."""
)
@click.argument("source", metavar="PRESET|LOG")
@click.option(
    "--out", required=True, type=click.Path(file_okay=False), metavar="DIR", help="Folder for the files."
)
@click.option(
    "--space", default="sRGB", metavar="SPACE", help="Colour space of the pictures they are for. [sRGB]"
)
@click.option("--overwrite", is_flag=True, help="Replace files that are there already.")
@click.option("--json", "as_json", is_flag=True, help="Write one JSON object a file to stdout.")
def export(source: str, *, out: str, space: str, overwrite: bool, as_json: bool) -> int:
    """Write corrections as Common LUT Format files and as JSON for other systems."""
    from grader.exporting import export_log, export_preset  # noqa: PLC0415 - after --help

    writer = export_log if source.lower().endswith(".jsonl") else export_preset
    for written in writer(source, out, space=space, overwrite=overwrite):
        click.echo(json.dumps(written) if as_json else written["file"])
    return 0
