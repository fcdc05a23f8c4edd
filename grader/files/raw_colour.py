"""What a raw file says about its camera's colour, computed the way LibRaw computes it.

LibRaw decodes ``working = working_from_sensor @ diag(balance) @ sensor``, where ``working_from_sensor`` inverts the
camera matrix with its rows scaled so that a D65 neutral, balanced for D65, is (1, 1, 1).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader.colour.spaces import SPACES
from grader.colour.white import D65_XY, linear_from_xy
from grader.model import Header, Matrix, Sensor

_XYZ_FROM_SRGB: Final[Matrix] = np.array(
    [[0.4124564, 0.3575761, 0.1804375], [0.2126729, 0.7151522, 0.0721750], [0.0193339, 0.1191920, 0.9503041]]
)
"""The matrix LibRaw computes with (IEC 61966-2-1 primaries at seven digits)."""
_REC2020_FROM_SRGB: Final = SPACES["sRGB"].rec2020_from_linear
_FAR_FROM_DAYLIGHT: Final = 12.0
"""A balance further than this factor from the daylight setting, in a channel relative to green, is nonsense: candle
light at 1,500 K stays below. (judgement)"""
_FAR_FROM_EVEN: Final = 24.0
"""The same where no daylight setting is known. (judgement)"""

_OWN_LEAST: Final = 0.125
"""LibRaw takes a file's own matrix from this first element on."""
_WORST_CONDITION: Final = 100.0
"""Condition number from which a matrix cannot be a camera's: those of cameras lie below 10. (judgement)"""


AS_SHOT_WHITE_XY: Final = 0xC629
COLOUR_MATRICES: Final = (0xC621, 0xC622, 0xCD33)
"""ColorMatrix1 to 3 (DNG 1.7.1)."""
DngColour = Mapping[int, Sequence[float]]
"""Values of a DNG's colour tags by tag."""


@dataclass(frozen=True, slots=True, eq=False)
class RawColour:
    """Balances (4,) with green = 1, and the camera's matrix.

    ``working_from_balanced`` (3, 4 or 3) carries balanced sensor values to linear Rec.2020 in LibRaw's decode,
    ``daylight_from_balanced`` at the daylight setting; they differ only where LibRaw bends its matrix to the white of
    the shot.  None without a matrix.
    """

    as_shot: NDArray[np.float64]
    daylight: NDArray[np.float64]
    working_from_balanced: Matrix | None
    daylight_from_balanced: Matrix | None
    as_shot_usable: bool
    colours: int

    @property
    def balance(self) -> NDArray[np.float64]:
        """The multipliers to decode with (4,)."""
        return self.as_shot if self.as_shot_usable else self.daylight


def colour_of(raw: Any, dng: DngColour | None) -> RawColour:
    """Return the balances and the matrix of an opened raw file.

    Parameters
    ----------
    raw : rawpy.RawPy
    dng : mapping, optional
        The colour tags of a DNG; None for other files.  LibRaw takes the camera matrix that a DNG gives.
    """
    colours = int(raw.num_colors)
    matrix, neutral = _matrix(raw, colours, dng is not None)
    true = matrix
    daylight = _four(raw.daylight_whitebalance, colours)
    shot = _four(raw.camera_whitebalance, colours)
    if dng and matrix is not None and colours == 3 and len(dng.get(AS_SHOT_WHITE_XY, ())) == 2:
        shot, daylight = (
            daylight if shot is None else shot,
            None,
        )  # LibRaw has that white's neutral for daylight
        true, neutral = _matrix_of_tags(matrix, dng)
    if daylight is None and neutral is not None:
        daylight = _four(np.append(1 / neutral, np.zeros(4 - colours)), colours)
    known = daylight is not None and true is not None
    day = daylight if daylight is not None else np.ones(4)
    far = _FAR_FROM_DAYLIGHT if known else _FAR_FROM_EVEN
    usable = shot is not None and _plausible(shot / day, far, colours)
    return RawColour(shot if shot is not None and usable else day, day, matrix, true, usable, colours)


def _matrix_of_tags(libraws: Matrix, dng: DngColour) -> tuple[Matrix | None, NDArray[np.float64] | None]:
    """Return working_from_balanced and the response to a D65 neutral by a DNG's own ColorMatrix.

    Where the balance of the shot is given as a chromaticity, LibRaw scales the matrix in XYZ by that white over
    D65; of the file's matrices that one counts from which LibRaw's comes so.
    """
    x, y = dng[AS_SHOT_WHITE_XY]
    white = np.array([x, y, 1 - x - y]) / [*D65_XY, 1 - sum(D65_XY)]
    found = []
    for tag in COLOUR_MATRICES:
        if len(dng.get(tag, ())) == 9:
            sensor_from_xyz = np.reshape(dng[tag], (3, 3))
            scaled = _working_from_balanced(sensor_from_xyz * white)
            true = _working_from_balanced(sensor_from_xyz)
            if scaled is not None and true is not None:
                neutral = (sensor_from_xyz @ _XYZ_FROM_SRGB).sum(axis=1)
                found.append((float(np.abs(scaled - libraws).max()), true, neutral))
    return min(found, key=lambda candidate: candidate[0])[1:] if found else (None, None)


