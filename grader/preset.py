"""Saved settings: JSON documents in, frozen values out, and back.

A preset is either a *recipe* (how to measure and correct) or a *fixed* correction that was measured once.
This is the edge where everything that people write is checked; behind it the settings are
``model.Recipe``, ``model.Fixed`` and ``model.Output``.  Keys in the file, fields in Python and options on
the command line carry the same names.
"""

from __future__ import annotations

import hashlib
import json
import os
import re
from collections.abc import Callable, Iterator, Mapping
from dataclasses import asdict, dataclass, fields, replace
from pathlib import Path
from typing import Any, Final, Literal, TypeVar

from grader.atomic import write_atomic
from grader.errors import PresetError
from grader.model import Fixed, Output, Recipe

MAX_BYTES: Final = 65_536
"""A preset is about one kilobyte; what is larger is something else."""

_AIM_OF_A_RECIPE: Final = ("toward", "keep_yellow_blue", "keep_green_magenta")

Kind = Literal["recipe", "fixed"]
Settings = TypeVar("Settings", Recipe, Fixed)


@dataclass(frozen=True, slots=True)
class Preset:
    """Saved settings under a name.

    Exactly one of ``recipe`` and ``fixed`` is there, as ``kind`` says.  ``digest`` is the SHA-256 of the
    effective settings: two presets with one digest do the same to a file.
    """

    name: str
    description: str
    kind: Kind
    recipe: Recipe | None
    fixed: Fixed | None
    digest: str
    source: Path | None = None
    """The file it was read from; None for one made in a program."""

    @property
    def settings(self) -> Recipe | Fixed:
        """The recipe or the fixed correction, whichever it holds."""
        settings = self.recipe if self.recipe is not None else self.fixed
        if settings is None:
            raise PresetError("the preset holds no settings", hint="make it with make_preset")
        return settings


def load_preset(name_or_path: str | os.PathLike[str]) -> Preset:
    """Read a preset by its name or from a file.

    Parameters
    ----------
    name_or_path : str or path-like
        The name of a shipped preset or of one in the user's folder, or a path that ends in ``.json``.

    Returns
    -------
    Preset

    Raises
    ------
    PresetError
        There is no such preset, or it cannot be used; the message says where and what to do.

    Examples
    --------
    >>> load_preset("evening-warmth").recipe.keep_green_magenta
    0.0
    """
    text = os.fspath(name_or_path)
    if isinstance(name_or_path, os.PathLike) or text.lower().endswith(".json"):
        return _read(Path(text))
    return _read_named(text)


def list_presets(broken: Callable[[PresetError], object] | None = None) -> list[Preset]:
    """Read all presets that have a name: the shipped ones, then the user's, each in order of name.

    Parameters
    ----------
    broken : callable, optional
        Called with the error of each preset that cannot be used; without it the first one is raised.
    """
    presets = []
    for path in _named_files():
        try:
            presets.append(_read_in_folder(path))
        except PresetError as error:
            if broken is None:
                raise
            broken(error)
    return presets


def make_preset(name: str, settings: Recipe | Fixed, description: str = "") -> Preset:
    """Make a preset of settings, checked as if they came from a file.

    Raises
    ------
    PresetError
        A setting or the name is out of bounds.

    Examples
    --------
    >>> make_preset("half-warm", Recipe(keep_yellow_blue=0.5)).kind
    'recipe'
    """
    from grader import preset_document  # noqa: PLC0415 - pydantic costs start-up time

    return _preset_from_document(preset_document.document(name, description, settings), None)


def save_preset(preset: Preset, path: str | os.PathLike[str], *, overwrite: bool = False) -> None:
    """Write a preset to a ``.json`` file, whole or not at all; the same preset gives the same bytes.

    Raises
    ------
    PresetError
        The path does not end in ``.json``.
    WriteFailed
        The file exists and may not be replaced, or cannot be written.
    """
    from grader import preset_document  # noqa: PLC0415 - pydantic costs start-up time

    if Path(path).suffix.lower() != ".json":
        raise PresetError(
            "a preset's file name must end in .json", path=path, hint=f"call it {Path(path).name}.json"
        )
    document = preset_document.document(preset.name, preset.description, preset.settings)
    data = json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n"
    write_atomic(path, data.encode("utf-8"), overwrite=overwrite)


