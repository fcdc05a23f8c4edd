"""Frames out: written beside their target, made safe on disk, then put in place in one step."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable
from pathlib import Path
from typing import Final, Literal

from grader.atomic import whole_file
from grader.errors import PresetError, WriteFailed
from grader.files import border, jpeg, metadata, png, profile_build, raster, tiff_write
from grader.model import Correction, Frame, Header, Metadata, Output, Written

Kind = Literal["tiff", "jpeg", "png"]
_SUFFIXES: Final[dict[Kind, tuple[str, ...]]] = {
    "tiff": (".tif", ".tiff"),
    "jpeg": (".jpg", ".jpeg", ".jpe", ".jfif"),
    "png": (".png",),
}


def suffix_for(header: Header, output: Output) -> str:
    """Return the file name suffix of an output: the source's own where it fits the format.

    Examples
    --------
    >>> suffix_for(Header(file="hall-07.JPG", format="jpeg"), Output())
    '.JPG'
    >>> suffix_for(Header(file="hall-07.dng", format="raw"), Output())
    '.tif'
    """
    if output.format == "dng":
        return ".dng"
    kind = _kind(header, output)
    own = Path(header.file or "").suffix
    return own if own.lower() in _SUFFIXES[kind] else _SUFFIXES[kind][0]


def _kind(header: Header, output: Output, target: Path | None = None) -> Kind:
    """Return the format: the one asked for, else by the target's suffix, else the source's; TIFF for the rest."""
    if output.format in ("tiff", "jpeg", "png"):
        return output.format
    if target is not None:
        for kind, suffixes in _SUFFIXES.items():
            if target.suffix.lower() in suffixes:
                return kind
    return header.format if header.format in ("tiff", "jpeg", "png") else "tiff"


def write(
    frame: Frame,
    target: str | os.PathLike[str],
    output: Output | None = None,
    *,
    correction: Correction | None = None,
    overwrite: bool = False,
) -> Written:
    """Write a frame as a whole file or not at all.

    Parameters
    ----------
    frame : Frame
        Its pixels are encoded as they are: ``grader.pixels`` has put them into the output's space.
    target : path-like
        Where to; the folder must exist.  With the format ``same`` its suffix decides.
    output : Output, optional
        Format and what to leave out of the metadata.
    correction : Correction, optional
        What was done to the frame, to be recorded in its metadata.
    overwrite : bool
        Replace a file that exists.  The frame's own source is never replaced.

    Returns
    -------
    Written
        Where it stands, its digest, and notes on what could not be kept.

    Raises
    ------
    WriteFailed
        With the cause; nothing of it is left behind.
    PresetError
        The format is ``dng``: see ``grader.files.rewrite_raw``.
    """
    output = output or Output()
    place = Path(target)
    if output.format == "dng":
        raise PresetError("a raw copy is not written from pixels", path=place, hint="use rewrite_raw")
    with border.writing(place):
        _check_target(frame, place, overwrite=overwrite)
        kind = _kind(frame.header, output, place)
        carried = metadata.for_output(frame, kind, output, correction)
        icc = icc_for(frame, kind)
        encode = _ENCODERS[kind]
        notes, digest, size = _atomic(
            place, lambda temporary: encode(frame, temporary, icc, carried), overwrite=overwrite
        )
    return Written(str(place), digest, kind, frame.space.name, size, (*carried.notes, *notes))


def icc_for(frame: Frame, kind: Kind) -> bytes | None:
    """Return the profile to embed: the source's own, else one of ours.

    None where the source embeds none and the output is of the same format, which then means the same.
    """
    grey = raster.is_grey(frame)
    space = frame.space
    if space.icc is not None:
        if grey or space.icc[16:20] == b"RGB ":
            return space.icc
        return profile_build.build(space)
    if frame.encoding.get("untagged") == space.name and kind == frame.header.format:
        return None
    return profile_build.build(space, grey=grey)


def _write_tiff(frame: Frame, temporary: Path, icc: bytes | None, carried: Metadata) -> tuple[str, ...]:
    return tiff_write.write(frame, temporary, icc, carried)


def _write_jpeg(frame: Frame, temporary: Path, icc: bytes | None, carried: Metadata) -> tuple[str, ...]:
    data, notes = jpeg.encode(frame, icc, carried)
    temporary.write_bytes(data)
    return notes


def _write_png(frame: Frame, temporary: Path, icc: bytes | None, carried: Metadata) -> tuple[str, ...]:
    temporary.write_bytes(png.encode(frame, icc, carried))
    return ()


_Encoder = Callable[[Frame, Path, bytes | None, Metadata], tuple[str, ...]]
_ENCODERS: Final[dict[Kind, _Encoder]] = {"tiff": _write_tiff, "jpeg": _write_jpeg, "png": _write_png}


def _check_target(frame: Frame, place: Path, *, overwrite: bool) -> None:
    if not place.exists():
        return
    if (
        frame.header.file is not None
        and Path(frame.header.file).exists()
        and place.samefile(frame.header.file)
    ):
        raise WriteFailed(
            "this is the original, which is never replaced", hint="choose another output folder"
        )
    if place.is_dir():
        raise WriteFailed("a folder of that name is in the way", hint="choose another output folder")
    if not overwrite:
        raise WriteFailed("the file exists already", hint="allow overwriting or choose another output folder")


def _atomic(
    place: Path, fill: Callable[[Path], tuple[str, ...]], *, overwrite: bool
) -> tuple[tuple[str, ...], str, int]:
    """Write the file whole or not at all; return the notes, its digest and size, read back from where it is."""
    with whole_file(place, overwrite=overwrite) as part:
        notes = fill(part)
        with part.open("rb") as stream:
            digest, size = hashlib.file_digest(stream, "sha256").hexdigest(), stream.tell()
    return notes, digest, size
