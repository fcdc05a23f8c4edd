"""Presets: what is written comes back, what is wrong is refused in one line."""

from __future__ import annotations

import json
import subprocess
import sys
from dataclasses import fields, replace
from pathlib import Path

import jsonschema
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from grader import preset, preset_document
from grader.errors import GraderError, PresetError, WriteFailed
from grader.model import Fixed, Output, Recipe

ROOT = Path(__file__).parents[1]
RECIPE = {"schema": "grader-preset/1", "name": "hall", "kind": "recipe", "settings": {}}
FIXED = {
    "schema": "grader-preset/1",
    "name": "wall",
    "kind": "fixed",
    "settings": {"from_xy": [0.44, 0.40], "toward_xy": [0.3127, 0.329]},
}


@pytest.fixture(autouse=True)
def _own_folder(tmp_path, monkeypatch):
    monkeypatch.setattr(preset, "user_folder", lambda: tmp_path / "own")
    (tmp_path / "own").mkdir()


def _write(folder: Path, document, name="p.json") -> Path:
    path = folder / name
    path.write_bytes(document if isinstance(document, bytes) else json.dumps(document).encode())
    return path


def _refused(folder, document, *words, name="p.json"):
    with pytest.raises(PresetError) as caught:
        preset.load_preset(_write(folder, document, name))
    text = str(caught.value)
    assert "\n" not in text
    for word in words:
        assert word in text
    return text


def _preset_or_error(path):
    try:
        return preset.load_preset(path)
    except PresetError as error:
        return error


def _with_setting(document, key, value):
    return {**document, "settings": {**document["settings"], key: value}}


# --- what is shipped


def test_shipped_presets_load_by_name_and_meet_the_published_schema():
    schema = json.loads((ROOT / "docs" / "preset.schema.json").read_text())
    jsonschema.Draft202012Validator.check_schema(schema)
    shipped = preset.list_presets()
    assert len(shipped) >= 6
    for each in shipped:
        assert preset.load_preset(each.name) == each
        assert each.description.endswith(".")
        jsonschema.validate(json.loads(each.source.read_text()), schema)
        assert each.source.read_text() == _saved_text(each, each.source.parent)


def _saved_text(each, folder):
    document = preset_document.document(each.name, each.description, each.settings)
    return json.dumps(document, indent=2, ensure_ascii=False) + "\n"


def test_every_shipped_preset_is_described():
    text = (ROOT / "docs" / "PRESETS.md").read_text(encoding="utf-8")
    for each in preset.list_presets():
        assert f"### `{each.name}`" in text
        assert each.description in text


def test_digests_tell_the_shipped_presets_apart():
    digests = [each.digest for each in preset.list_presets()]
    assert len(set(digests)) == len(digests)


def test_published_schemas_are_current():
    current = json.dumps(preset.preset_schema(), indent=2) + "\n"
    for folder in ("docs", "presets"):
        assert (ROOT / folder / "preset.schema.json").read_text() == current


def test_lamps_3200_stands_on_the_planckian_locus():
    """CIE 1931 xy of a 3200 K black body, from colour-science."""
    import warnings

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import colour
    spectrum = colour.sd_blackbody(3200, colour.SpectralShape(360, 780, 1))
    expected = colour.XYZ_to_xy(colour.sd_to_XYZ(spectrum, method="Integration"))
    assert preset.load_preset("lamps-3200").fixed.from_xy == pytest.approx(expected, abs=1e-4)


# --- the document and the values behind it


@pytest.mark.parametrize(
    ("model", "value"),
    [
        (preset_document.RecipeDocument, Recipe),
        (preset_document.FixedDocument, Fixed),
        (preset_document.OutputDocument, Output),
    ],
)
def test_file_and_python_have_the_same_fields_and_defaults(model, value):
    assert list(model.model_fields) == [f.name for f in fields(value)]
    given_ = {} if value is not Fixed else {"from_xy": (0.3, 0.3), "toward_xy": (0.3, 0.3)}
    from_file = model(**given_).model_dump()
    here = value(**given_)
    for name in model.model_fields:
        default = getattr(here, name)
        assert from_file[name] == (
            default if name != "output" else preset_document.OutputDocument().model_dump()
        )