def recipe_with(recipe: Recipe, **overrides: Any) -> Recipe:
    """Return a recipe with some settings replaced, checked as in a preset file.

    Parameters
    ----------
    recipe : Recipe
        The settings to start from.
    **overrides
        Fields of ``Recipe`` and of ``Output`` by name; None leaves a setting as it is.

    Raises
    ------
    PresetError
        A name is unknown or a value out of bounds.

    Examples
    --------
    >>> recipe_with(Recipe(), keep_yellow_blue=0.3, space="sRGB").output.space
    'sRGB'
    >>> recipe_with(Recipe(), toward="5600K").toward
    '5600'
    """
    return _with(recipe, overrides)


def fixed_with(fixed: Fixed, **overrides: Any) -> Fixed:
    """Return a fixed correction with some settings replaced, checked; as ``recipe_with``.

    Raises
    ------
    PresetError
        A name is unknown, a value out of bounds, or the aim would change: what is kept of the cast is in
        ``toward_xy`` already.
    """
    aims = [key for key in _AIM_OF_A_RECIPE if overrides.get(key) is not None]
    if aims:
        hint = f"measure it again with another {aims[0]}, or use a recipe"
        raise PresetError(f"{aims[0]!r} cannot be changed in a fixed correction", hint=hint)
    return _with(fixed, overrides)


def digest_of(settings: Recipe | Fixed) -> str:
    """Return the SHA-256 of the settings that decide about pixels and flags, as hexadecimal digits.

    Where a fixed correction was measured is left out: it changes nothing in the result.
    """
    effective = {k: v for k, v in asdict(settings).items() if not k.startswith("measured_")}
    canonical = json.dumps(
        [type(settings).__name__, effective], sort_keys=True, separators=(",", ":"), allow_nan=False
    )
    return hashlib.sha256(canonical.encode("utf-8")).hexdigest()


def preset_schema() -> dict[str, Any]:
    """Return the JSON Schema (draft 2020-12) of preset files."""
    from grader import preset_document  # noqa: PLC0415 - pydantic costs start-up time

    return preset_document.json_schema()


def user_folder() -> Path:
    """Return the folder where a user's own presets are looked up; it need not exist."""
    import platformdirs  # noqa: PLC0415 - not needed to grade

    return platformdirs.user_config_path("grader", appauthor=False) / "presets"


def shipped_folder() -> Path:
    """Return the folder of the presets that come with grader: packaged, or of the source tree.

    Raises
    ------
    PresetError
        The installation is incomplete.
    """
    here = Path(__file__).resolve().parent
    for folder in (here / "presets", here.parent / "presets"):
        if any(folder.glob("*.json")):
            return folder
    raise PresetError("the presets that come with grader are missing", path=here, hint="install grader again")


def _with(settings: Settings, overrides: Mapping[str, Any]) -> Settings:
    from grader import preset_document  # noqa: PLC0415 - pydantic costs start-up time

    given = {k: v for k, v in overrides.items() if v is not None}
    own = {f.name for f in fields(settings)} - {"output"}
    out = {f.name for f in fields(Output)}
    for key in given:
        if key not in own | out:
            raise PresetError(
                f"there is no setting {key!r}", hint=preset_document.did_you_mean(key, sorted(own | out))
            )
    changed = replace(
        settings,
        output=replace(settings.output, **{k: v for k, v in given.items() if k in out}),
        **{k: v for k, v in given.items() if k in own},
    )
    checked = preset_document.check(preset_document.document("settings", "", changed))
    return checked.settings  # type: ignore[return-value]


