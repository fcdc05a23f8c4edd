"""The colours of natural scenes, and how well a frame's colours fit them under each candidate light.

Photographs hold much grey and near-grey, the blue of shade and the yellow of sun along one axis, foliage,
earth and skin, and next to no purple.  A light that would make the scene's own colours rare is unlikely
(colour by correlation [1]_, Bayesian colour constancy [2]_).  Each density is a mixture of Gaussians over
the log-opponent plane, the neutral at (0, 0): under another light the whole density moves by that light's place.

References
----------
.. [1] G. D. Finlayson, S. D. Hordley and P. M. Hubel, "Color by correlation", IEEE TPAMI 23(11), 2001,
   doi:10.1109/34.969113.
.. [2] D. H. Brainard and W. T. Freeman, "Bayesian color constancy", JOSA A 14(7), 1997,
   doi:10.1364/JOSAA.14.001393.
"""

from __future__ import annotations

from functools import cache
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from grader.cast import _natural_tables as tables
from grader.cast.plane import A_BINS, B_BINS, STEP

Array = NDArray[np.float64]
Kind = Literal["surface", "edge"]

_RARE: Final = 1e-6
"""Share of colours that no mixture explains, in every bin: one odd colour must not decide."""


def mixture_density(places: Array, mixture: Array) -> Array:
    """Return the density of a mixture at places in the plane.

    Parameters
    ----------
    places : (..., 2) float64
    mixture : (K, 6) float64
        Rows: share, mean a, mean b, variance a, covariance, variance b.

    Returns
    -------
    (...) float64
        Per unit area of the plane.
    """
    total = np.zeros(places.shape[:-1])
    for share, a, b, aa, ab, bb in mixture:
        da, db = places[..., 0] - a, places[..., 1] - b
        determinant = aa * bb - ab * ab
        squared = (bb * da * da - 2.0 * ab * da * db + aa * db * db) / determinant
        total += share * np.exp(-0.5 * squared) / (2.0 * np.pi * np.sqrt(determinant))
    return total


def mean_log_density(histogram: Array, kind: Kind) -> Array:
    """Return how well a frame's colours fit the natural ones, were each bin of the grid the light.

    Parameters
    ----------
    histogram : (A_BINS, B_BINS) float64
        Sums to 1, or all zero (then every light fits alike).
    kind : 'surface' or 'edge'
        Colours of cells, or of the differences between neighbours.

    Returns
    -------
    (A_BINS, B_BINS) float64
        Mean natural logarithm of the density. [ln share per bin]
    """
    spectrum = np.fft.rfft2(histogram, (2 * A_BINS, 2 * B_BINS))
    fitted = np.fft.irfft2(spectrum * _spectrum(kind), (2 * A_BINS, 2 * B_BINS))
    return np.asarray(fitted[:A_BINS, :B_BINS])


@cache
def _spectrum(kind: Kind) -> NDArray[np.complex128]:
    """Return the transform of the log density, turned round, so that a product of spectra correlates."""
    mixture = np.array(tables.SURFACE if kind == "surface" else tables.EDGE)
    a = STEP * np.fft.fftfreq(2 * A_BINS, 1.0 / (2 * A_BINS))
    b = STEP * np.fft.fftfreq(2 * B_BINS, 1.0 / (2 * B_BINS))
    places = np.stack(np.meshgrid(-a, -b, indexing="ij"), axis=-1)
    return np.fft.rfft2(np.log(mixture_density(places, mixture) * STEP * STEP + _RARE))
