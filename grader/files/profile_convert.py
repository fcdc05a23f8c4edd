"""Colours that no matrix explains: look-up-table profiles, inks and CIELAB, converted to a wide RGB space.

LittleCMS evaluates the profile, colorimetrically and relative to white, in floating point; the result is
encoded once, as 16-bit Rec.2020.
"""

from __future__ import annotations

from typing import Any, Final

import imagecodecs
import numpy as np
from numpy.typing import NDArray

from grader.colour import transfer
from grader.colour.spaces import REC2020_FROM_XYZ, SPACES
from grader.colour.white import D65_XY, xyz_from_xy
from grader.files.profile import D50_XYZ, ProfileProblem, bradford, curve_values
from grader.files.profile_build import profile_bytes
from grader.model import Space

_RELATIVE: Final = 1
_EXACT: Final = 64 | 256  # no cache, no optimisation: every value through the profile itself
_COLOUR_NAMES: Final = {1: "gray", 3: "rgb", 4: "cmyk"}
_ROWS: Final = 128
_AGREEMENT: Final = 4e-3
"""Encoded difference below which matrix and table say the same (one code value in 8 bits)."""


def agrees(space: Space, icc: bytes, colours: str) -> bool:
    """Return whether a profile's matrix and curves give what its look-up tables give, on a 9-step grid."""
    if colours != "RGB":
        return False
    steps = np.linspace(0.0, 1.0, 9)
    grid = np.stack(np.meshgrid(steps, steps, steps, indexing="ij"), axis=-1).reshape(1, -1, 3)
    by_table = _linear(grid.astype(np.float32), icc)
    light = np.stack([curve_values(c, grid[..., i]) for i, c in enumerate(space.curves)], axis=-1)
    by_matrix = light @ space.rec2020_from_linear.T
    difference = _encoded(by_matrix) - _encoded(by_table)
    return bool(np.abs(difference).max() < _AGREEMENT)


def wide_from_device(samples: NDArray[Any], icc: bytes) -> NDArray[np.uint16]:
    """Return 16-bit Rec.2020 of device colours.

    Parameters
    ----------
    samples : (H, W, 1 | 3 | 4) uint8, uint16 or float32
        Grey, RGB or CMYK, at the full range of its type.
    icc : bytes
        The profile that explains them.

    Raises
    ------
    ProfileProblem
        LittleCMS cannot use the profile.
    """
    result = np.empty((*samples.shape[:2], 3), np.uint16)
    for start in range(0, len(samples), _ROWS):
        rows = slice(start, start + _ROWS)
        result[rows] = np.round(_encoded(_linear(samples[rows], icc)) * 65535)
    return result


def _linear(samples: NDArray[Any], icc: bytes) -> NDArray[np.float32]:
    """Return linear Rec.2020 (H, W, 3) of device colours; not clipped."""
    channels = samples.shape[2]
    samples = np.ascontiguousarray(samples[..., 0] if channels == 1 else samples)
    if channels == 4 and samples.dtype == np.float32:
        samples = samples * np.float32(100.0)  # LittleCMS counts inks in percent when they are floats
    try:
        linear = imagecodecs.cms_transform(
            samples,
            icc,
            profile_bytes("linear Rec.2020"),
            colorspace=_COLOUR_NAMES[channels],
            planar=False,
            outcolorspace="rgb",
            outplanar=False,
            outdtype="float32",
            intent=_RELATIVE,
            flags=_EXACT,
        )
    except (RuntimeError, ValueError) as problem:  # imagecodecs.CmsError is a RuntimeError
        raise ProfileProblem(f"LittleCMS refuses it ({problem})") from problem
    return np.asarray(linear)


def _encoded(linear: NDArray[Any]) -> NDArray[np.float64]:
    """Return linear Rec.2020 in the space's own encoding, clipped to what 16 bits can hold."""
    clipped = np.clip(np.nan_to_num(linear), 0.0, 1.0)
    return transfer.encode(SPACES["Rec.2020"].curves[0], clipped)


def wide_from_lab(lab: NDArray[np.float32]) -> NDArray[np.uint16]:
    """Return 16-bit Rec.2020 of CIELAB colours (L* 0 to 100), their white taken as the picture's white.

    References
    ----------
    .. [1] CIE 15:2018, 8.2.1 (the inverse of CIE 1976 L*a*b*).
    """
    from_d50 = REC2020_FROM_XYZ @ bradford(D50_XYZ, xyz_from_xy(D65_XY))
    result = np.empty(lab.shape, np.uint16)
    for start in range(0, len(lab), _ROWS):
        rows = slice(start, start + _ROWS)
        lightness, a, b = np.moveaxis(lab[rows].astype(np.float64), -1, 0)
        middle = (lightness + 16.0) / 116.0
        roots = np.stack([middle + a / 500.0, middle, middle - b / 200.0], axis=-1)
        ratios = np.where(roots > 6 / 29, roots**3, (roots - 4 / 29) * 3 * (6 / 29) ** 2)
        result[rows] = np.round(_encoded((ratios * D50_XYZ) @ from_d50.T) * 65535)
    return result


def srgb_from_ideal_inks(inks: NDArray[Any]) -> NDArray[np.uint16]:
    """Return 16-bit sRGB of CMYK without a profile: each ink takes away its own colour and nothing else."""
    top = 1.0 if inks.dtype.kind == "f" else float(np.iinfo(inks.dtype).max)
    result = np.empty((*inks.shape[:2], 3), np.uint16)
    for start in range(0, len(inks), _ROWS):
        rows = slice(start, start + _ROWS)
        left = 1.0 - np.clip(inks[rows] / top, 0.0, 1.0)
        result[rows] = np.round(left[..., :3] * left[..., 3:] * 65535)
    return result
