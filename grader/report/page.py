"""The report as one HTML file that needs nothing else: no network, no other file."""

from __future__ import annotations

import base64
import gzip
import hashlib
import json
import os
import shlex
from collections import Counter
from collections.abc import Iterable, Sequence
from functools import cache
from importlib import resources
from typing import Any, Final

import numpy as np
from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from grader.atomic import write_atomic
from grader.report import charts, verdict, words
from grader.report.pictures import Thumbnails, UriPair, picture_pairs, spread_evenly
from grader.report.records import FrameRow, Line, Shoot, flag_words, listing, mapping, number, text
from grader.report.recount import read_shoot

BUDGET_BYTES: Final = 6_000_000
MOST_DRAWN: Final = 3000
"""Frames drawn one by one; of a larger shoot an even sample and those to look at."""
MOST_CARDS: Final = 240
OPEN_CARDS: Final = 24
"""Cards that stand open, with larger pictures; the rest opens on demand."""
MOST_ROWS: Final = 300


def write_html(
    records: Iterable[Line], target: str | os.PathLike[str], *, thumbnails: Thumbnails | None = None
) -> None:
    """Write the report of a log as one self-contained HTML file.

    Parameters
    ----------
    records : iterable of mappings
        The log's lines, parsed; for one file the later line stands.
    target : path-like
        The file to write; an existing one is replaced.
    thumbnails : callable, optional
        Takes a frame's line and returns the JPEG bytes of the frame before and after (None where there
        is none), both through the same tone.  Without it the report has no pictures and says so.

    Raises
    ------
    WriteFailed
        The file cannot be written.
    """
    write_atomic(
        target, render_html(records, thumbnails=thumbnails).encode("utf-8", "replace"), overwrite=True
    )


def render_html(records: Iterable[Line], *, thumbnails: Thumbnails | None = None) -> str:
    """Return the report as text; see `write_html`."""
    shoot = read_shoot(records)
    look = shoot.to_look_at
    drawn = _drawn(shoot, look)
    data = charts.chart_data(shoot, drawn)
    names = short_names([row.file for row in shoot.frames])
    data["frames"]["name"] = [names[row.file] for row in drawn]
    data_text = _json(data)
    cards = look[:MOST_CARDS]
    spent = len(_library()) + len(data_text) + 2000 * len(cards) + 200_000
    places = {row.file: index for index, row in enumerate(drawn)}
    card_places = [places[row.file] for row in cards if row.file in places]
    pictures = picture_pairs(
        drawn,
        thumbnails,
        large=card_places[:OPEN_CARDS],
        first=card_places[OPEN_CARDS:],
        budget=BUDGET_BYTES - spent,
    )
    stored = {place: pair for place, pair in pictures.items() if place not in card_places}
    style, script = _asset("report.css"), _asset("report.js")
    return (
        _environment()
        .get_template("report.html")
        .render(
            shoot=shoot,
            title=_title(shoot),
            headline=verdict.headline(shoot),
            answers=verdict.answers(shoot),
            look=look,
            cards=cards,
            tally=Counter(flag for row in look for flag in row.flags).most_common(),
            open_cards=OPEN_CARDS,
            most_rows=MOST_ROWS,
            failed=[row for row in shoot.frames if row.status == "failed"],
            drawn=drawn,
            sampled=len(drawn) >= MOST_DRAWN,
            names=names,
            places=places,
            pictures=pictures,
            has_pictures=thumbnails is not None,
            strips=_strips(shoot, drawn, pictures, places),
            quantiles=_quantiles(shoot),
            untimed=sum(row.clock_s is None for row in drawn) if data["timed"] else 0,
            facts=_facts(shoot),
            preset=json.dumps(mapping(shoot.run.get("preset")), indent=2, ensure_ascii=False, default=str),
            opponent=data["opponent"],
            style=Markup(style),  # noqa: S704 - our own file
            script=Markup(script),  # noqa: S704 - our own file
            library=Markup(_library()),  # noqa: S704 - base64
            data=Markup(data_text),  # noqa: S704 - escaped by _json
            picture_data=Markup(_json(stored)),  # noqa: S704 - escaped by _json
            script_hashes=[_digest(script), _library_digest()],
        )
    )


def short_names(files: Sequence[str]) -> dict[str, str]:
    """Return file names without the folders that all of them share.

    Examples
    --------
    >>> short_names(["card/1/a.tif", "card/2/a.tif"])
    {'card/1/a.tif': '1/a.tif', 'card/2/a.tif': '2/a.tif'}
    """
    parts = {file: file.replace("\\", "/").split("/") for file in files}
    folders = list(zip(*(part[:-1] for part in parts.values()), strict=False))
    shared = next((depth for depth, names in enumerate(folders) if len(set(names)) > 1), len(folders))
    return {file: "/".join(part[shared:]) for file, part in parts.items()}


