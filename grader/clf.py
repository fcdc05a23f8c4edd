"""Corrections for other systems: Common LUT Format files, and matrices as plain numbers.

A Common LUT Format file holds three steps for pictures of one named colour space: its decode curve, one
matrix, its encode curve.  It cannot hold what grader does beyond that matrix: highlights that were
clipped are not blended back to white, and colours that leave the gamut are not pulled in.  Where neither
acts, both give the same pixels.
"""

from __future__ import annotations

import os
import uuid
from typing import Any, Final
from xml.etree import ElementTree as ET

import numpy as np

from grader.atomic import write_atomic
from grader.colour.spaces import space_by_name
from grader.colour.transfer import decode, encode
from grader.model import Correction, Curve, Matrix, Space

NAMESPACE: Final = "http://www.smpte-ra.org/ns/2136-1/2024"
"""SMPTE ST 2136-1:2024."""
ACADEMY_VERSION: Final = "3.0"
"""Academy S-2014-006, "Common LUT Format", version 3, whose readers ignore the namespace."""
LIMITS_NOTE: Final = (
    "Beyond this matrix grader blends clipped highlights to white and pulls in colours that leave the gamut; "
    "this file cannot."
)
_TABLE_SIZE: Final = 4097
"""Steps of 1/4096, so that the breaks of ISO 22028-2 (1/512 and 1/32) fall on entries."""


def write_clf(
    correction: Correction,
    space_name: str,
    target: str | os.PathLike[str],
    *,
    title: str,
    description: str = "",
    exposure_ev: float = 0.0,
    overwrite: bool = False,
) -> None:
    """Write a correction as one Common LUT Format file, whole or not at all.

    Parameters
    ----------
    correction : Correction
        For display-referred pictures of that space.  For raw files ask for ``linear Rec.2020``: the file then
        holds the bare matrix on working light as decoded.
    space_name : str
        Colour space of the pictures, a name of `grader.colour.spaces.SPACES`; they stay in it.
    target : path-like
        The file, ``.clf`` by custom.
    title, description : str
        For people; they do not change the pixels.
    exposure_ev : float
        Exposure shift that goes into the matrix. [stops]
    overwrite : bool
        Replace a file that stands there already.

    Raises
    ------
    PresetError
        The space is unknown.
    WriteFailed
        The file exists and may not be replaced, or cannot be written.
    """
    text = clf_text(correction, space_name, title=title, description=description, exposure_ev=exposure_ev)
    write_atomic(target, text.encode("utf-8"), overwrite=overwrite)


def clf_text(
    correction: Correction, space_name: str, *, title: str, description: str = "", exposure_ev: float = 0.0
) -> str:
    """Return the text of the Common LUT Format file; the same correction gives the same text.

    References
    ----------
    .. [1] SMPTE ST 2136-1:2024, "Common LUT Format".
    .. [2] Academy S-2014-006, "Common LUT Format (CLF) - A Common File Format for Look-Up Tables", version 3.0.

    Examples
    --------
    >>> same = Correction(None, (0.3127, 0.3290), np.eye(3))
    >>> clf_text(same, "Rec.2020", title="nothing").count("<Exponent ")
    2
    """
    space = space_by_name(space_name)
    nodes = [
        *_curve_nodes(space, decoding=True),
        _matrix_node(matrix_in_space(correction, space, exposure_ev)),
        *_curve_nodes(space, decoding=False),
    ]
    content = "".join(ET.tostring(node, encoding="unicode") for node in nodes)
    identity = f"urn:uuid:{uuid.uuid5(uuid.NAMESPACE_URL, NAMESPACE + title + content)}"
    root = ET.Element(
        "ProcessList",
        {"xmlns": NAMESPACE, "id": identity, "compCLFversion": ACADEMY_VERSION, "name": _clean(title)},
    )
    ET.SubElement(root, "Id").text = identity
    for line in filter(None, (_clean(title), _clean(description), LIMITS_NOTE)):
        ET.SubElement(root, "Description").text = line
    ET.SubElement(root, "InputDescriptor").text = space.name
    ET.SubElement(root, "OutputDescriptor").text = space.name
    root.extend(nodes)
    ET.indent(root)
    return '<?xml version="1.0" encoding="UTF-8"?>\n' + ET.tostring(root, encoding="unicode") + "\n"


