"""Read and edit XMP packets (ISO 16684-1) without expanding anything that they ask for."""

from __future__ import annotations

import hashlib
import xml.dom.minidom
from collections.abc import Iterator, Mapping
from typing import Any, Final
from xml.parsers import expat

RDF: Final = "http://www.w3.org/1999/02/22-rdf-syntax-ns#"
META: Final = "adobe:ns:meta/"
DC: Final = "http://purl.org/dc/elements/1.1/"
TIFF: Final = "http://ns.adobe.com/tiff/1.0/"
EXIF: Final = "http://ns.adobe.com/exif/1.0/"
BASIC: Final = "http://ns.adobe.com/xap/1.0/"
PHOTOSHOP: Final = "http://ns.adobe.com/photoshop/1.0/"
NOTE: Final = "http://ns.adobe.com/xmp/note/"
IPTC_CORE: Final = "http://iptc.org/std/Iptc4xmpCore/1.0/xmlns/"
IPTC_EXT: Final = "http://iptc.org/std/Iptc4xmpExt/2008-02-29/"
_XMLNS: Final = "http://www.w3.org/2000/xmlns/"
GRADER: Final = "https://grader.invalid/ns/correction/1/"
"""Our own namespace; .invalid is reserved (RFC 2606), so that the address can never mean anything else."""

_HEAD: Final = b'<?xpacket begin="\xef\xbb\xbf" id="W5M0MpCehiHzreSzNTczkc9d"?>\n'
_TAIL: Final = b'\n<?xpacket end="w"?>'
_EMPTY: Final = f'<x:xmpmeta xmlns:x="{META}"><rdf:RDF xmlns:rdf="{RDF}"/></x:xmpmeta>'
_NAME_BYTES: Final = 300
"""At least what the description takes that names an extension. [bytes]"""
_MAX_DEPTH: Final = 100
_MAX_ELEMENTS: Final = 200_000

_PLACES: Final = {
    PHOTOSHOP: {"City", "State", "Country"},
    IPTC_CORE: {"Location", "CountryCode"},
    IPTC_EXT: {"LocationCreated", "LocationShown"},
}
"""Properties that name a place in words (IPTC Photo Metadata Standard); every ``GPS...`` counts too."""
_COORDINATES: Final = {"latitude", "longitude", "altitude", "absolutealtitude"}
"""Coordinates as makers' own namespaces call them."""

_IN_TEXT: Final = str.maketrans({"&": "&amp;", "<": "&lt;", ">": "&gt;", "\r": "&#13;"})
_IN_ATTRIBUTE: Final = _IN_TEXT | str.maketrans({'"': "&quot;", "\n": "&#10;", "\t": "&#9;"})

_Node = Any  # minidom's classes, whose types are looser than their use


class BrokenPacket(Exception):
    """The packet is no sound XML, or asks for what is not allowed."""