def _drawn(shoot: Shoot, look: Sequence[FrameRow]) -> list[FrameRow]:
    ordered = [
        row for row in charts.in_order(shoot.frames) if row.status != "failed" or row.yellow_blue is not None
    ]
    if len(ordered) <= MOST_DRAWN:
        return ordered
    kept = {row.file for row in look[: MOST_DRAWN // 3]}
    others = [index for index, row in enumerate(ordered) if row.file not in kept]
    kept |= {ordered[index].file for index in spread_evenly(others, MOST_DRAWN - len(kept))}
    return [row for row in ordered if row.file in kept]


def _strips(
    shoot: Shoot, drawn: Sequence[FrameRow], pictures: dict[int, UriPair], places: dict[str, int]
) -> dict[str, list[int]]:
    """Return for each stretch the places of a few frames with pictures, spread over it."""
    found: dict[str, list[int]] = {}
    for row in drawn:
        if row.stretch is not None and places[row.file] in pictures:
            found.setdefault(row.stretch, []).append(places[row.file])
    return {stretch.stretch: spread_evenly(found.get(stretch.stretch, []), 8) for stretch in shoot.stretches}


def _quantiles(shoot: Shoot) -> list[tuple[str, list[float | None]]]:
    """Return rows of (name, [median, 90 %, 95 %, largest]) of the casts before and after."""
    columns = {
        "before": [row.delta_e_2000 for row in shoot.frames if row.delta_e_2000 is not None],
        "after": [row.residual_delta_e_2000 for row in shoot.frames if row.residual_delta_e_2000 is not None],
    }
    return [
        (name, [float(value) for value in np.quantile(values, (0.5, 0.9, 0.95, 1.0))])
        for name, values in columns.items()
        if values
    ]


def _facts(shoot: Shoot) -> list[tuple[str, str]]:
    """Return the facts of the run, label and value."""
    run, preset = shoot.run, mapping(shoot.run.get("preset"))
    parts = [text(part) for part in listing(run.get("command"))]
    command = shlex.join(parts if parts[:1] in ([], ["grader"]) else ["grader", *parts])
    seconds = number(shoot.summary.get("seconds"))
    facts = [
        ("Command", command),
        ("Preset", text(preset.get("name"))),
        ("Version", text(run.get("version"))),
        ("Started", text(run.get("started"))),
        ("Took", "" if seconds is None else f"{seconds:.0f} s"),
        ("Log format", text(run.get("schema"))),
        ("Casts told in", charts.OPPONENT_NAMES[shoot.opponent]),
    ]
    return [(label, value) for label, value in facts if value]


def _title(shoot: Shoot) -> str:
    days = list(
        dict.fromkeys(filter(None, (words.date(row.clock_s) for row in charts.in_order(shoot.frames))))
    )
    if not days:
        return words.count(len(shoot.frames), "frame")
    return days[0] if len(days) == 1 else f"{days[0]} to {days[-1]}"


def _json(value: Any) -> str:
    """Return JSON that is safe inside a script element: no ``<``, no ``&``, no line separators."""
    raw = json.dumps(value, ensure_ascii=False, allow_nan=False, separators=(",", ":"))
    for character in "<>&\u2028\u2029":
        raw = raw.replace(character, f"\\u{ord(character):04x}")
    return raw


@cache
def _environment() -> Environment:
    environment = Environment(
        loader=PackageLoader("grader.report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.globals["words"] = words
    environment.globals["flag_words"] = flag_words
    environment.globals["light_hex"] = charts.light_hex
    return environment


def _asset(name: str) -> str:
    return resources.files("grader.report").joinpath("templates", name).read_text(encoding="utf-8")


@cache
def _library_source() -> str:
    from plotly.offline import get_plotlyjs  # noqa: PLC0415 - only a page needs it

    return str(get_plotlyjs())


@cache
def _library() -> str:
    """Return the chart library, gzip and base64: the page unpacks it, and stays a third of the size."""
    packed = gzip.compress(_library_source().encode("utf-8"), 9, mtime=0)
    return base64.b64encode(packed).decode("ascii")


@cache
def _library_digest() -> str:
    return _digest(_library_source())


def _digest(source: str) -> str:
    """Return what a content security policy calls a script's hash."""
    return "sha256-" + base64.b64encode(hashlib.sha256(source.encode("utf-8")).digest()).decode("ascii")
