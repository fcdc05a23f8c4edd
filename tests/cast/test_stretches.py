"""Where the light of a sequence of frames switches.  The courses are laid out, so the truth is known."""

import numpy as np
import pytest

from grader.cast import shoot_course, vote
from grader.cast.plane import ab_from_linear
from grader.cast.stretches import find_switches
from grader.colour.white import linear_from_xy, xy_from_cct_duv

PRIOR = vote.log_prior("scene")
BLUR = 0.012
"""How far the evidence of one frame errs along either axis: about two degrees."""


def evidence(mired, seed):
    """Return log-maps of frames under black bodies and daylights of these reciprocal temperatures."""
    lights = ab_from_linear(linear_from_xy(xy_from_cct_duv(1e6 / np.asarray(mired), 0.0)))
    seen = lights + np.random.default_rng(seed).normal(0.0, BLUR, lights.shape)
    squared = ((vote.candidates() - seen[:, None]) ** 2).sum(axis=-1)
    weights = vote.weights_from_log(-0.5 * squared / BLUR**2)
    return shoot_course.log_robust(weights.astype(np.float32))


def switches(mired, seed):
    return find_switches(evidence(mired, seed), PRIOR, np.full(len(mired), 0.01))


@pytest.mark.parametrize("seed", range(4))
def test_a_light_that_drifts_fast_and_falls_back_switched(seed):
    mired = np.r_[np.linspace(160.0, 205.0, 72), np.linspace(160.0, 190.0, 46)]
    (found,) = switches(mired, seed)
    assert abs(found - 72) <= 1


@pytest.mark.parametrize("slope", [0.0, 0.3, -0.5])
@pytest.mark.parametrize("seed", range(4))
def test_drift_alone_is_no_switch(slope, seed):
    assert switches(190.0 + slope * np.arange(100.0), seed) == []


@pytest.mark.parametrize("seed", range(4))
def test_lamps_that_change_are_found_where_they_change(seed):
    mired = np.r_[np.full(20, 160.0), np.full(5, 350.0), np.full(30, 190.0)]
    assert np.abs(np.array(switches(mired, seed)) - [20, 25]).max() <= 1
