"""Metadata of raw files that are built of boxes (ISO/IEC 14496-12): Exif directories kept as TIFF structures.

Their film box holds one of the maker's own, with a box each for the first directory, the Exif directory and the
GPS directory (``CMT1``, ``CMT2``, ``CMT4``); so found in the files themselves.
"""

from __future__ import annotations

import io
from collections.abc import Iterator
from typing import BinaryIO, Final

from grader.files.metadata_tree import BrokenStructure, Directory, Tree, in_order, read_tree

_MOST_BOXES: Final = 1_000
_UUID_BYTES: Final = 16


def tree_of_boxes(stream: BinaryIO, max_bytes: int) -> Tree:
    """Return the metadata directories of a raw file built of boxes; an empty tree where it holds none.

    Parameters
    ----------
    stream : binary stream
    max_bytes : int
        Directories longer than this are left out with a note.
    """
    found = dict(_directories(stream, max_bytes))
    tree = found.get(b"CMT1", Tree())
    for name, home in ((b"CMT2", "exif"), (b"CMT4", "gps")):
        if name in found:
            setattr(tree, home, _first_of(found[name], tree.order))
    return tree


def _directories(stream: BinaryIO, max_bytes: int) -> Iterator[tuple[bytes, Tree]]:
    for kind, start, end in _boxes(stream, 0, stream.seek(0, io.SEEK_END)):
        if kind != b"moov":
            continue
        for inner, inner_start, inner_end in _boxes(stream, start, end):
            if inner != b"uuid":
                continue
            for name, first, last in _boxes(stream, inner_start + _UUID_BYTES, inner_end):
                if name.startswith(b"CMT") and last - first <= max_bytes:
                    stream.seek(first)
                    try:
                        yield name, read_tree(io.BytesIO(stream.read(last - first)), max_bytes)
                    except BrokenStructure:
                        continue


def _boxes(stream: BinaryIO, start: int, end: int) -> Iterator[tuple[bytes, int, int]]:
    """Yield kind, start and end of the contents of the boxes that lie between two places."""
    at = start
    for _ in range(_MOST_BOXES):
        stream.seek(at)
        head = stream.read(16)
        if at + 8 > end or len(head) < 8:
            return
        size, body = int.from_bytes(head[:4], "big"), at + 8
        if size == 1:
            size, body = int.from_bytes(head[8:16], "big"), at + 16
        stop = end if size == 0 else at + size
        if not body <= stop <= end:
            return
        yield head[4:8], body, stop
        at = stop


def _first_of(tree: Tree, order: str) -> Directory:
    return {tag: in_order(value, tree.order, order) for tag, value in tree.ifd0.items()}
