"""The preset file as pydantic sees it: every key, its bounds, and errors in plain words.

Only ``grader.preset`` uses this module, and late: pydantic is not needed to grade.
"""

from __future__ import annotations

import difflib
import json
import re
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Annotated, Any, Final, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    TypeAdapter,
    ValidationError,
    WithJsonSchema,
)

from grader.colour.spaces import SPACES, space_by_name
from grader.errors import PresetError
from grader.model import Fixed, Opponent, Output, OutputFormat, Recipe, Referred, Transform

SCHEMA: Final = "grader-preset/1"
SCHEMA_FILE: Final = "preset.schema.json"
CCT_RANGE_K: Final = (1667.0, 25_000.0)
"""Colour temperatures that can be aimed at; those of `grader.cast.correction.aim_xy`."""

NAME: Final = (
    r'^[^\x00-\x20\x7f./\\:*?"<>|~-](?:[^\x00-\x1f\x7f/\\:*?"<>|]{0,62}[^\x00-\x20\x7f./\\:*?"<>|])?$'
)
"""What can be a file name everywhere; read alike by Python, Rust and ECMA 262."""
_NUMBER = r"[0-9]{1,6}(?:\.[0-9]{1,17})?"
_TOWARD = rf"^(?:neutral|{_NUMBER}K?|0?\.[0-9]{{1,17}},0?\.[0-9]{{1,17}})$"


def _check_toward(value: object) -> object:
    if isinstance(value, (list, tuple)) and len(value) == 2:
        return _toward_xy(value)
    if isinstance(value, (int, float)) and not isinstance(value, bool):
        return _toward_cct(float(value))
    if not isinstance(value, str):
        raise ValueError(_TOWARD_WORDS)  # noqa: TRY004 - pydantic reports ValueError
    text = value.strip()
    if text.lower() == "neutral":
        return "neutral"
    try:
        parts = [float(p) for p in text.removesuffix("K").removesuffix("k").split(",")]
    except ValueError:
        raise ValueError(_TOWARD_WORDS) from None
    if len(parts) == 1:
        return _toward_cct(parts[0])
    return _toward_xy(parts)


_TOWARD_WORDS = "should be 'neutral', a colour temperature in kelvin, or a chromaticity x,y"


def _toward_cct(cct_k: float) -> str:
    low, high = CCT_RANGE_K
    if not low <= cct_k <= high:
        raise ValueError(f"should be a colour temperature from {low:.0f} to {high:.0f} K")
    return repr(cct_k).removesuffix(".0")


def _toward_xy(parts: Sequence[Any]) -> str:
    if len(parts) != 2 or any(isinstance(p, bool) or not isinstance(p, (int, float)) for p in parts):
        raise ValueError(_TOWARD_WORDS)
    x, y = _check_xy((float(parts[0]), float(parts[1])))
    return f"{x!r},{y!r}"


def _check_xy(xy: tuple[float, float]) -> tuple[float, float]:
    x, y = xy
    if not (0.01 <= x <= 0.9 and 0.01 <= y <= 0.9 and x + y <= 1.0):
        raise ValueError("should be a chromaticity x, y of a light (both 0.01 to 0.9, together at most 1)")
    return xy


def _check_space(name: str) -> str:
    if name.lower() == "source":
        return "source"
    try:
        found = space_by_name(name).name
    except PresetError:
        found = ""
    if found not in SPACES:
        raise ValueError(f"should be source, {', '.join(SPACES)}")
    return found


Share = Annotated[float, Field(ge=0.0, le=1.0)]
Chromaticity = Annotated[
    tuple[float, float],
    AfterValidator(_check_xy),
    WithJsonSchema(
        {
            "type": "array",
            "items": {"type": "number", "minimum": 0.01, "maximum": 0.9},
            "minItems": 2,
            "maxItems": 2,
        }
    ),
]
Toward = Annotated[
    str,
    BeforeValidator(_check_toward),
    WithJsonSchema(
        {
            "anyOf": [
                {"type": "string", "pattern": _TOWARD},
                {"type": "number", "minimum": CCT_RANGE_K[0], "maximum": CCT_RANGE_K[1]},
                {
                    "type": "array",
                    "items": {"type": "number", "minimum": 0.01, "maximum": 0.9},
                    "minItems": 2,
                    "maxItems": 2,
                },
            ]
        }
    ),
]
SpaceName = Annotated[
    str, AfterValidator(_check_space), WithJsonSchema({"type": "string", "enum": ["source", *SPACES]})
]


class _Strict(BaseModel):
    model_config = ConfigDict(
        extra="forbid", frozen=True, strict=True, allow_inf_nan=False, use_attribute_docstrings=True
    )