def _preset_from_document(document: Mapping[str, Any], source: Path | None) -> Preset:
    from grader import preset_document  # noqa: PLC0415 - pydantic costs start-up time

    try:
        checked = preset_document.check(document)
    except PresetError as error:
        raise PresetError(error.message, path=source, hint=error.hint) from None
    settings = checked.settings
    return Preset(
        name=checked.name,
        description=checked.description,
        kind="recipe" if isinstance(settings, Recipe) else "fixed",
        recipe=settings if isinstance(settings, Recipe) else None,
        fixed=settings if isinstance(settings, Fixed) else None,
        digest=digest_of(settings),
        source=source,
    )


def _read(path: Path) -> Preset:
    if path.suffix.lower() != ".json":
        raise PresetError("a preset file must end in .json", path=path)
    return _preset_from_document(_parse(_bytes_of(path), path), path)


def _bytes_of(path: Path) -> bytes:
    try:
        if not path.is_file():
            hint = "check the path; 'grader presets' lists the presets that have a name"
            raise PresetError("there is no such preset file", path=path, hint=hint)
        with path.open("rb") as stream:
            data = stream.read(MAX_BYTES + 1)
    except (OSError, ValueError) as error:
        if isinstance(error, PresetError):
            raise
        reason = getattr(error, "strerror", None) or str(error)
        raise PresetError(f"the preset cannot be read ({reason})", path=path) from error
    if len(data) > MAX_BYTES:
        raise PresetError(f"larger than {MAX_BYTES // 1024} KiB, so this is no preset", path=path)
    return data


def _parse(data: bytes, path: Path) -> dict[str, Any]:
    try:
        document = json.loads(
            data.decode("utf-8-sig"), object_pairs_hook=_unique, parse_constant=_refuse_constant
        )
    except PresetError as error:
        raise PresetError(error.message, path=path, hint=error.hint) from None
    except UnicodeDecodeError:
        raise PresetError("not UTF-8 text, so this is no preset", path=path) from None
    except json.JSONDecodeError as error:
        where = f"line {error.lineno}, column {error.colno}"
        raise PresetError(f"not JSON ({error.msg.lower()} at {where})", path=path) from None
    except (ValueError, RecursionError):
        raise PresetError("not usable as JSON (nested too deep, or a number too long)", path=path) from None
    if not isinstance(document, dict):
        raise PresetError("not a preset: the file must hold one JSON object", path=path)
    return document


def _unique(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) < len(pairs):
        seen: set[str] = set()
        twice = next(k for k, _ in pairs if k in seen or seen.add(k))  # type: ignore[func-returns-value]
        raise PresetError(f"the key {twice!r} stands twice", hint="keep one of them")
    return found


def _refuse_constant(text: str) -> float:
    raise PresetError(f"{text} is not a number that can be used", hint="write a finite number")


def _read_named(name: str) -> Preset:
    from grader import preset_document  # noqa: PLC0415 - pydantic costs start-up time

    if not re.fullmatch(preset_document.NAME, name):
        raise PresetError(
            f"{name!r} is not a preset's name", hint="give a name from 'grader presets', or a .json file"
        )
    found = [p for p in _named_files() if p.stem == name]
    if not found:
        known = [p.stem for p in _named_files()]
        raise PresetError(
            f"there is no preset named {name!r}", hint=preset_document.did_you_mean(name, known)
        )
    if len(found) > 1:
        raise PresetError(
            f"two presets are named {name!r}", path=found[1], hint="rename this one, or give its path"
        )
    return _read_in_folder(found[0])


def _read_in_folder(path: Path) -> Preset:
    preset = _read(path)
    if preset.name != path.stem:
        hint = f"rename the file to {preset.name}.json, or change the name in it"
        raise PresetError(f"the preset in it is named {preset.name!r}", path=path, hint=hint)
    return preset


def _named_files() -> Iterator[Path]:
    for folder in (shipped_folder(), user_folder()):
        try:
            yield from sorted(p for p in folder.glob("*.json") if not p.name.endswith(".schema.json"))
        except OSError:
            continue
