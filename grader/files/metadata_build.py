"""Write metadata directories: as a TIFF structure of their own, or into a finished TIFF file."""

from __future__ import annotations

import struct
from collections.abc import Mapping
from typing import BinaryIO, Final

from grader.files.metadata_tree import (
    EXIF,
    GPS,
    INTEROP,
    MAKER_NOTE,
    Directory,
    Field,
    Place,
    Structure,
    Tree,
    in_order,
)

_KEPT_PLACE_LIMIT: Final = 48 << 10
"""A maker note keeps its offset up to here: what is larger would not fit a JPEG segment of 64 KiB. [bytes]"""


class _Room:
    """Hands out offsets: first from the gap before a value that must keep its place, then after it."""

    def __init__(self, start: int, kept: tuple[int, int] | None = None) -> None:
        self.gap = self.gap_end = self.end = start
        if kept is not None:
            at, length = kept
            self.gap_end, self.end = at, at + length + (at + length) % 2

    def take(self, size: int) -> int:
        size += size % 2
        if self.gap + size <= self.gap_end:
            self.gap += size
            return self.gap - size
        self.end += size
        return self.end - size


class _Layout:
    """Directories and values with the offsets that they will have."""

    def __init__(self, order: str, big: bool, room: _Room) -> None:
        self.order, self.room = order, room
        self.count, self.link, self.inline = ("Q", "Q", 8) if big else ("H", "I", 4)
        self.pieces: list[tuple[int, bytes]] = []

    def pack(self, codes: str, *values: int) -> bytes:
        return struct.pack(self.order + codes, *values)

    def directory(
        self, entries: Mapping[int, Field | Place], fixed: Mapping[int, int], following: int = 0
    ) -> int:
        """Lay out one directory and the values that it holds; return its offset."""
        head = struct.calcsize("=" + self.count)
        at = self.room.take(head + len(entries) * (4 + 2 * self.inline) + self.inline)
        parts = [self.pack(self.count, len(entries))]
        for tag, value in sorted(entries.items()):
            parts.append(self.pack("HH" + self.link, tag, value.type, value.count))
            parts.append(self._value(tag, value, fixed))
        self.pieces.append((at, b"".join(parts) + self.pack(self.link, following)))
        return at

    def _value(self, tag: int, value: Field | Place, fixed: Mapping[int, int]) -> bytes:
        if isinstance(value, Place):
            return self.pack(self.link, value.offset)
        if len(value.data) <= self.inline:
            return value.data.ljust(self.inline, b"\0")
        at = fixed[tag] if tag in fixed else self.room.take(len(value.data))
        self.pieces.append((at, value.data))
        return self.pack(self.link, at)

    def pointer(self, offset: int) -> Field:
        return Field(16 if self.link == "Q" else 4, 1, self.pack(self.link, offset))

    def tree(
        self, tree: Tree, ifd0: Mapping[int, Field | Place], fixed: Mapping[int, int], following: int = 0
    ) -> int:
        """Lay out all directories of a tree; return the offset of IFD0."""
        entries, exif = dict(ifd0), dict(tree.exif)
        if tree.interop:
            exif[INTEROP] = self.pointer(self.directory(tree.interop, {}))
        if exif:
            entries[EXIF] = self.pointer(self.directory(exif, fixed))
        if tree.gps:
            entries[GPS] = self.pointer(self.directory(tree.gps, {}))
        return self.directory(entries, {}, following)


def tree_bytes(tree: Tree) -> bytes:
    """Return a tree as a classic TIFF structure.

    A maker note keeps the offset it had, where there is room for that: most makers' notes hold offsets
    that count from the start of the structure.

    Examples
    --------
    >>> from grader.files.metadata_tree import ascii_field
    >>> tree_bytes(Tree("<", {0x010F: ascii_field("abc")})).hex(" ", 4)
    '4949 2a000800 00000100 0f010200 04000000 61626300 00000000'
    """
    note, at = tree.exif.get(MAKER_NOTE), tree.maker_note_offset
    fixed, kept = {}, None
    if note is not None and len(note.data) > 4 and at is not None and 8 <= at <= _KEPT_PLACE_LIMIT:
        fixed, kept = {MAKER_NOTE: at}, (at, len(note.data))
    layout = _Layout(tree.order, False, _Room(8, kept))
    first = layout.tree(tree, tree.ifd0, fixed)
    whole = bytearray(max(at + len(piece) for at, piece in layout.pieces))
    whole[:8] = (b"II" if tree.order == "<" else b"MM") + layout.pack("HI", 42, first)
    for at, piece in layout.pieces:
        whole[at : at + len(piece)] = piece
    return bytes(whole)


def append_tree(stream: BinaryIO, tree: Tree) -> None:
    """Give a TIFF file's first picture the tags of a tree, in place.

    Nothing that stands in the file moves: a new first directory is appended, which holds the old one's
    entries and the tree's, and the header is pointed at it.  Tags of the tree win.

    Parameters
    ----------
    stream : binary stream
        Open for reading and writing.
    tree : Tree

    Raises
    ------
    BrokenStructure
        The file is no TIFF.
    ValueError
        The file would outgrow the offsets of a classic TIFF (4 GiB).
    """
    structure = Structure(stream)
    places, following = structure.directory(structure.first)
    layout = _Layout(structure.order, structure.big, _Room(structure.size + structure.size % 2))
    entries: dict[int, Field | Place] = {}
    for tag, place in places.items():
        inline = place.size <= layout.inline
        entries[tag] = (
            Field(place.type, place.count, structure.read(place.offset, place.size)) if inline else place
        )
    turned = _turned(tree, structure.order)
    first = layout.tree(turned, {**entries, **turned.ifd0}, {}, following)
    if not structure.big and layout.room.end > 0xFFFF_FFFF:
        raise ValueError("the file is too long for its kind of TIFF")
    for at, piece in layout.pieces:
        stream.seek(at)
        stream.write(piece)
    stream.seek(8 if structure.big else 4)
    stream.write(layout.pack(layout.link, first))


def _turned(tree: Tree, order: str) -> Tree:
    def turn(directory: Directory) -> Directory:
        return {tag: in_order(value, tree.order, order) for tag, value in directory.items()}

    return Tree(order, turn(tree.ifd0), turn(tree.exif), turn(tree.gps), turn(tree.interop))