class OutputDocument(_Strict):
    """How graded frames are encoded."""

    format: OutputFormat = "same"
    """File format; ``same`` keeps the source's (raw files become TIFF)."""
    space: SpaceName = "source"
    """Colour space of the output; ``source`` keeps the file's own."""
    tone: Literal["standard", "linear"] = "standard"
    """Tone curve for raw files: the fixed standard one, or none."""
    exposure_ev: Annotated[float, Field(ge=-8.0, le=8.0)] = 0.0
    """Exposure shift for all frames alike. [stops]"""
    strip_location: bool = False
    """Leave the place where the photograph was taken out of the output."""


class RecipeDocument(_Strict):
    """How to measure and how to correct."""

    opponent: Opponent = "oklab"
    """Opponent space in which casts are told and kept."""
    toward: Toward = "neutral"
    """The white to aim at: ``neutral``, a colour temperature in kelvin, or a chromaticity x, y."""
    keep_yellow_blue: Share = 0.0
    """Share of the yellow-blue cast to leave in: 0 removes all, 1 leaves all."""
    keep_green_magenta: Share = 0.0
    """Share of the green-magenta cast to leave in: 0 removes all, 1 leaves all."""
    adaptation: Transform = "cat16"
    """Chromatic adaptation transform."""
    degree: Share = 1.0
    """Degree of adaptation, 0 (nothing is done) to 1 (complete)."""
    pooling: bool = True
    """Measure frames under one light together; false takes each frame alone."""
    match_bodies: bool = True
    """Bring camera bodies that saw the same light onto one look."""
    coloured_light: Literal["leave", "correct"] = "leave"
    """What to do with stage light and other coloured light."""
    linear_tiff: Referred = "display"
    """What floating-point TIFFs in linear light hold: finished pictures (display), or the light of the scene as a raw
    developer at the camera's daylight setting leaves it (scene)."""
    tolerance_delta_e_2000: Annotated[float, Field(gt=0.0, le=100.0)] | None = None
    """Largest cast of a mid grey that is still in order; null for no check. [Delta E 2000]"""
    output: OutputDocument = OutputDocument()


class FixedDocument(_Strict):
    """A correction that was measured once, applied as it is."""

    from_xy: Chromaticity
    """The light to correct, CIE 1931 x, y (raw files: at the camera's daylight setting)."""
    toward_xy: Chromaticity
    """Where a neutral under that light goes."""
    adaptation: Transform = "cat16"
    """Chromatic adaptation transform."""
    degree: Share = 1.0
    """Degree of adaptation, 0 (nothing is done) to 1 (complete)."""
    keep_yellow_blue: Share = 0.0
    """Share of the yellow-blue cast that toward_xy leaves in; for the record."""
    keep_green_magenta: Share = 0.0
    """Share of the green-magenta cast that toward_xy leaves in; for the record."""
    output: OutputDocument = OutputDocument()
    measured_on_body: Annotated[str, Field(max_length=200)] = ""
    """Camera body: make, model and serial number as the metadata give them."""
    measured_doubt_deg: Annotated[float, Field(ge=0.0, le=180.0)] | None = None
    """Expected error of the measured light. [degrees of recovery angle]"""
    measured_by: Literal["", "patch", "grey-card", "target", "frame", "frames"] = ""
    """What was measured."""
    measured_on_file: Annotated[str, Field(max_length=1000)] = ""
    """Name of the file that was measured."""
    measured_on_sha256: Annotated[str, Field(pattern=r"^(?:[0-9a-f]{64})?$")] = ""
    """SHA-256 of that file."""
    measured_patch_px: (
        Annotated[
            tuple[
                Annotated[int, Field(ge=0)],
                Annotated[int, Field(ge=0)],
                Annotated[int, Field(ge=1)],
                Annotated[int, Field(ge=1)],
            ],
            Field(),
        ]
        | None
    ) = None
    """The patch: x, y, width, height in the stored orientation. [px]"""
    measured_referred: Referred | None = None
    """``scene`` for a raw file, ``display`` for one with a balance baked in."""


class _Document(_Strict):
    schema_link: Annotated[str, Field(alias="$schema", max_length=1000)] = SCHEMA_FILE
    """Where an editor finds the schema of this file."""
    schema_name: Annotated[Literal["grader-preset/1"], Field(alias="schema")]
    """The kind and number of this file's schema."""
    name: Annotated[str, Field(pattern=NAME)]
    """The name it is called by: what can be a file name everywhere, at most 64 characters."""
    description: Annotated[str, Field(max_length=1000)] = ""
    """One line on when to use it."""


class RecipePreset(_Document):
    """Settings to measure and correct with."""

    kind: Literal["recipe"]
    settings: RecipeDocument


