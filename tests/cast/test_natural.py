"""The fit of a frame's colours against the same sums by scipy."""

import numpy as np
import pytest
from scipy.signal import correlate2d
from scipy.stats import multivariate_normal

from grader.cast import _natural_tables as tables
from grader.cast.natural import mean_log_density, mixture_density
from grader.cast.plane import A_BINS, B_BINS, STEP


@pytest.mark.parametrize("rows", [tables.SURFACE, tables.EDGE])
def test_density_as_scipy_has_it(rows):
    places = np.random.default_rng(1).normal(0, 0.1, (40, 2))
    expected = sum(
        share * multivariate_normal([a, b], [[aa, ab], [ab, bb]]).pdf(places)
        for share, a, b, aa, ab, bb in rows
    )
    np.testing.assert_allclose(mixture_density(places, np.array(rows)), expected, rtol=1e-9)
    assert sum(row[0] for row in rows) == pytest.approx(1.0, abs=1e-3)


def test_correlation_as_scipy_has_it():
    histogram = np.random.default_rng(3).random((A_BINS, B_BINS)) ** 8
    histogram /= histogram.sum()
    a, b = (STEP * np.arange(1 - n, n) for n in (A_BINS, B_BINS))
    places = np.stack(np.meshgrid(a, b, indexing="ij"), -1)
    table = np.log(mixture_density(places, np.array(tables.SURFACE)) * STEP**2 + 1e-6)
    expected = correlate2d(table, histogram, "valid")[::-1, ::-1]
    np.testing.assert_allclose(mean_log_density(histogram, "surface"), expected, atol=1e-9)
