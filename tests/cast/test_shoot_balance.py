"""Finished frames that their camera balanced one by one.  Lights and balances are laid out, so the truth is known."""

from dataclasses import replace

import numpy as np
import pytest
from batchkit import encoded_scene

from grader import cast as casts
from grader.cast import shoot_course, vote
from grader.cast.correction import angle_deg
from grader.cast.plane import ab_from_linear
from grader.cast.shoot_balance import balanced_anew
from grader.colour.white import linear_from_xy, xy_from_cct_duv
from grader.model import Frame

LIGHT = ab_from_linear(linear_from_xy(xy_from_cct_duv(4500, 0.0)))
BLUR = 0.010
"""How far the evidence of one frame errs along either axis."""


def evidence(balances, seed):
    """Return log-maps of frames whose casts are ``LIGHT + balances`` and whose evidence errs by ``BLUR``."""
    seen = LIGHT + balances + np.random.default_rng(seed).normal(0.0, BLUR, balances.shape)
    squared = ((vote.candidates() - seen[:, None]) ** 2).sum(axis=-1)
    weights = vote.weights_from_log(-0.5 * squared / BLUR**2)
    return shoot_course.log_robust(weights.astype(np.float32))


def balances(count, spread, seed):
    return np.random.default_rng(1000 + seed).normal(0.0, [0.4 * spread, spread], (count, 2))


@pytest.mark.parametrize("count", [6, 24, 300])
@pytest.mark.parametrize("seed", range(4))
def test_one_balance_for_all_is_left_one(count, seed):
    assert balanced_anew(evidence(np.zeros((count, 2)), seed), np.tile(LIGHT, (count, 1))) is None


@pytest.mark.parametrize("spread", [0.02, 0.035])
@pytest.mark.parametrize("seed", range(4))
def test_frames_balanced_one_by_one_go_toward_their_own_casts(spread, seed):
    moved = balances(60, spread, seed)
    maps = evidence(moved, seed)
    found = balanced_anew(maps, np.tile(LIGHT, (60, 1)))
    assert found is not None
    off = np.linalg.norm(found.places - (LIGHT + moved), axis=1)
    assert off.mean() < 0.85 * np.linalg.norm(moved, axis=1).mean()  # nearer than the light of the stretch
    assert (
        off.mean() < np.linalg.norm(evidence_means(maps) - (LIGHT + moved), axis=1).mean()
    )  # and than each alone
    assert 0.2 < found.doubt_deg < 3.0


def evidence_means(maps):
    return vote.weights_from_log(maps.astype(np.float64)) @ vote.candidates()


def test_too_few_frames_tell_nothing():
    assert balanced_anew(evidence(balances(5, 0.04, 0), 0), np.tile(LIGHT, (5, 1))) is None


def test_an_automatic_balance_in_a_shoot_of_finished_frames():
    """Pieces of a photograph, each with a balance of its own, sd 50 mired: pooling alone would leave all of it in."""
    rng = np.random.default_rng(7)
    mired = 170.0 + 50.0 * rng.standard_normal(24)
    given, shoot = [], []
    for k, value in enumerate(mired):
        xy = tuple(float(v) for v in xy_from_cct_duv(1e6 / value, 0.0032))
        cast = casts.measure(Frame.from_array(encoded_scene(xy, k).astype(np.float32), referred="display"))
        header = replace(cast.header, file=f"{k}.jpg", body="N1", taken_at=f"2031-05-04T18:00:{2 * k:02}")
        shoot.append(replace(cast, header=header))
        given.append(xy)
    plan = casts.plan(shoot)
    assert all("balanced one by one" in c.reason for c in plan)
    assert np.corrcoef([c.from_xy[0] for c in plan], [xy[0] for xy in given])[0, 1] > 0.7

    def mean_error(lights):
        pairs = zip(lights, given, strict=True)
        return np.mean([angle_deg(linear_from_xy(one), linear_from_xy(xy)) for one, xy in pairs])

    together = np.mean(given, axis=0)
    assert mean_error([c.from_xy for c in plan]) < mean_error([together] * len(plan))