class Packet:
    """One XMP packet, parsed.

    Parameters
    ----------
    data : bytes, optional
        The packet, with or without its wrapper; an empty packet when left out.

    Raises
    ------
    BrokenPacket
        Not well-formed, a document type or entity declared, or nested beyond reason.
    """

    def __init__(self, data: bytes | None = None) -> None:
        text = _EMPTY.encode() if data is None else _in_utf8(data)
        _check(text)
        try:
            self._document = xml.dom.minidom.parseString(text)  # noqa: S318 - checked above
        except (expat.ExpatError, ValueError, RecursionError, LookupError) as problem:
            raise BrokenPacket(str(problem)) from None
        found = self._document.getElementsByTagNameNS(RDF, "RDF")
        if not found:
            raise BrokenPacket("no rdf:RDF in it")
        self._rdf = found[0]

    def get(self, namespace: str, name: str) -> str | None:
        """Return a simple property's value, or the first item's where it is a list."""
        for description in self._descriptions():
            if description.hasAttributeNS(namespace, name):
                return str(description.getAttributeNS(namespace, name))
            for child in _elements(description):
                if (child.namespaceURI, child.localName) == (namespace, name):
                    return _words(child)
        return None

    def replace(self, namespace: str, name: str, value: str) -> None:
        """Set a simple property wherever it stands; do nothing where it does not."""
        for description in self._descriptions():
            if description.hasAttributeNS(namespace, name):
                description.getAttributeNodeNS(namespace, name).value = value
            for child in list(_elements(description)):
                if (child.namespaceURI, child.localName) == (namespace, name):
                    while child.firstChild:
                        child.removeChild(child.firstChild)
                    child.appendChild(self._document.createTextNode(value))

    def drop_location(self) -> int:
        """Remove coordinates and the names of places, at any depth; return how many properties went."""
        dropped = 0
        for element in list(self._rdf.getElementsByTagName("*")):
            for attribute in list(element.attributes.values()):
                if _tells_place(attribute.namespaceURI, attribute.localName):
                    element.removeAttributeNode(attribute)
                    dropped += 1
            if _tells_place(element.namespaceURI, element.localName) and element.parentNode is not None:
                element.parentNode.removeChild(element)
                dropped += 1
        return dropped

    def record(self, values: Mapping[str, str]) -> None:
        """Write properties of our own namespace, in place of those of an earlier run."""
        for description in list(self._descriptions()):
            _drop_namespace(description, GRADER)
        own = self._new_description(self._about())
        own.setAttributeNS(_XMLNS, "xmlns:grader", GRADER)
        for name, value in values.items():
            own.setAttributeNS(GRADER, f"grader:{name}", value)

    def join(self, extension: bytes) -> None:
        """Take up the properties of an extension packet.

        Raises
        ------
        BrokenPacket
            The extension cannot be parsed.
        """
        other = Packet(extension)
        for description in list(other._descriptions()):
            copy = self._document.importNode(description, True)
            _declare(copy, _scope(description))
            self._rdf.appendChild(copy)
        self.drop_extension_name()

    def split(self, room: int) -> tuple[bytes, bytes | None]:
        """Return the packet and, where it is longer than ``room``, an extension that took its largest properties."""
        whole = self.to_bytes()
        if len(whole) <= room:
            return whole, None
        extension = Packet()
        home = extension._new_description(self._about())
        left = len(whole) + _NAME_BYTES
        for size, node in self._by_size():
            if left <= room:
                break
            _move(node, home)
            left -= size
        more = _markup(extension._document.documentElement).encode("utf-8")
        note = self._new_description(self._about())
        note.setAttributeNS(_XMLNS, "xmlns:xmpNote", NOTE)
        note.setAttributeNS(NOTE, "xmpNote:HasExtendedXMP", extension_digest(more).decode())
        return self.to_bytes(), more

    def drop_extension_name(self) -> None:
        """Remove the name of an extension packet."""
        for description in list(self._descriptions()):
            _drop_namespace(description, NOTE)

    def _by_size(self) -> list[tuple[int, _Node]]:
        """Return the properties, the largest first; our own stay."""
        found = []
        for description in self._descriptions():
            found += [(len(_markup(e).encode()), e) for e in _elements(description)]
            found += [
                (len(a.value.encode()), a) for a in _attributes(description) if a.namespaceURI != GRADER
            ]
        return sorted(found, key=lambda pair: -pair[0])

    def _new_description(self, about: str) -> _Node:
        prefix = self._rdf.prefix or "rdf"
        new = self._document.createElementNS(RDF, f"{prefix}:Description")
        new.setAttributeNS(RDF, f"{prefix}:about", about)
        if not self._rdf.prefix:
            new.setAttributeNS(_XMLNS, "xmlns:rdf", RDF)
        return self._rdf.appendChild(new)

    def to_bytes(self) -> bytes:
        """Return the packet with its wrapper, in UTF-8."""
        root: _Node = self._document.documentElement
        body = _markup(root)
        if (root.namespaceURI, root.localName) != (META, "xmpmeta"):
            body = f'<x:xmpmeta xmlns:x="{META}">{body}</x:xmpmeta>'
        return _HEAD + body.encode("utf-8") + _TAIL

    def _descriptions(self) -> Iterator[_Node]:
        for element in _elements(self._rdf):
            if (element.namespaceURI, element.localName) == (RDF, "Description"):
                yield element

    def _about(self) -> str:
        """Return the resource that the packet is about: all descriptions must name the same one."""
        for description in self._descriptions():
            if description.hasAttributeNS(RDF, "about"):
                return str(description.getAttributeNS(RDF, "about"))
        return ""


def _in_utf8(data: bytes) -> bytes:
    """Return a packet without padding, and in UTF-8 where it says by its first bytes that it is UTF-16."""
    if data[:2] in (b"\xff\xfe", b"\xfe\xff"):
        data = data.decode("utf-16", "replace").encode("utf-8")
    return data.strip(b"\0 \t\r\n")


