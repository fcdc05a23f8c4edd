"""What a raw file says about its camera's colour, computed the way LibRaw computes it.

LibRaw decodes ``working = working_from_sensor @ diag(balance) @ sensor``, where ``working_from_sensor`` inverts the
camera matrix with its rows scaled so that a D65 neutral, balanced for D65, is (1, 1, 1).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from grader.colour.spaces import SPACES
from grader.colour.white import linear_from_xy
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


@dataclass(frozen=True, slots=True, eq=False)
class RawColour:
    """Balances (4,) with green = 1, and the camera's matrix.

    ``working_from_balanced`` (3, 4 or 3) carries balanced sensor values to linear Rec.2020; None without a matrix.
    """

    as_shot: NDArray[np.float64]
    daylight: NDArray[np.float64]
    working_from_balanced: Matrix | None
    as_shot_usable: bool
    colours: int

    @property
    def balance(self) -> NDArray[np.float64]:
        """The multipliers to decode with (4,)."""
        return self.as_shot if self.as_shot_usable else self.daylight


def colour_of(raw: Any, *, dng: bool) -> RawColour:
    """Return the balances and the matrix of an opened raw file.

    Parameters
    ----------
    raw : rawpy.RawPy
    dng : bool
        The file is a DNG: LibRaw then takes the camera matrix that the file gives.
    """
    colours = int(raw.num_colors)
    matrix, neutral = _matrix(raw, colours, dng)
    daylight = _four(raw.daylight_whitebalance, colours)
    if daylight is None:
        daylight = _four(1 / neutral, colours) if neutral is not None else None
    known = daylight is not None and matrix is not None
    day = daylight if daylight is not None else np.ones(4)
    shot = _four(raw.camera_whitebalance, colours)
    usable = shot is not None and _plausible(
        shot / day, _FAR_FROM_DAYLIGHT if known else _FAR_FROM_EVEN, colours
    )
    return RawColour(shot if shot is not None and usable else day, day, matrix, usable, colours)


def _matrix(raw: Any, colours: int, dng: bool) -> tuple[Matrix | None, NDArray[np.float64] | None]:
    """Return working_from_balanced and the sensor's response to a D65 neutral; None where unknown."""
    if colours < 3:
        return None, None
    sensor_from_srgb = np.asarray(raw.rgb_xyz_matrix, np.float64)[:colours] @ _XYZ_FROM_SRGB
    neutral = sensor_from_srgb.sum(axis=1)
    sound = bool(np.all(np.isfinite(sensor_from_srgb)) and np.all(neutral > 1e-5))
    own = np.asarray(raw.color_matrix, np.float64)[:, :colours]
    if dng and own[0, 0] > 0.125 and np.all(np.isfinite(own)):
        return _REC2020_FROM_SRGB @ own, neutral if sound else None
    if not sound or np.linalg.matrix_rank(sensor_from_srgb) < 3:
        return None, None
    return _REC2020_FROM_SRGB @ np.linalg.pinv(sensor_from_srgb / neutral[:, None]), neutral


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
    working = colour.working_from_balanced
    if working is None or not colour.as_shot_usable:
        return None
    n = working.shape[1]
    ratio = (colour.daylight / colour.as_shot)[:n]
    if np.allclose(ratio, 1, rtol=1e-6):
        return None
    return np.asarray(working @ np.diag(ratio) @ np.linalg.pinv(working))


def sensor_of(colour: RawColour) -> Sensor | None:
    """Return the header's account of the sensor; None without a matrix or with other than three colours."""
    if colour.working_from_balanced is None or colour.colours != 3:
        return None
    return Sensor(
        sensor_from_rec2020=np.asarray(np.linalg.inv(colour.working_from_balanced[:, :3]), np.float64),
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
