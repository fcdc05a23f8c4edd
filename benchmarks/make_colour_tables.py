"""Write ``grader/colour/_tables.py`` from colour-science, so that grader itself need not import it.

Run as ``python benchmarks/make_colour_tables.py`` and then ``ruff format grader/colour/_tables.py``.
"""

from __future__ import annotations

import warnings
from pathlib import Path

import numpy as np

with warnings.catch_warnings():
    warnings.filterwarnings("ignore", message='.*"Matplotlib" related API features.*')
    import colour
    from colour.colorimetry.blackbody import CONSTANT_C2

TARGET = Path(__file__).parent.parent / "grader" / "colour" / "_tables.py"
HEADER = f'''"""Plain numbers from colour-science {colour.__version__}; written by benchmarks/make_colour_tables.py."""

from __future__ import annotations

from typing import Final

'''
SPACES = {
    "sRGB": "sRGB",
    "Display P3": "Display P3",
    "Rec.2020": "ITU-R BT.2020",
    "ROMM RGB": "ROMM RGB",
    "ACEScg": "ACEScg",
}
OPRGB_PRIMARIES_XY = ((0.64, 0.33), (0.21, 0.71), (0.15, 0.06))  # IEC 61966-2-5; white D65
TRANSFORMS = {"cat16": "CAT16", "bradford": "Bradford", "cat02": "CAT02", "von-kries": "Von Kries"}


def rows(array: np.ndarray) -> str:
    """Return an array's rows as a tuple of tuples, shortest exact decimals."""
    return "(" + ", ".join(repr(tuple(float(x) for x in row)) for row in np.atleast_2d(array)) + ",)"


def lines() -> list[str]:
    """Return the module's statements."""
    cmfs = colour.MSDS_CMFS["CIE 1931 2 Degree Standard Observer"]
    at_5_nm = cmfs.copy().align(colour.SpectralShape(360, 830, 5))
    whites = {ours: tuple(map(float, colour.RGB_COLOURSPACES[n].whitepoint)) for ours, n in SPACES.items()}
    out = ["Rows = tuple[tuple[float, ...], ...]", "", f"C2_M_K: Final = {CONSTANT_C2!r}"]
    out += ['"""Second radiation constant on the ITS-90 temperature scale."""', ""]
    out += ["PRIMARIES_XY: Final[dict[str, Rows]] = {"]
    out += [f'    "{ours}": {rows(colour.RGB_COLOURSPACES[n].primaries)},' for ours, n in SPACES.items()]
    out += [f'    "opRGB": {rows(OPRGB_PRIMARIES_XY)},']
    out += ["}", "WHITE_XY: Final[dict[str, tuple[float, float]]] = {"]
    out += [f'    "{ours}": {xy},' for ours, xy in whites.items()]
    out += [f'    "opRGB": {whites["sRGB"]},']
    out += ["}", "CONE_FROM_XYZ: Final[dict[str, Rows]] = {"]
    out += [
        f'    "{ours}": {rows(colour.CHROMATIC_ADAPTATION_TRANSFORMS[n])},' for ours, n in TRANSFORMS.items()
    ]
    out += [
        "}",
        "",
        f"CMF_FIRST_M, CMF_STEP_M = {360e-9!r}, {5e-9!r}",
        f"CMF: Final[Rows] = {rows(at_5_nm.values)}",
    ]
    out += ['"""CIE 1931 2 degree colour-matching functions x, y, z (CIE 015:2018, table 6)."""', ""]
    return out


if __name__ == "__main__":
    TARGET.write_text(HEADER + "\n".join(lines()), encoding="utf-8")
    print(f"wrote {TARGET}")