def _working_from_balanced(sensor_from_xyz: Matrix) -> Matrix | None:
    """Return linear Rec.2020 from sensor values balanced for D65, as LibRaw computes it; None where unusable."""
    sensor_from_srgb = sensor_from_xyz @ _XYZ_FROM_SRGB
    neutral = sensor_from_srgb.sum(axis=1)
    if not (_usable(sensor_from_srgb) and np.all(neutral > 1e-5)):
        return None
    return np.asarray(_REC2020_FROM_SRGB @ np.linalg.pinv(sensor_from_srgb / neutral[:, None]))


def _matrix(raw: Any, colours: int, dng: bool) -> tuple[Matrix | None, NDArray[np.float64] | None]:
    """Return working_from_balanced and the sensor's response to a D65 neutral; None where unknown."""
    if colours < 3:
        return None, None
    sensor_from_xyz = np.asarray(raw.rgb_xyz_matrix, np.float64)[:colours]
    matrix = _working_from_balanced(sensor_from_xyz)
    neutral = None if matrix is None else (sensor_from_xyz @ _XYZ_FROM_SRGB).sum(axis=1)
    own = np.asarray(raw.color_matrix, np.float64)[:, :colours]
    if dng and own[0, 0] > _OWN_LEAST:
        matrix = _REC2020_FROM_SRGB @ own
    return (matrix if matrix is not None and _usable(matrix) else None), neutral


def _usable(matrix: Matrix) -> bool:
    return bool(np.all(np.isfinite(matrix))) and bool(np.linalg.cond(matrix) < _WORST_CONDITION)


def _four(values: Any, colours: int) -> NDArray[np.float64] | None:
    """Return four multipliers, green = 1; None where one that is needed is missing or no number above zero."""
    four = np.asarray(values, np.float64)
    if colours == 1:
        return np.ones(4)
    with np.errstate(invalid="ignore"):
        sound = np.isfinite(four) & (four > 1e-5)
    if not sound[: min(colours, 4)].all():
        return None
    if not sound[3]:
        four[3] = four[1]
    return np.asarray(four / four[1])


def _plausible(ratio: NDArray[np.float64], far: float, colours: int) -> bool:
    used = ratio[:colours]
    return bool(np.all(used < far) and np.all(used > 1 / far))


def daylight_from_decoded(colour: RawColour) -> Matrix | None:
    """Return the matrix from working light as decoded to working light at the camera's daylight setting.

    Green keeps its scale.  None where they are the same, or the camera's matrix is not known.
    """
    working, daylight = colour.working_from_balanced, colour.daylight_from_balanced
    if working is None or daylight is None or not colour.as_shot_usable:
        return None
    ratio = (colour.daylight / colour.as_shot)[: working.shape[1]]
    matrix = np.asarray(daylight @ np.diag(ratio) @ np.linalg.pinv(working))
    return None if np.allclose(matrix, np.eye(3), atol=1e-6) else matrix


def sensor_of(colour: RawColour) -> Sensor | None:
    """Return the header's account of the sensor; None without a matrix or with other than three colours."""
    if colour.daylight_from_balanced is None or colour.colours != 3:
        return None
    return Sensor(
        sensor_from_rec2020=np.asarray(np.linalg.inv(colour.daylight_from_balanced[:, :3]), np.float64),
        daylight_neutral=1 / colour.daylight[:3],
        as_shot_neutral=1 / colour.as_shot[:3],
    )


def neutral_under(sensor: Sensor, light_xy: tuple[float, float]) -> NDArray[np.float64]:
    """Return the sensor's response (3,) to a neutral under a light, green = 1; at least 1e-3 in each channel."""
    balanced = sensor.sensor_from_rec2020 @ linear_from_xy(light_xy)
    response = np.maximum(balanced * sensor.daylight_neutral, 1e-3 * np.max(balanced))
    return np.asarray(response / response[1])


def sensor_multipliers(header: Header, light_xy: tuple[float, float]) -> NDArray[np.float64] | None:
    """Return the multipliers (3,) that a raw decoder needs to render a light neutral, green = 1.

    Parameters
    ----------
    header : Header
        Of a raw frame.
    light_xy : (float, float)
        The light, at the camera's daylight setting, as `Cast.white_xy` states it.

    Returns
    -------
    (3,) float64 or None
        For example for LibRaw's ``user_wb`` (with green repeated); None where the sensor is not known.
    """
    return None if header.sensor is None else 1 / neutral_under(header.sensor, light_xy)