def test_an_empty_recipe_is_the_default(tmp_path):
    loaded = preset.load_preset(_write(tmp_path, RECIPE))
    assert loaded.recipe == Recipe()
    assert loaded.fixed is None
    assert loaded.kind == "recipe"
    assert loaded.settings is loaded.recipe


def test_byte_order_mark_of_an_editor_is_accepted(tmp_path):
    loaded = preset.load_preset(_write(tmp_path, b"\xef\xbb\xbf" + json.dumps(RECIPE).encode()))
    assert loaded.name == "hall"


@pytest.mark.parametrize(
    ("written", "meant"),
    [
        ("neutral", "neutral"),
        ("Neutral", "neutral"),
        (5600, "5600"),
        ("5600", "5600"),
        ("5600K", "5600"),
        (5600.5, "5600.5"),
        ([0.3127, 0.329], "0.3127,0.329"),
        ("0.3127,0.329", "0.3127,0.329"),
    ],
)
def test_toward(tmp_path, written, meant):
    assert (
        preset.load_preset(_write(tmp_path, _with_setting(RECIPE, "toward", written))).recipe.toward == meant
    )


shares = st.floats(0, 1)
xys = st.tuples(st.floats(0.2, 0.5), st.floats(0.2, 0.45))
outputs = st.builds(
    Output,
    format=st.sampled_from(["same", "tiff", "jpeg", "png", "dng"]),
    space=st.sampled_from(["source", "sRGB", "Rec.2020"]),
    tone=st.sampled_from(["standard", "linear"]),
    exposure_ev=st.floats(-8, 8),
    strip_location=st.booleans(),
)
recipes = st.builds(
    Recipe,
    opponent=st.sampled_from(["oklab", "ciecam16", "cielab"]),
    toward=st.just("neutral")
    | st.integers(1667, 25_000).map(str)
    | xys.map(lambda xy: f"{xy[0]!r},{xy[1]!r}"),
    keep_yellow_blue=shares,
    keep_green_magenta=shares,
    adaptation=st.sampled_from(["cat16", "bradford", "cat02", "von-kries"]),
    degree=shares,
    pooling=st.booleans(),
    match_bodies=st.booleans(),
    coloured_light=st.sampled_from(["leave", "correct"]),
    linear_tiff=st.sampled_from(["display", "scene"]),
    tolerance_delta_e_2000=st.none() | st.floats(0.01, 100),
    output=outputs,
)
fixed_ones = st.builds(
    Fixed,
    from_xy=xys,
    toward_xy=xys,
    degree=shares,
    output=outputs,
    measured_on_body=st.text(max_size=20).filter(lambda t: t.isprintable()),
    measured_doubt_deg=st.none() | st.floats(0, 30),
    measured_patch_px=st.none() | st.tuples(*[st.integers(1, 9999)] * 4),
    measured_on_sha256=st.just("") | st.just("0f" * 32),
)


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(settings_=recipes | fixed_ones)
def test_saved_and_read_again_is_the_same(tmp_path, settings_):
    made = preset.make_preset("any", settings_, "A line.")
    path = tmp_path / "any.json"
    preset.save_preset(made, path, overwrite=True)
    first = path.read_bytes()
    again = preset.load_preset(path)
    assert again.settings == settings_
    assert again.digest == made.digest
    preset.save_preset(again, path, overwrite=True)
    assert path.read_bytes() == first
    jsonschema.validate(json.loads(first), preset.preset_schema())


def test_digest_is_of_what_matters_to_the_result():
    lamp = Fixed((0.44, 0.40), (0.3127, 0.329), measured_on_file="a.dng")
    assert preset.digest_of(lamp) == preset.digest_of(replace(lamp, measured_on_file="b.dng"))
    assert preset.digest_of(lamp) != preset.digest_of(replace(lamp, degree=0.9))
    assert preset.digest_of(Recipe()) == preset.make_preset("x", Recipe(), "words").digest
    assert preset.digest_of(Recipe()) != preset.digest_of(Recipe(output=Output(space="sRGB")))