class FixedPreset(_Document):
    """One correction, measured once."""

    kind: Literal["fixed"]
    settings: FixedDocument


_KINDS: Final[dict[str, type[RecipePreset | FixedPreset]]] = {
    "recipe": RecipePreset,
    "fixed": FixedPreset,
}


@dataclass(frozen=True, slots=True)
class Checked:
    """A document that passed."""

    name: str
    description: str
    settings: Recipe | Fixed


def check(data: Mapping[str, Any]) -> Checked:
    """Return the settings of a preset document.

    Raises
    ------
    PresetError
        One line about the first thing that is wrong, with a hint.
    """
    kind = _kind_of(data)
    try:
        checked = _KINDS[kind].model_validate_json(json.dumps(data, default=_as_json))
    except ValidationError as error:
        raise _in_plain_words(error, kind) from None
    values = checked.settings.model_dump()
    output = Output(**values.pop("output"))
    settings = Recipe(**values, output=output) if kind == "recipe" else Fixed(**values, output=output)
    return Checked(checked.name, checked.description, settings)


def document(name: str, description: str, settings: Recipe | Fixed) -> dict[str, Any]:
    """Return the preset document of some settings, keys in their order in the file."""
    return {
        "$schema": SCHEMA_FILE,
        "schema": SCHEMA,
        "name": name,
        "description": description,
        "kind": "recipe" if isinstance(settings, Recipe) else "fixed",
        "settings": asdict(settings),
    }


def json_schema() -> dict[str, Any]:
    """Return the JSON Schema (draft 2020-12) of preset documents."""
    union = Annotated[RecipePreset | FixedPreset, Field(discriminator="kind")]
    schema = TypeAdapter[Any](union).json_schema(by_alias=True)
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "$id": f"urn:{SCHEMA.replace('/', ':')}",
        "title": f"grader preset ({SCHEMA})",
        **schema,
    }


def did_you_mean(word: str, known: Sequence[str]) -> str:
    """Return a hint: the known word that is nearest to a wrong one, or all of them."""
    near = difflib.get_close_matches(word, known, n=1, cutoff=0.6)
    return f"did you mean {near[0]!r}?" if near else f"known: {', '.join(known)}"


def _kind_of(data: Mapping[str, Any]) -> str:
    _check_number(data.get("schema"))
    kind = data.get("kind")
    if not isinstance(kind, str) or kind not in _KINDS:
        what = "the kind is missing" if kind is None else f"there is no preset kind {_short(kind)}"
        raise PresetError(what, hint='write "kind": "recipe" or "kind": "fixed"')
    return kind


def _check_number(schema: object) -> None:
    if schema == SCHEMA:
        return
    ours = int(SCHEMA.rpartition("/")[2])
    found = re.fullmatch(r"grader-preset/([0-9]{1,6})", schema) if isinstance(schema, str) else None
    if found is None:
        raise PresetError("this is no grader preset", hint=f'a preset says "schema": "{SCHEMA}"')
    if int(found[1]) > ours:
        hint = f"update grader, or save the preset again with this version, which writes {SCHEMA}"
        raise PresetError(f"the preset was written by a newer grader ({schema})", hint=hint)
    raise PresetError(
        f"{schema} was never in use", hint=f"measure or save the preset again; this version writes {SCHEMA}"
    )


def _in_plain_words(error: ValidationError, kind: str) -> PresetError:
    errors = error.errors(include_url=False)
    first = min(errors, key=lambda e: e["type"] != "extra_forbidden")
    place = tuple(str(p) for p in first["loc"])
    where = ".".join(place)
    if first["type"] == "extra_forbidden":
        known = _known_keys(_KINDS[kind], place[:-1])
        return PresetError(f"unknown key {where!r}", hint=did_you_mean(place[-1], known))
    if first["type"] == "missing":
        return PresetError(f"the key {where!r} is missing")
    words = first["msg"].removeprefix("Value error, ").removeprefix("Input ")
    return PresetError(
        f"{where or 'the preset'}: {words[:1].lower()}{words[1:]}, not {_short(first['input'])}"
    )


def _known_keys(model: type[BaseModel], place: Sequence[str]) -> list[str]:
    for key in place:
        inner = model.model_fields[key].annotation
        if isinstance(inner, type) and issubclass(inner, BaseModel):
            model = inner
    return [info.alias or name for name, info in model.model_fields.items()]


def _as_json(value: object) -> object:
    """Return a NumPy number as a number, anything else that JSON does not know as words."""
    item = getattr(value, "item", None)
    return item() if callable(item) and getattr(value, "ndim", None) == 0 else repr(value)


def _short(value: object) -> str:
    text = json.dumps(value, default=str, ensure_ascii=True)
    return text if len(text) <= 40 else f"{text[:37]}..."
