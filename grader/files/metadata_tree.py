"""Read and write the directories of a TIFF structure (TIFF 6.0, Exif, DNG), with bounds on everything.

Values stay bytes, so that what is not understood is carried over whole.  Offsets, counts and loops that
a damaged or hostile file may hold end in a note or in `BrokenStructure`, never in a hang.
"""

from __future__ import annotations

import struct
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import BinaryIO, Final

import numpy as np

SIZES: Final = {
    1: 1,
    2: 1,
    3: 2,
    4: 4,
    5: 8,
    6: 1,
    7: 1,
    8: 2,
    9: 4,
    10: 8,
    11: 4,
    12: 8,
    13: 4,
    16: 8,
    17: 8,
    18: 8,
    129: 1,
}
"""Bytes of one value by field type (TIFF 6.0 section 2; 16 to 18 BigTIFF; 129 UTF-8, Exif 3.0)."""
_WORDS: Final = {3: 2, 8: 2, 4: 4, 9: 4, 11: 4, 13: 4, 5: 4, 10: 4, 12: 8, 16: 8, 17: 8, 18: 8}
_FORMATS: Final = {
    1: "u1",
    3: "u2",
    4: "u4",
    5: "u4",
    6: "i1",
    7: "u1",
    8: "i2",
    9: "i4",
    10: "i4",
    11: "f4",
    12: "f8",
    13: "u4",
    16: "u8",
    17: "i8",
    18: "u8",
}
MAX_DIRECTORIES: Final = 256
MAX_ENTRIES: Final = 100_000
"""More directories and entries than any picture file has; the rest is not read. (judgement)"""

EXIF, GPS, INTEROP, SUB_IFDS = 0x8769, 0x8825, 0xA005, 0x014A
MAKER_NOTE: Final = 0x927C
_MAGICS: Final = (42, 43, 0x4F52, 0x5352, 0x0055)
"""Classic and BigTIFF; ``RO``, ``RS`` and ``U``, as some cameras' raw files say instead."""
POINTERS: Final = (EXIF, GPS, INTEROP, SUB_IFDS)


class BrokenStructure(Exception):
    """The bytes are no TIFF structure, or not one that can be followed."""


@dataclass(frozen=True, slots=True)
class Field:
    """One tag's value: its type, its count, its bytes in the structure's byte order."""

    type: int
    count: int
    data: bytes


@dataclass(frozen=True, slots=True)
class Place:
    """One tag as it stands in a directory: type, count, and where in the file the value and the entry are."""

    type: int
    count: int
    offset: int
    entry: int

    @property
    def size(self) -> int:
        """Length of the value, in bytes."""
        return SIZES.get(self.type, 0) * self.count


Directory = dict[int, Field]
Places = dict[int, Place]


@dataclass(slots=True)
class Tree:
    """The directories that carry metadata; ``order`` is ``<`` or ``>``."""

    order: str = "<"
    ifd0: Directory = field(default_factory=dict)
    exif: Directory = field(default_factory=dict)
    gps: Directory = field(default_factory=dict)
    interop: Directory = field(default_factory=dict)
    maker_note_offset: int | None = None
    notes: list[str] = field(default_factory=list)