# --- overrides


def test_recipe_with_replaces_what_is_given_and_no_more():
    changed = preset.recipe_with(Recipe(keep_yellow_blue=0.2), toward=5000, format="png", degree=None)
    assert changed == Recipe(keep_yellow_blue=0.2, toward="5000", output=Output(format="png"))
    assert preset.recipe_with(Recipe(), space="srgb").output.space == "sRGB"
    assert preset.fixed_with(Fixed((0.4, 0.4), (0.3, 0.3)), degree=0.5).degree == 0.5


@pytest.mark.parametrize(
    ("override", "words"),
    [
        ({"keep_yelow_blue": 0.1}, "did you mean 'keep_yellow_blue'"),
        ({"keep_yellow_blue": 3.0}, "keep_yellow_blue"),
        ({"keep_yellow_blue": float("nan")}, "keep_yellow_blue"),
        ({"exposure_ev": float("inf")}, "exposure_ev"),
        ({"toward": "somewhere"}, "colour temperature"),
        ({"space": "sGRB"}, "sRGB"),
        ({"pooling": object()}, "pooling"),
    ],
)
def test_overrides_are_checked(override, words):
    with pytest.raises(PresetError, match=words):
        preset.recipe_with(Recipe(), **override)


@pytest.mark.parametrize(
    "override", [{"keep_yellow_blue": 0.5}, {"keep_green_magenta": 0.0}, {"toward": "5000"}]
)
def test_the_aim_of_a_fixed_correction_is_fixed(override):
    with pytest.raises(PresetError, match="cannot be changed in a fixed correction"):
        preset.fixed_with(Fixed((0.4, 0.4), (0.3, 0.3)), **override)


# --- what is refused


@pytest.mark.parametrize(
    ("key", "value"),
    [
        ("keep_yellow_blue", 1.5),
        ("keep_yellow_blue", -0.1),
        ("keep_yellow_blue", "0.5"),
        ("keep_yellow_blue", True),
        ("keep_yellow_blue", None),
        ("degree", 2),
        ("pooling", 1),
        ("pooling", "yes"),
        ("adaptation", "cat99"),
        ("tolerance_delta_e_2000", 0),
        ("tolerance_delta_e_2000", 1e9),
        ("toward", ""),
        ("toward", 300),
        ("toward", 1e9),
        ("toward", True),
        ("toward", [0.3]),
        ("toward", [0.3, True]),
        ("toward", [0.3, "0.3"]),
        ("toward", "nan"),
        ("toward", "0.9,0.9"),
        ("toward", {"x": 0.3}),
        ("toward", "../../hero.jpg"),
        ("output", {"exposure_ev": 99}),
        ("output", {"format": "bmp"}),
        ("output", {"space": "linear Display P3"}),
        ("output", []),
    ],
)
def test_absurd_values_are_refused_with_their_place(tmp_path, key, value):
    _refused(tmp_path, _with_setting(RECIPE, key, value), "p.json: ", f"settings.{key}")


@pytest.mark.parametrize(
    ("key", "value"),
    [
        ("from_xy", [0.0, 0.3]),
        ("from_xy", [0.8, 0.8]),
        ("from_xy", [0.3]),
        ("from_xy", "0.3,0.3"),
        ("toward_xy", None),
        ("measured_patch_px", [0, 0, 0, 1]),
        ("measured_patch_px", [0, 0, 1.5, 1]),
        ("measured_on_sha256", "abc"),
        ("measured_doubt_deg", -1),
    ],
)
def test_absurd_fixed_values_are_refused(tmp_path, key, value):
    _refused(tmp_path, _with_setting(FIXED, key, value), f"settings.{key}")


