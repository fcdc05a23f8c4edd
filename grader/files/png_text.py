"""The text chunks of a PNG file: metadata that are kept in them, and the rest, carried as they are.

References
----------
.. [1] W3C, "Portable Network Graphics (PNG) Specification (Third Edition)", 2025, 11.3.3.
"""

from __future__ import annotations

import zlib
from typing import Any, Final

from grader.errors import DamagedFile
from grader.files.png_chunks import Layout, inflated

TEXT_CHUNKS: Final = (b"tEXt", b"zTXt", b"iTXt")
_PACKETS: Final = ("XML:com.adobe.xmp", "Raw profile type ")


def info(layout: Layout, most_bytes: int) -> dict[str, Any]:
    """Return Exif and the texts that hold metadata, under the names that Pillow gives them.

    Texts that cannot be inflated, or are larger than ``most_bytes``, are left out.
    """
    found: dict[str, Any] = {}
    if b"eXIf" in layout.chunks:
        found["exif"] = layout.chunks[b"eXIf"]
    for kind, body in layout.texts:
        if not _is_packet(body):
            continue
        name, _, rest = body.partition(b"\0")
        try:
            found.setdefault(name.decode("latin-1"), _text(kind, rest, most_bytes))
        except (DamagedFile, zlib.error, IndexError):
            continue
    return found


def others(layout: Layout) -> tuple[tuple[bytes, bytes], ...]:
    """Return the texts that hold no metadata packet: titles, authors, comments."""
    return tuple((kind, body) for kind, body in layout.texts if not _is_packet(body))


def _is_packet(body: bytes) -> bool:
    return body.startswith(tuple(name.encode() for name in _PACKETS))


def _text(kind: bytes, rest: bytes, most_bytes: int) -> bytes:
    """Return a text behind its keyword."""
    if kind == b"tEXt":
        return rest
    if kind == b"zTXt":
        return inflated(rest[1:], most_bytes)
    compressed = rest[0]
    text = rest[2:].split(b"\0", 2)[2]  # language and translated keyword go before
    return inflated(text, most_bytes) if compressed else text