class Structure:
    """A TIFF structure in a seekable stream.

    Parameters
    ----------
    stream : binary stream
        Its first byte is the structure's first byte.

    Raises
    ------
    BrokenStructure
        The header is no TIFF header (classic or BigTIFF).
    """

    def __init__(self, stream: BinaryIO) -> None:
        self.stream = stream
        self.size = stream.seek(0, 2)
        head = self.read(0, 16)
        self.order = {b"II": "<", b"MM": ">"}.get(head[:2], "")
        if not self.order or len(head) < 8:
            raise BrokenStructure("no TIFF header")
        magic = struct.unpack(self.order + "H", head[2:4])[0]
        self.big = magic == 43
        if magic not in _MAGICS or (self.big and struct.unpack(self.order + "HH", head[4:8]) != (8, 0)):
            raise BrokenStructure("no TIFF header")
        if self.big and len(head) < 16:
            raise BrokenStructure("the header is cut short")
        self.first = struct.unpack(
            self.order + ("Q" if self.big else "I"), head[8:16] if self.big else head[4:8]
        )[0]

    def read(self, offset: int, length: int) -> bytes:
        """Return up to ``length`` bytes; fewer where the file ends."""
        if offset < 0 or offset >= self.size:
            return b""
        self.stream.seek(offset)
        return self.stream.read(min(length, self.size - offset))

    def directory(self, offset: int) -> tuple[Places, int]:
        """Return one directory's tags and the offset of the next directory (0 = none).

        Raises
        ------
        BrokenStructure
            The directory does not lie in the file whole.
        """
        head, entry, link = (8, 20, "Q") if self.big else (2, 12, "I")
        counted = self.read(offset, head)
        if offset < 8 or len(counted) < head:
            raise BrokenStructure("a directory lies outside the file")
        count = struct.unpack(self.order + ("Q" if self.big else "H"), counted)[0]
        if count > 65_535 or offset + head + count * entry > self.size:
            raise BrokenStructure("a directory does not fit in the file")
        body = self.read(offset + head, count * entry + struct.calcsize(link))
        places: Places = {}
        for i in range(count):
            tag, place = self._place(body[i * entry : (i + 1) * entry], offset + head + i * entry)
            places.setdefault(tag, place)
        tail = body[count * entry :]
        following = struct.unpack(self.order + link, tail)[0] if len(tail) == struct.calcsize(link) else 0
        return places, following

    def _place(self, entry: bytes, at: int) -> tuple[int, Place]:
        if self.big:
            tag, kind, count, value = struct.unpack(self.order + "HHQQ", entry)
            inline, room = at + 12, 8
        else:
            tag, kind, count, value = struct.unpack(self.order + "HHII", entry)
            inline, room = at + 8, 4
        return tag, Place(kind, count, inline if SIZES.get(kind, 0) * count <= room else value, at)

    def field(self, place: Place, limit: int) -> Field | None:
        """Return a tag's value; None where it is of no known type, outside the file, or longer than the limit."""
        if place.type not in SIZES or place.size > limit or place.offset + place.size > self.size:
            return None
        return Field(place.type, place.count, self.read(place.offset, place.size))

    def offsets(self, place: Place) -> list[int]:
        """Return a tag's value as directory offsets, at most `MAX_DIRECTORIES` of them."""
        short = Place(place.type, min(place.count, MAX_DIRECTORIES), place.offset, place.entry)
        found = self.field(short, 1 << 16)
        if found is None or place.type not in (3, 4, 13, 16, 18):
            return []
        return [int(v) for v in numbers(found, self.order)]

    def walk(self) -> Iterator[Places]:
        """Yield the directories of the chain and their sub-directories, each once; stop where one is broken."""
        waiting, seen, entries = [self.first], set[int](), 0
        while waiting and len(seen) < MAX_DIRECTORIES and entries < MAX_ENTRIES:
            offset = waiting.pop(0)
            if offset == 0 or offset in seen:
                continue
            seen.add(offset)
            try:
                places, following = self.directory(offset)
            except BrokenStructure:
                continue
            entries += len(places)
            yield places
            if SUB_IFDS in places:
                waiting += self.offsets(places[SUB_IFDS])
            waiting.append(following)


def numbers(value: Field, order: str) -> list[float]:
    """Return a value as numbers; rationals divided (a zero denominator gives NaN); text gives nothing.

    Examples
    --------
    >>> numbers(Field(5, 1, bytes([1, 0, 0, 0, 4, 0, 0, 0])), "<")
    [0.25]
    """
    if value.type not in _FORMATS:
        return []
    raw = np.frombuffer(value.data, np.dtype(order + _FORMATS[value.type]))
    if value.type not in (5, 10):
        return [float(v) if raw.dtype.kind == "f" else int(v) for v in raw]
    pairs = raw.reshape(-1, 2).astype(np.float64)
    return [float(n / d) if d else float("nan") for n, d in pairs]