@pytest.mark.parametrize("number", ["NaN", "Infinity", "-Infinity", "1e999"])
def test_numbers_that_are_none(tmp_path, number):
    text = json.dumps(_with_setting(RECIPE, "degree", 0.25)).replace("0.25", number)
    _refused(tmp_path, text.encode(), "finite number")


@pytest.mark.parametrize(
    ("document", "words"),
    [
        ({**RECIPE, "desciption": "x"}, "did you mean 'description'"),
        (_with_setting(RECIPE, "keep_yelow_blue", 1), "did you mean 'keep_yellow_blue'"),
        (_with_setting(RECIPE, "output", {"spaces": "sRGB"}), "did you mean 'space'"),
        (_with_setting(RECIPE, "zzz", 1), "known: opponent"),
        ({**RECIPE, "kind": "receipt"}, "no preset kind"),
        ({k: v for k, v in RECIPE.items() if k != "kind"}, "kind is missing"),
        ({k: v for k, v in RECIPE.items() if k != "name"}, "'name' is missing"),
        ({k: v for k, v in RECIPE.items() if k != "schema"}, "no grader preset"),
        ({**FIXED, "settings": {}}, "from_xy' is missing"),
        ({**RECIPE, "kind": "fixed", "settings": {"pooling": True}}, "unknown key 'settings.pooling'"),
        ({**RECIPE, "schema": "grader-preset/2"}, "update grader"),
        ({**RECIPE, "schema": "grader-preset/0"}, "never in use"),
        ({**RECIPE, "schema": "grader-log/1"}, "no grader preset"),
        ({**RECIPE, "schema": 1}, "no grader preset"),
        ({**RECIPE, "name": "../up"}, "name"),
        ({**RECIPE, "name": ""}, "name"),
        ({**RECIPE, "name": "a\nb"}, "name"),
        ({**RECIPE, "name": "x" * 65}, "name"),
        ({**RECIPE, "name": "\ud800"}, ""),
        ({**RECIPE, "settings": [1]}, "settings"),
        ([RECIPE], "one JSON object"),
        (b"", "not JSON"),
        (b"{", "line 1"),
        (b"\xff\xfe{", "not UTF-8"),
        (b"[" * 60_000, "nested too deep"),
        (b'{"schema": ' + b"9" * 6000 + b"}", "number too long"),
        (b'{"schema": "grader-preset/1", "schema": "grader-preset/1"}', "stands twice"),
        (b'{"settings": {"degree": 1, "degree": 0}}', "'degree' stands twice"),
        (b" " * 70_000, "64 KiB"),
    ],
)
def test_documents_that_cannot_be_used(tmp_path, document, words):
    _refused(tmp_path, document, words)


def test_unknown_name_suggests_the_nearest():
    with pytest.raises(PresetError, match="did you mean 'copy-stand'"):
        preset.load_preset("copystand")
    with pytest.raises(PresetError, match="known: copy-stand, "):
        preset.load_preset("qqq")


@pytest.mark.parametrize(
    "name", ["", ".", "..", "../full-neutral", "a/b", "a\\b", "C:x", "/etc/passwd", "a\0b", "*", "~x"]
)
def test_a_name_cannot_climb(name):
    with pytest.raises(PresetError, match="is not a preset's name"):
        preset.load_preset(name)


def test_paths_that_are_no_preset(tmp_path):
    for path, words in [
        (tmp_path / "none.json", "no such preset file"),
        (tmp_path, "must end in .json"),
        ("\0.json", "no such preset|cannot be read"),
        ("x" * 5000 + ".json", "no such preset|cannot be read"),
    ]:
        with pytest.raises(PresetError, match=words):
            preset.load_preset(path)
    (tmp_path / "folder.json").mkdir()
    with pytest.raises(PresetError, match="no such preset file"):
        preset.load_preset(tmp_path / "folder.json")


