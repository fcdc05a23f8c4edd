"""Which files a batch takes, and where each output goes.  Paths only: no file is opened here."""

from __future__ import annotations

import glob
import os
import unicodedata
from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path, PurePath

from grader.errors import MissingFile, PresetError

RAW_SUFFIXES = frozenset(
    [
        ".3fr",
        ".arw",
        ".bay",
        ".cr2",
        ".cr3",
        ".crw",
        ".dcr",
        ".dng",
        ".erf",
        ".fff",
        ".iiq",
        ".k25",
        ".kdc",
        ".mef",
        ".mos",
        ".mrw",
        ".nef",
        ".nrw",
        ".orf",
        ".pef",
        ".raf",
        ".raw",
        ".rw2",
        ".rwl",
        ".sr2",
        ".srf",
        ".srw",
        ".x3f",
    ]
)
PICTURE_SUFFIXES = RAW_SUFFIXES | frozenset([".tif", ".tiff", ".jpg", ".jpeg", ".jpe", ".png"])
"""Suffixes that make a file in a *folder* part of a batch; a file named by itself is always taken."""


@dataclass(frozen=True, slots=True)
class Source:
    """One input file: its path as the user gave it, and its place below the common folder."""

    path: str
    relative: PurePath


def find_sources(
    paths: Iterable[str | os.PathLike[str]], *, recurse: bool = False, leave_out: Sequence[Path] = ()
) -> tuple[list[Source], list[MissingFile]]:
    """Return the files that ``paths`` name, and an error for each path that names nothing.

    Parameters
    ----------
    paths : iterable of path-like
        Files, folders, or glob patterns (for shells that do not expand them).
    recurse : bool
        Go down into sub-folders.
    leave_out : sequence of Path
        Folders whose content is never taken (the output folder).

    Returns
    -------
    sources, missing
        Sources in a stable order (by place), each file once; the errors in the order given.
    """
    missing: list[MissingFile] = []
    found: dict[str, str] = {}
    outside = [os.path.realpath(folder) for folder in leave_out]
    for path_like in paths:
        given, told = os.fspath(path_like), len(missing)
        files = _expand(given, recurse=recurse, unreadable=missing)
        if not files and len(missing) == told:
            missing.append(_missing(given, recurse=recurse))
        for path in files:
            real = os.path.realpath(path)
            if not any(_is_inside(real, folder) for folder in outside):
                found.setdefault(real, path)
            elif path == given:
                missing.append(
                    MissingFile(
                        "it lies in the output folder", path=given, hint="name another --out, or leave it out"
                    )
                )
    unique = list(found.values())
    base = _common_folder(unique)
    sources = [Source(path, PurePath(os.path.relpath(os.path.abspath(path), base))) for path in unique]  # noqa: PTH100
    return sorted(sources, key=lambda s: (s.relative.as_posix(), s.path)), missing


def _expand(given: str, *, recurse: bool, unreadable: list[MissingFile]) -> list[str]:
    if os.path.isdir(given):  # noqa: PTH112 - names may hold bytes that are no UTF-8
        return _pictures_in(given, recurse=recurse, unreadable=unreadable)
    if os.path.lexists(given):
        return [given]
    files: list[str] = []
    for match in sorted(glob.glob(given, recursive=recurse)):  # noqa: PTH207
        if os.path.isdir(match):  # noqa: PTH112
            files += _pictures_in(match, recurse=recurse, unreadable=unreadable)
        else:
            files.append(match)
    return files


def _pictures_in(folder: str, *, recurse: bool, unreadable: list[MissingFile]) -> list[str]:
    """Return the pictures in a folder; folders that cannot be listed are told, never passed over in silence."""

    def tell(error: OSError) -> None:
        unreadable.append(
            MissingFile(
                f"the folder cannot be listed ({error.strerror or error})",
                path=error.filename,
                hint="check its permissions and the disk",
            )
        )

    files: list[str] = []
    for where, folders, names in os.walk(folder, onerror=tell):
        folders[:] = sorted(f for f in folders if not f.startswith(".")) if recurse else []
        files += [
            os.path.join(where, name)  # noqa: PTH118
            for name in sorted(names)
            if PurePath(name).suffix.lower() in PICTURE_SUFFIXES and not name.startswith(".")
        ]
    return files


