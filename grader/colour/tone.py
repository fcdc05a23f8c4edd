"""The one tone curve that raw frames get: from scene light to display light, the same for every frame.

``y = (1 + s) x**p / (x**p + s)``, the rational curve by which Naka and Rushton described a receptor's response
[1]_, scaled so that the file's white stays white.  Two figures fix it: the contrast ``p`` of the shadows, and ``s``
from where mid grey goes.  docs/TONE.md shows the curve and argues both.

References
----------
.. [1] K. I. Naka, W. A. H. Rushton, "S-potentials from colour units in the retina of fish (Cyprinidae)",
   J. Physiol. 185, 1966, 536-555.
.. [2] ISO 12232:2019, Photography - Digital still cameras - Determination of exposure index, ISO speed
   ratings, standard output sensitivity, and recommended exposure index.
"""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

GREY_SCENE: Final = 0.18 / 2**0.5
"""Where a metered 18 % grey lies in a raw file, as a share of its white: ISO 12232 rates saturation speed so that
a 141 % reflectance (half a stop above a perfect white) just saturates the sensor. [2]"""
GREY_DISPLAY: Final = 0.18
"""Where it belongs in a display-referred picture: ISO 12232's standard output sensitivity asks for 461/1000 of the
maximum in sRGB (118 of 255), which is 18 % of white in linear light. [2]"""
CONTRAST: Final = 1.25
"""Slope of the shadows in log-log terms; with it mid grey has 1.11 and the deepest shadows keep their
steps at 16 bit. (judgement; docs/TONE.md)"""

_POWER: Final = GREY_SCENE**CONTRAST
_S: Final = _POWER * (1 - GREY_DISPLAY) / (GREY_DISPLAY - _POWER)


def apply(linear: ArrayLike) -> NDArray[np.float64]:
    """Return display light for scene light.

    Parameters
    ----------
    linear : array_like
        Scene light, 1 = the file's white; negative values are mirrored, values above 1 stay above 1.

    Returns
    -------
    ndarray of float64
        Same shape; 0 to 0, 1 to 1, strictly rising, below ``1 + s`` (about 1.6) whatever comes in.

    Examples
    --------
    >>> [round(float(y), 4) for y in apply([0.0, 0.18 / 2**0.5, 1.0])]
    [0.0, 0.18, 1.0]
    """
    x = np.asarray(linear, np.float64)
    with np.errstate(divide="ignore", over="ignore"):  # 0 and infinity have their limits
        y = (1 + _S) / (1 + _S * np.abs(x) ** -CONTRAST)
    return np.copysign(y, x)


def inverse(display: ArrayLike) -> NDArray[np.float64]:
    """Return scene light for display light; the inverse of `apply`.

    Values that no scene light reaches (beyond ``1 + s``) give infinity.

    Examples
    --------
    >>> [round(float(x), 4) for x in inverse([0.18, 1.0])]
    [0.1273, 1.0]
    """
    y = np.asarray(display, np.float64)
    size = np.abs(y)
    room = np.maximum(1 + _S - size, 0)
    with np.errstate(divide="ignore"):
        x = (_S * size / room) ** (1 / CONTRAST)
    return np.copysign(x, y)