json_values = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=12), inner, max_size=4),
    max_leaves=8,
)
known_keys = st.sampled_from(
    ["$schema", "schema", "name", "description", "kind", "settings", "toward", "from_xy", "output", "degree"]
)


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data(), base=st.sampled_from([RECIPE, FIXED]))
def test_only_preset_errors_come_out(tmp_path, data, base):
    inner = data.draw(st.dictionaries(known_keys, json_values, max_size=3))
    outer = data.draw(st.dictionaries(known_keys, json_values, max_size=2))
    document = {**base, "settings": {**base["settings"], **inner}, **outer}
    loaded = _preset_or_error(_write(tmp_path, document))
    if isinstance(loaded, PresetError):
        assert "\n" not in str(loaded)
    else:
        assert preset.make_preset(loaded.name, loaded.settings).digest == loaded.digest


@settings(max_examples=100, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(at=st.integers(0, 400), byte=st.integers(0, 255))
def test_a_damaged_file_gives_a_preset_error_or_a_preset(tmp_path, at, byte):
    good = bytearray(preset.load_preset("lamps-3200").source.read_bytes())
    good[at % len(good)] = byte
    assert "\n" not in str(_preset_or_error(_write(tmp_path, bytes(good))))


# --- the user's own folder


def test_own_presets_are_found_by_name(tmp_path):
    preset.save_preset(preset.make_preset("hall", Recipe(degree=0.5)), tmp_path / "own" / "hall.json")
    assert preset.load_preset("hall").recipe.degree == 0.5
    assert preset.list_presets()[-1].name == "hall"


def test_a_shipped_name_is_not_shadowed(tmp_path):
    preset.save_preset(
        preset.make_preset("full-neutral", Recipe(degree=0.5)), tmp_path / "own" / "full-neutral.json"
    )
    with pytest.raises(PresetError, match="two presets are named"):
        preset.load_preset("full-neutral")


def test_name_in_the_file_and_of_the_file_must_agree(tmp_path):
    preset.save_preset(preset.make_preset("hall", Recipe()), tmp_path / "own" / "other.json")
    with pytest.raises(PresetError, match=r"rename the file to hall\.json"):
        preset.load_preset("other")


def test_one_broken_preset_does_not_hide_the_others(tmp_path):
    _write(tmp_path / "own", b"{", "broken.json")
    found = []
    listed = preset.list_presets(broken=found.append)
    assert len(listed) >= 6
    assert [Path(e.path).name for e in found] == ["broken.json"]
    with pytest.raises(PresetError):
        preset.list_presets()


# --- writing


def test_save_refuses_to_overwrite_and_leaves_nothing_behind(tmp_path):
    made = preset.make_preset("hall", Recipe())
    path = tmp_path / "hall.json"
    preset.save_preset(made, path)
    with pytest.raises(WriteFailed, match="exists already"):
        preset.save_preset(made, path)
    with pytest.raises(WriteFailed):
        preset.save_preset(made, tmp_path / "missing" / "hall.json")
    with pytest.raises(PresetError, match=r"\.json"):
        preset.save_preset(made, tmp_path / "hall")
    with pytest.raises(GraderError):
        preset.save_preset(made, tmp_path / "own", overwrite=True)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["hall.json", "own"]


def test_make_preset_checks_like_a_file():
    with pytest.raises(PresetError, match="degree"):
        preset.make_preset("x", Recipe(degree=7.0))
    with pytest.raises(PresetError, match="name"):
        preset.make_preset("a/b", Recipe())


def test_an_empty_preset_says_so():
    with pytest.raises(PresetError, match="no settings"):
        _ = preset.Preset("x", "", "recipe", None, None, "").settings


def test_pydantic_is_not_needed_until_a_preset_is_read():
    code = "import sys, grader, grader.preset; sys.exit('pydantic' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], cwd=ROOT, check=False).returncode == 0


def test_the_example_in_the_documentation_loads(tmp_path):
    text = (ROOT / "docs" / "PRESETS.md").read_text(encoding="utf-8")
    example = text.split("```json\n")[1].split("```")[0]
    loaded = preset.load_preset(_write(tmp_path, example.encode(), "town-hall.json"))
    assert loaded.recipe == Recipe(keep_yellow_blue=0.3, output=Output(format="tiff"))