def _check(data: bytes) -> None:
    """Refuse what a metadata packet has no business with, before a tree is built."""
    parser = expat.ParserCreate(namespace_separator=" ")
    depth = count = 0

    def refuse(*_: object) -> None:
        raise BrokenPacket("it declares a document type or entities")

    def start(*_: object) -> None:
        nonlocal depth, count
        depth, count = depth + 1, count + 1
        if depth > _MAX_DEPTH or count > _MAX_ELEMENTS:
            raise BrokenPacket("it is nested or long beyond reason")

    def end(_: str) -> None:
        nonlocal depth
        depth -= 1

    parser.StartDoctypeDeclHandler = refuse
    parser.EntityDeclHandler = refuse
    parser.StartElementHandler = start
    parser.EndElementHandler = end
    try:
        parser.Parse(data, True)
    except (expat.ExpatError, ValueError, LookupError) as problem:
        raise BrokenPacket(str(problem)) from None


def _markup(node: _Node) -> str:
    """Return a node as XML; minidom's own writer loses line ends inside attributes (Python 3.11)."""
    if node.nodeType in (node.TEXT_NODE, node.CDATA_SECTION_NODE):
        return str(node.data).translate(_IN_TEXT)
    if node.nodeType != node.ELEMENT_NODE:
        return ""
    attributes = "".join(f' {a.name}="{a.value.translate(_IN_ATTRIBUTE)}"' for a in node.attributes.values())
    inner = "".join(_markup(child) for child in node.childNodes)
    return (
        f"<{node.tagName}{attributes}>{inner}</{node.tagName}>" if inner else f"<{node.tagName}{attributes}/>"
    )


def _elements(node: _Node) -> Iterator[_Node]:
    for child in node.childNodes:
        if child.nodeType == child.ELEMENT_NODE:
            yield child


def _words(node: _Node) -> str:
    """Return the text of a property: its own, or its first list item's."""
    items = node.getElementsByTagNameNS(RDF, "li")
    chosen = items[0] if items else node
    return "".join(
        str(child.data) for child in chosen.childNodes if child.nodeType == child.TEXT_NODE
    ).strip()


def _tells_place(namespace: str | None, name: str | None) -> bool:
    plain = str(name).casefold()
    return plain.startswith("gps") or plain in _COORDINATES or name in _PLACES.get(str(namespace), ())


def _drop_namespace(description: _Node, namespace: str) -> None:
    """Remove a namespace's properties from a description, and the description where nothing is left of it."""
    gone = [a for a in _attributes(description) if a.namespaceURI == namespace]
    for attribute in gone:
        description.removeAttributeNode(attribute)
    for child in [c for c in _elements(description) if c.namespaceURI == namespace]:
        description.removeChild(child)
    if not _attributes(description) and not list(_elements(description)):
        description.parentNode.removeChild(description)


def _attributes(description: _Node) -> list[_Node]:
    """Return the attributes that are properties."""
    return [a for a in description.attributes.values() if a.namespaceURI not in (RDF, _XMLNS)]


def _move(node: _Node, home: _Node) -> None:
    """Move a property, an element or an attribute, into another packet's description."""
    document = home.ownerDocument
    if node.nodeType == node.ATTRIBUTE_NODE:
        owner = node.ownerElement
        copy = document.createElementNS(node.namespaceURI, node.name)
        copy.appendChild(document.createTextNode(node.value))
        _declare(copy, _scope(owner))
        owner.removeAttributeNode(node)
    else:
        copy = document.importNode(node, True)
        _declare(copy, _scope(node))
        node.parentNode.removeChild(node)
    home.appendChild(copy)


def _scope(node: _Node) -> dict[str, str]:
    """Return the namespace declarations that hold at a node, the nearest winning."""
    found: dict[str, str] = {}
    while node is not None and node.nodeType == node.ELEMENT_NODE:
        for attribute in node.attributes.values():
            if attribute.namespaceURI == _XMLNS:
                found.setdefault(attribute.name, attribute.value)
        node = node.parentNode
    return found


def _declare(element: _Node, declarations: Mapping[str, str]) -> None:
    for name, value in declarations.items():
        if not element.hasAttribute(name):
            element.setAttributeNS(_XMLNS, name, value)


def extension_digest(extension: bytes) -> bytes:
    """Return the name of an extension packet: the MD5 digest of its bytes, in capitals (ISO 16684-1's part 3)."""
    return hashlib.md5(extension, usedforsecurity=False).hexdigest().upper().encode()