def text(value: Field | None) -> str:
    r"""Return a text value up to its first NUL, with blanks and control characters tidied.

    Examples
    --------
    >>> text(Field(2, 8, b"  A\tb \0x"))
    'A b'
    """
    if value is None or value.type not in (1, 2, 7, 129):
        return ""
    raw = value.data.split(b"\0", 1)[0]
    try:
        decoded = raw.decode("utf-8")
    except UnicodeDecodeError:
        decoded = raw.decode("latin-1")
    return " ".join("".join(c if c.isprintable() else " " for c in decoded).split())


def ascii_field(words: str) -> Field:
    """Return a text value, NUL-terminated (type 2; UTF-8 where the words need it)."""
    data = words.encode("utf-8") + b"\0"
    return Field(2, len(data), data)


def short_field(value: int, order: str) -> Field:
    """Return one 16-bit number."""
    return Field(3, 1, struct.pack(order + "H", value))


def long_field(value: int, order: str) -> Field:
    """Return one 32-bit number."""
    return Field(4, 1, struct.pack(order + "I", value))


def rational_field(values: list[tuple[int, int]], order: str) -> Field:
    """Return unsigned fractions, numerator and denominator each."""
    return Field(5, len(values), b"".join(struct.pack(order + "II", n, d) for n, d in values))


def in_order(value: Field, have: str, want: str) -> Field:
    """Return a value with its numbers turned into another byte order."""
    word = _WORDS.get(value.type)
    if have == want or word is None:
        return value
    turned = np.frombuffer(value.data, np.dtype(f"u{word}")).byteswap().tobytes()
    return Field(value.type, value.count, turned)


def read_tree(stream: BinaryIO, max_bytes: int, skip: frozenset[int] = frozenset()) -> Tree:
    """Return IFD0 and its Exif, GPS and Interoperability directories.

    Parameters
    ----------
    stream : binary stream
    max_bytes : int
        Values are read until they hold this much together; the rest is left out with a note.
    skip : frozenset of int
        Tags of IFD0 that are not read.

    Raises
    ------
    BrokenStructure
        There is no directory to read.
    """
    structure = Structure(stream)
    tree = Tree(structure.order)
    budget = [max_bytes]
    first, _ = structure.directory(structure.first)
    tree.ifd0 = _load(structure, {t: p for t, p in first.items() if t not in skip}, budget, tree, "IFD0")
    seen = {structure.first}
    exif = _sub_directory(structure, first, EXIF, tree, seen)
    if MAKER_NOTE in exif:
        tree.maker_note_offset = exif[MAKER_NOTE].offset
    tree.exif = _load(structure, exif, budget, tree, "Exif")
    tree.gps = _load(structure, _sub_directory(structure, first, GPS, tree, seen), budget, tree, "GPS")
    inner = _sub_directory(structure, exif, INTEROP, tree, seen)
    tree.interop = _load(structure, inner, budget, tree, "Interoperability")
    for directory in (tree.ifd0, tree.exif):
        for pointer in POINTERS:
            directory.pop(pointer, None)
    return tree


def _sub_directory(structure: Structure, parent: Places, tag: int, tree: Tree, seen: set[int]) -> Places:
    offsets = structure.offsets(parent[tag]) if tag in parent else []
    if not offsets or offsets[0] in seen or offsets[0] == 0:
        return {}
    seen.add(offsets[0])
    try:
        return structure.directory(offsets[0])[0]
    except BrokenStructure as problem:
        tree.notes.append(f"a metadata directory was left out: {problem}")
        return {}


def _load(structure: Structure, places: Places, budget: list[int], tree: Tree, name: str) -> Directory:
    directory: Directory = {}
    lost = 0
    for tag, place in places.items():
        found = structure.field(place, budget[0])
        if found is None or (tag in POINTERS):
            lost += tag not in POINTERS
            continue
        budget[0] -= len(found.data)
        directory[tag] = found
    if lost:
        tree.notes.append(f"{lost} unreadable metadata value{'s' * (lost > 1)} left out ({name})")
    return directory
