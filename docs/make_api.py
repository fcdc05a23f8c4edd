"""Write docs/API.md from the docstrings: ``python docs/make_api.py``."""

import ast
import dataclasses
import inspect
import itertools
import re
from importlib import import_module
from pathlib import Path

import grader

TARGET = Path(__file__).with_name("API.md")
HEAD = """# Python API

Made from the docstrings by `python docs/make_api.py`; the examples run as tests. `import grader` gives the names of the first part;
the modules below it are for scripts that need more. Types are checked (`py.typed`). Arrays are never changed in place. The words are those of
the [glossary](GLOSSARY.md), what goes into a preset stands in [PRESETS.md](PRESETS.md).
"""
MODULES = (
    "grader.preset",
    "grader.cast.sample",
    "grader.cast.card",
    "grader.cast.target",
    "grader.clf",
    "grader.batch",
    "grader.log",
    "grader.colour.spaces",
    "grader.colour.white",
)
SECTIONS = ("Parameters", "Returns", "Yields", "Raises", "References", "Examples", "Notes")


def document() -> str:
    """Return the whole page."""
    parts = [HEAD, "\n## grader\n"]
    names = [name for name in grader.__all__ if not name.startswith("__")]
    shown = {name: getattr(grader, name) for name in names}
    order = (inspect.isfunction, lambda v: inspect.isclass(v) and not _is_error(v), _is_error)
    for kind in order:
        parts += [_entry(f"grader.{name}", value) for name, value in shown.items() if kind(value)]
    seen = {id(value) for value in shown.values()}
    for name in MODULES:
        module = import_module(name)
        own = [v for v in _own(module) if id(v) not in seen]
        parts.append(f"\n## {name}\n\n{_markdown(inspect.getdoc(module) or '')}")
        parts += [_entry(f"{name}.{value.__name__}", value) for value in own]
    return "".join(parts)


def _is_error(value) -> bool:
    return inspect.isclass(value) and issubclass(value, BaseException)


def _own(module):
    """Return a module's public functions and classes: what it lists, else what it defines, in order."""
    listed = getattr(module, "__all__", None)
    if listed is not None:
        named = [getattr(module, name) for name in listed]
        return [value for value in named if inspect.isfunction(value) or inspect.isclass(value)]
    return [
        value
        for name, value in vars(module).items()
        if not name.startswith("_")
        and (inspect.isfunction(value) or inspect.isclass(value))
        and value.__module__ == module.__name__
    ]


def _entry(name: str, value) -> str:
    heading = f"\n### {name}\n\n"
    if inspect.isclass(value):
        return heading + _markdown(_class_doc(value)) + _fields(value) + _methods(name, value)
    return (
        heading
        + f"```python\n{_signature(value, name.rpartition('.')[2])}\n```\n\n"
        + _markdown(inspect.getdoc(value) or "")
    )


def _class_doc(value) -> str:
    """Return the docstring; not the signature that dataclasses make up in its place."""
    text = inspect.getdoc(value) or ""
    return "" if text.startswith(f"{value.__name__}(") else text


def _signature(value, name: str) -> str:
    signature = inspect.signature(value)
    parameters, starred = [], False
    for parameter in signature.parameters.values():
        if parameter.kind is parameter.KEYWORD_ONLY and not starred:
            parameters.append("*")
        starred = starred or parameter.kind in (parameter.KEYWORD_ONLY, parameter.VAR_POSITIONAL)
        parameters.append(_parameter(parameter))
    tail = "" if signature.return_annotation is signature.empty else f" -> {signature.return_annotation}"
    text = f"{name}({', '.join(parameters)}){tail}"
    return text if len(text) <= 96 else f"{name}(\n    " + ",\n    ".join(parameters) + f",\n){tail}"


def _parameter(parameter: inspect.Parameter) -> str:
    stars = {parameter.VAR_POSITIONAL: "*", parameter.VAR_KEYWORD: "**"}.get(parameter.kind, "")
    typed = "" if parameter.annotation is parameter.empty else f": {parameter.annotation}"
    default = "" if parameter.default is parameter.empty else f" = {parameter.default!r}"
    return f"{stars}{parameter.name}{typed}{default}"