def _missing(given: str, *, recurse: bool) -> MissingFile:
    if os.path.isdir(given):  # noqa: PTH112
        hint = "name another folder" if recurse else "add --recurse to look into its sub-folders"
        return MissingFile("there is no picture in this folder", path=given, hint=hint)
    return MissingFile("there is no such file or folder", path=given, hint="check the path")


def _common_folder(paths: Sequence[str]) -> str:
    folders = [os.path.dirname(os.path.abspath(path)) for path in paths]  # noqa: PTH100, PTH120
    try:
        return os.path.commonpath(folders) if folders else os.curdir
    except ValueError:  # several drives
        return os.path.sep


def _is_inside(path: str, folder: str) -> bool:
    return path == folder or path.startswith(folder.rstrip(os.path.sep) + os.path.sep)


def check_target_folder(paths: Iterable[str | os.PathLike[str]], out: str | os.PathLike[str]) -> None:
    """Refuse a target folder in which an output could lie beside its original.

    Raises
    ------
    PresetError
        ``out`` is a folder that was given as input, or that holds a file that was.
    """
    real_out = os.path.realpath(out)
    for path in paths:
        given = os.fspath(path)
        for match in [given] if os.path.lexists(given) else glob.glob(given, recursive=True):  # noqa: PTH207
            real = os.path.realpath(match)
            if real_out == (real if os.path.isdir(real) else os.path.dirname(real)):  # noqa: PTH112, PTH120
                raise PresetError(
                    "the output folder is the folder of the originals",
                    path=str(out),
                    hint="choose another --out folder",
                )


def name_targets(sources: Sequence[Source], suffixes: Sequence[str]) -> list[PurePath]:
    """Return where each source's output goes below the output folder: no two alike.

    The source tree is mirrored.  Sources of one folder that would share a name (``a.dng`` and ``a.jpg`` to
    JPEG) keep their own suffix in it (``a.dng.jpg``, ``a.jpg.jpg``); names that still agree but for case or
    Unicode form get a number.  The order of the sources does not matter.

    Examples
    --------
    >>> two = [Source("x/a.dng", PurePath("a.dng")), Source("x/a.jpg", PurePath("a.jpg"))]
    >>> [str(p) for p in name_targets(two, [".jpg", ".jpg"])]
    ['a.dng.jpg', 'a.jpg.jpg']
    """
    plain = [source.relative.with_suffix(suffix) for source, suffix in zip(sources, suffixes, strict=True)]
    count = Counter(map(_fold, plain))
    named = [
        target if count[_fold(target)] == 1 else source.relative.with_name(source.relative.name + suffix)
        for source, suffix, target in zip(sources, suffixes, plain, strict=True)
    ]
    return _numbered(named)


def targets_for(sources: Sequence[Source], output_format: str) -> dict[str, PurePath]:
    """Return where the output of each source (by its path) goes below the output folder (see `name_targets`)."""
    suffixes = [_suffix(source, output_format) for source in sources]
    return {s.path: t for s, t in zip(sources, name_targets(sources, suffixes), strict=True)}


def _suffix(source: Source, output_format: str) -> str:
    own = source.relative.suffix
    if output_format == "same":
        return ".tif" if own.lower() in RAW_SUFFIXES else own
    return {"tiff": ".tif", "jpeg": ".jpg", "png": ".png", "dng": own}[output_format]


def _numbered(named: Sequence[PurePath]) -> list[PurePath]:
    taken = {_fold(target): 0 for target in named}
    result = list(named)
    for index in sorted(range(len(named)), key=lambda i: named[i].as_posix()):
        target = named[index]
        taken[_fold(target)] += 1
        number = taken[_fold(target)]
        while number > 1:
            candidate = target.with_name(f"{target.stem}-{number}{target.suffix}")
            if _fold(candidate) not in taken:
                taken[_fold(candidate)] = 1
                result[index] = candidate
                break
            number += 1
    return result


def _fold(path: PurePath) -> str:
    return unicodedata.normalize("NFC", path.as_posix()).casefold()
