"""What a person tells about a shoot: a frame to match, known neutrals, boundaries; from files to values."""

from __future__ import annotations

import csv
import os
from collections.abc import Iterable
from dataclasses import replace

import numpy as np

from grader import cast as casts
from grader import files
from grader.cast.box import parse_box, stored_box
from grader.colour.white import linear_from_xy, xy_from_linear
from grader.errors import MissingFile, PresetError
from grader.model import XY, Cast, Fixed, ReadLimits, Recipe
from grader.preset import load_preset

_MAX_ROWS = 100_000


def resolve_toward(settings: Recipe | Fixed, limits: ReadLimits) -> Recipe | Fixed:
    """Return the settings with a frame to match replaced by the white that it shows.

    The aim is where a neutral lies in that frame *as it looks*, so that the batch lands on its look.

    Raises
    ------
    PresetError
        No light could be measured in that frame.
    """
    if isinstance(settings, Fixed) or not os.path.isfile(settings.toward):  # noqa: PTH113
        return settings
    cast = casts.measure(files.read_reduced(settings.toward, limits), settings)
    if cast.white_xy is None:
        raise PresetError(
            "no light could be measured in the frame to match",
            path=settings.toward,
            hint="choose another frame",
        )
    x, y = as_decoded(cast.white_xy, cast.header.daylight_from_decoded)
    return replace(settings, toward=f"{x!r},{y!r}")


def resolve_against(against: str | os.PathLike[str] | None, limits: ReadLimits) -> Cast | XY | None:
    """Return the measured frame, or the light of the fixed preset, that a shoot is held against.

    Raises
    ------
    PresetError
        No light could be measured in that frame, or the preset is a recipe.
    """
    if against is None:
        return None
    name = os.fspath(against)
    if os.path.isfile(name) and not name.lower().endswith(".json"):  # noqa: PTH113
        cast = casts.measure(files.read_reduced(name, limits))
        if cast.white_xy is None:
            raise PresetError(
                "no light could be measured in this frame", path=name, hint="choose another frame"
            )
        return cast
    settings = load_preset(name).settings
    if not isinstance(settings, Fixed):
        raise PresetError(
            f"preset {name!r} is a recipe and holds no light", hint="name a frame or a fixed preset"
        )
    return settings.from_xy


def as_decoded(light_xy: XY, daylight_from_decoded: np.ndarray | None) -> XY:
    """Return the chromaticity that this light has in the frame as decoded, the camera's balance baked in."""
    if daylight_from_decoded is None:
        return light_xy
    x, y = xy_from_linear(np.linalg.solve(daylight_from_decoded, linear_from_xy(light_xy)))
    return float(x), float(y)


def known_lights(cards: Iterable[str], limits: ReadLimits) -> dict[str | int, XY]:
    """Measure the neutrals that ``FRAME@X,Y,W,H`` name; return the light of each frame.

    Raises
    ------
    PresetError
        A text is not of that form, or the patch is no usable neutral.
    """
    lights: dict[str | int, XY] = {}
    for text in cards:
        path, _, box = text.rpartition("@")
        if not path:
            raise PresetError(f"--grey-card {text!r} is not FRAME@X,Y,W,H", hint="give the patch in pixels")
        frame = files.read(path, limits)
        sample = casts.sample_patch(frame, stored_box(parse_box(box), frame.header))
        lights[path] = sample.light_xy
    return lights


def read_stretches(
    path: str | os.PathLike[str] | None,
) -> list[tuple[str, str, Recipe | Fixed | None]] | None:
    """Read stretches fixed by hand: rows of first file, last file, and perhaps a preset for them.

    Raises
    ------
    MissingFile
        The file cannot be opened.
    PresetError
        A row has fewer than two names, or its preset cannot be used.
    """
    if path is None:
        return None
    try:
        with open(path, newline="", encoding="utf-8-sig", errors="surrogateescape") as file:  # noqa: PTH123
            rows = [row for _, row in zip(range(_MAX_ROWS), csv.reader(file), strict=False) if any(row)]
    except (OSError, csv.Error) as error:
        raise MissingFile(f"cannot be read ({error})", path=path) from error
    if rows and rows[0][0].strip().lower() == "first file":
        rows = rows[1:]
    return [_stretch(row, number, path) for number, row in enumerate(rows, start=1)]


def _stretch(
    row: list[str], number: int, path: str | os.PathLike[str]
) -> tuple[str, str, Recipe | Fixed | None]:
    first, last, name = [cell.strip() for cell in (*row, "", "", "")[:3]]
    if not first or not last:
        raise PresetError(f"stretch {number} is not 'first file,last file[,preset]'", path=path)
    return first, last, load_preset(name).settings if name else None