def _fields(value) -> str:
    """Return a table of a dataclass's fields, with the words that follow each in the source."""
    if not dataclasses.is_dataclass(value):
        return ""
    words = _words_of_fields(value)
    rows = []
    for field in dataclasses.fields(value):
        default = "" if field.default is dataclasses.MISSING else f"`{field.default!r}`"
        kind = str(field.type).replace("|", "\\|")
        rows.append(f"| `{field.name}` | `{kind}` | {default} | {words.get(field.name, '')} |")
    return "\n| field | type | default | |\n|---|---|---|---|\n" + "\n".join(rows) + "\n"


def _words_of_fields(value) -> dict[str, str]:
    body = ast.parse(inspect.getsource(value)).body[0].body
    words = {}
    for node, after in itertools.pairwise(body):
        if (
            isinstance(node, ast.AnnAssign)
            and isinstance(after, ast.Expr)
            and isinstance(after.value, ast.Constant)
        ):
            words[node.target.id] = _inline(" ".join(inspect.cleandoc(str(after.value.value)).split()))
    return words


def _methods(name: str, value) -> str:
    if _is_error(value):
        return ""
    parts = []
    for key, member in vars(value).items():
        function = getattr(member, "__func__", member)
        if key.startswith("_") or not (inspect.isfunction(function) or isinstance(member, property)):
            continue
        if isinstance(member, property):
            parts.append(f"\n**`.{key}`** {_markdown(inspect.getdoc(member) or '')}")
        else:
            parts.append(f"\n#### {name}.{key}\n\n```python\n{_signature(function, key)}\n```\n\n")
            parts.append(_markdown(inspect.getdoc(function) or ""))
    return "".join(parts)


def _inline(text: str) -> str:
    """Return reStructuredText's inline marks as Markdown's."""
    text = re.sub(r"``(.+?)``", r"`\1`", text)
    return re.sub(r"\[(\d+)\]_", r"[\1]", text)


def _markdown(docstring: str) -> str:
    """Return a numpy-form docstring as Markdown."""
    head, sections = _split(docstring)
    text = _paragraphs(head)
    for title, lines in sections:
        text += f"\n**{title}**\n\n" + _section(title, lines)
    return text


def _split(docstring: str) -> tuple[list[str], list[tuple[str, list[str]]]]:
    head, sections = [], []
    lines = docstring.splitlines()
    for index, line in enumerate(lines):
        if line in SECTIONS and index + 1 < len(lines) and set(lines[index + 1]) == {"-"}:
            sections.append((line, []))
        elif sections and set(line) == {"-"} and lines[index - 1] == sections[-1][0]:
            continue
        else:
            (sections[-1][1] if sections else head).append(line)
    return head, sections


def _section(title: str, lines: list[str]) -> str:
    if title == "Examples":
        return "```pycon\n" + "\n".join(lines).strip("\n") + "\n```\n"
    if title == "References":
        joined = re.sub(r"\s+", " ", " ".join(lines))
        return "".join(f"- {ref.strip()}\n" for ref in re.split(r"\.\. (?=\[\d+\])", joined) if ref.strip())
    if title == "Notes":
        return _paragraphs(lines)
    items: list[tuple[str, str, list[str]]] = []
    for line in lines:
        if line and not line.startswith(" "):
            name, _, kind = line.partition(" : ")
            items.append((name, kind, []))
        elif line.strip():
            items[-1][2].append(line.strip())
    return "".join(_item(*item) for item in items)


def _item(name: str, kind: str, words: list[str]) -> str:
    typed = f" ({_inline(kind)})" if kind else ""
    said = f": {_inline(' '.join(words))}" if words else ""
    return f"- `{name}`{typed}{said}\n"


def _paragraphs(lines: list[str]) -> str:
    """Return running text; literal blocks after ``::`` and doctests become code."""
    text, code = [], []
    for line in [*lines, ""]:
        if line.startswith(("    ", ">>>")):
            code.append(line.removeprefix("    "))
            continue
        if code and line.strip():
            text += ["```text", *code, "```", ""]
            code = []
        if line.strip() != "::":
            text.append(_inline(re.sub(r"::$", ":", line)))
    if code:
        text += ["```text", *code, "```"]
    return re.sub(r"\n{3,}", "\n\n", "\n".join(text)).strip("\n") + "\n"


if __name__ == "__main__":
    TARGET.write_text(document(), encoding="utf-8")