def matrix_json(
    correction: Correction, space_name: str | None = None, *, exposure_ev: float = 0.0
) -> dict[str, Any]:
    """Return a correction as plain numbers that JSON can carry.

    Parameters
    ----------
    correction : Correction
    space_name : str, optional
        Give the matrix for linear light of this space's primaries too.
    exposure_ev : float
        Exposure shift that goes into the matrices. [stops]

    Returns
    -------
    dict
        ``matrix`` acts on linear Rec.2020 (D65), as decoded: rows make the output's red, green and blue.
        ``matrix_in_space`` does on linear light of ``space``.

    Raises
    ------
    PresetError
        The space is unknown.

    Examples
    --------
    >>> matrix_json(Correction(None, (0.3127, 0.3290), np.eye(3)))["matrix"][0]
    [1.0, 0.0, 0.0]
    """
    gain = float(2.0**exposure_ev)
    told: dict[str, Any] = {
        "matrix": (gain * np.asarray(correction.matrix, np.float64)).tolist(),
        "acts_on": "linear Rec.2020 (D65) as decoded, column vector of red, green, blue",
        "from_xy": None if correction.from_xy is None else [float(v) for v in correction.from_xy],
        "toward_xy": [float(v) for v in correction.toward_xy],
        "transform": correction.transform,
        "degree": float(correction.degree),
        "shift_mired": correction.shift_mired,
        "shift_duv": correction.shift_duv,
        "exposure_ev": float(exposure_ev),
        "cannot_carry": LIMITS_NOTE,
    }
    if space_name is not None:
        space = space_by_name(space_name)
        told |= {
            "space": space.name,
            "matrix_in_space": matrix_in_space(correction, space, exposure_ev).tolist(),
        }
    return told


def matrix_in_space(correction: Correction, space: Space, exposure_ev: float = 0.0) -> Matrix:
    """Return the correction as a (3, 3) matrix on linear light of a space; use as ``linear @ m.T``."""
    rec2020_from_linear = np.asarray(space.rec2020_from_linear, np.float64)
    matrix = np.linalg.solve(
        rec2020_from_linear, np.asarray(correction.matrix, np.float64) @ rec2020_from_linear
    )
    return np.asarray(matrix * 2.0**exposure_ev)


def _curve_nodes(space: Space, *, decoding: bool) -> list[ET.Element]:
    """Return the node of a space's curve, the same for its three channels; none for linear light."""
    curve = space.curves[0]
    if (curve.g, curve.a, curve.b, curve.e, curve.d) == (1.0, 1.0, 0.0, 0.0, 0.0):
        return []
    direction = "Fwd" if decoding else "Rev"
    if curve.b > 0.0:
        return [_exponent_node(f"monCurveMirror{direction}", curve.g, curve.b / curve.a)]
    if curve.d == 0.0:
        return [_exponent_node(f"basicMirror{direction}", curve.g, None)]
    return [_table_node(curve, decoding=decoding)]


def _exponent_node(style: str, exponent: float, offset: float | None) -> ET.Element:
    """Return an Exponent node.

    Its monitor curve puts the break where value and slope are continuous: for sRGB that is 0.0393 and a slope
    of 12.923 where IEC 61966-2-1 has the rounded 0.04045 and 12.92, at most 1e-5 apart when encoded.
    """
    node = ET.Element("Exponent", {"inBitDepth": "32f", "outBitDepth": "32f", "style": style})
    given = {"exponent": _number(exponent)} | ({} if offset is None else {"offset": _number(offset)})
    ET.SubElement(node, "ExponentParams", given)
    return node


def _table_node(curve: Curve, *, decoding: bool) -> ET.Element:
    """Return a LUT1D node for curves that no Exponent node has; it holds values from 0 to 1."""
    steps = np.linspace(0.0, 1.0, _TABLE_SIZE)
    values = decode(curve, steps) if decoding else encode(curve, steps)
    node = ET.Element("LUT1D", {"inBitDepth": "32f", "outBitDepth": "32f", "interpolation": "linear"})
    array = ET.SubElement(node, "Array", {"dim": f"{_TABLE_SIZE} 1"})
    array.text = "\n" + "\n".join(_number(round(float(v), 9)) for v in values) + "\n"
    return node


def _matrix_node(matrix: Matrix) -> ET.Element:
    node = ET.Element("Matrix", {"inBitDepth": "32f", "outBitDepth": "32f"})
    array = ET.SubElement(node, "Array", {"dim": "3 3"})
    array.text = "\n" + "\n".join(" ".join(_number(v) for v in row) for row in matrix) + "\n"
    return node


def _number(value: float) -> str:
    return repr(float(value))


def _clean(text: str) -> str:
    """Return text on one line, without what XML 1.0 cannot hold."""
    one_line = " ".join(text.split())
    return "".join(
        c for c in one_line if c >= " " and not "\ud800" <= c <= "\udfff" and c not in "\ufffe\uffff"
    )
