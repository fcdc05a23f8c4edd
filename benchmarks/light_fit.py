"""Fit the constants of the light measurement on photographs whose light was measured with a chart.

    light_fit.py DATA.npz densities      print grader/cast/_natural_tables.py's mixtures
    light_fit.py DATA.npz weights        fit the weights of the evidence, cross-validated by blocks and by camera
    light_fit.py DATA.npz doubt          fit the doubt for both kinds of frame, and print it in tenths

DATA.npz: pixels (N, H, W, 3) linear Rec.2020 (0 = no data), light (N, 3) in the same space, sensor (N,),
sensor_from_rec2020 (K, 3, 3).  Errors are recovery angles in sensor RGB.  Nothing is written.
"""

from __future__ import annotations

import argparse
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.optimize import minimize

from grader.cast import _natural_tables, doubt, natural, plane, vote
from grader.cast.cells import cells_from_proxy
from grader.cast.natural import mixture_density
from grader.cast.proxy import build_proxy
from grader.colour.white import D65_XY, linear_from_xy, xy_from_cct_duv
from grader.model import Frame

GAUSSIANS = 8
STARTS = (
    (0, 0, 0.012),
    (0, 0.02, 0.03),
    (0, 0.05, 0.04),
    (-0.05, 0.11, 0.03),
    (0.05, 0.06, 0.03),
    (-0.01, -0.06, 0.04),
    (0, 0, 0.1),
    (-0.02, 0.05, 0.02),
)
"""Where the mixtures start: nested around neutral, sun, foliage, skin and brick, shade, anything. (a, b, spread)"""
LEAST_VARIANCE = 1e-5
BLOCKS = 6
HONESTY = 0.15
"""Weight of the log-likelihood beside the mean error: keeps the posterior's width honest."""
CAST_MIRED, CAST_DUV, CASTS = 25.0, 0.004, (0.0, 1.0, 2.0)
"""Casts given to neutral photographs: none, small and large, in these spreads."""


@dataclass(frozen=True, eq=False)
class Data:
    """Photographs as cells, with the true lights and the sensors to judge them by."""

    cells: list
    light: np.ndarray
    sensor: np.ndarray
    to_sensor: np.ndarray

    def errors(self, lights, keep=slice(None)):
        t = self.to_sensor[self.sensor[keep]]
        found = np.maximum(np.einsum("nij,nj->ni", t, lights), 1e-9)
        return vote.angle_deg(found, np.einsum("nij,nj->ni", t, self.light[keep]))


def load(path, cast=None):
    """Return the photographs as they are, or balanced by their own light and given another (N, 3)."""
    z = np.load(path)
    light, sensor, to_sensor = z["light"].astype(float), z["sensor"], z["sensor_from_rec2020"].astype(float)
    cells = []
    for i, pixels in enumerate(z["pixels"].astype(np.float32)):
        if cast is not None:
            t = to_sensor[sensor[i]]
            gain = (t @ cast[i]) / (t @ light[i])
            empty = np.abs(pixels).sum(axis=-1) == 0
            balanced = ((pixels @ t.T) * gain / gain[1]) @ np.linalg.inv(t).T
            pixels[...] = np.where(empty[..., None], 0, balanced)
        frame = Frame.from_array(pixels, space="Rec.2020", linear=True, referred="scene")
        cells.append(cells_from_proxy(build_proxy(frame)))
    return Data(cells, light if cast is None else cast, sensor, to_sensor)


def random_casts(count, spread, seed=1):
    """Return lights around D65 (154 mired, Duv 0.0032), ``spread`` times the small cast."""
    rng = np.random.default_rng(seed)
    mired = 153.8 + spread * CAST_MIRED * rng.standard_normal(count)
    duv = 0.0032 + spread * CAST_DUV * rng.standard_normal(count)
    xy = xy_from_cct_duv(1e6 / np.clip(mired, 80, 400), duv) if spread else np.tile(D65_XY, (count, 1))
    return linear_from_xy(xy)


def fit_mixture(histogram, places):
    """Return rows (share, mean a, mean b, variances) by expectation-maximisation on a histogram."""
    starts = np.array(STARTS)
    mean, spread = starts[:, :2].copy(), starts[:, 2]
    covariance = np.eye(2) * (spread**2)[:, None, None]
    share = np.full(GAUSSIANS, 1 / GAUSSIANS)
    for _ in range(300):
        rows = mixture_rows(share, mean, covariance)
        part = np.stack([mixture_density(places, row[None]) for row in rows])
        part *= histogram / np.maximum(part.sum(axis=0), 1e-300)
        share = part.sum(axis=1)
        mean = part @ places / share[:, None]
        off = places[None] - mean[:, None]
        covariance = np.einsum("kn,kni,knj->kij", part / share[:, None], off, off) + LEAST_VARIANCE * np.eye(
            2
        )
    return rows[np.argsort(-rows[:, 0])]


def mixture_rows(share, mean, covariance):
    return np.column_stack([share, mean, covariance[:, 0, 0], covariance[:, 0, 1], covariance[:, 1, 1]])


def fit_densities(data, keep):
    """Return the mixtures of surface and of edge colours, the light taken out of each frame."""
    truth = plane.ab_from_linear(data.light)
    colours = {
        "SURFACE": lambda c: (c.ab[c.ok], np.ones(c.ok.sum())),
        "EDGE": vote.edge_votes,
    }
    found = {}
    for name, votes in colours.items():
        histograms = [
            vote.splat(places - truth[i], weights)
            for i, (places, weights) in ((i, votes(data.cells[i])) for i in keep)
        ]
        found[name] = fit_mixture(np.mean(histograms, axis=0).ravel(), plane.grid_places())
    return found


def print_densities(data):
    for name, mixture in fit_densities(data, range(len(data.cells))).items():
        print(f"{name}: Final[tuple[Row, ...]] = (")
        for row in mixture:
            print("    ({:.4f}, {:.4f}, {:.4f}, {:.6f}, {:.6f}, {:.6f}),".format(*row))
        print(")")


def evidence_with(data, mixtures):
    """Return the evidence of every frame, with other densities than the shipped ones where given."""
    for name, mixture in mixtures.items():
        setattr(_natural_tables, name, mixture)
    natural._spectrum.cache_clear()  # noqa: SLF001 - no part of the shipped tool changes its densities
    return np.stack([vote.evidence(c) for c in data.cells])


def fit_weights(features, prior, data, keep):
    """Return the evidence weights and the prior's power that give the least mean error of the mean light."""
    f, lights = features[keep], vote.candidate_lights()
    t = data.to_sensor[data.sensor[keep]]
    truth = np.einsum("nij,nj->ni", t, data.light[keep])
    truth /= np.linalg.norm(truth, axis=1, keepdims=True)
    places = plane.ab_from_linear(data.light[keep])
    nearest = ((places[:, None] - vote.candidates()[None]) ** 2).sum(axis=-1).argmin(axis=1)
    rows = np.arange(len(nearest))

    def loss(w):
        score = np.tensordot(f, w[:-1], (1, 0)) + w[-1] * prior
        p = vote.weights_from_log(score)
        found = np.einsum("nij,nj->ni", t, p @ lights)
        length = np.linalg.norm(found, axis=1, keepdims=True)
        cosine = np.clip((found / length * truth).sum(axis=1), -1, 1 - 1e-9)
        angle = np.degrees(np.arccos(cosine))
        smooth = np.sqrt(angle**2 + 0.25**2)
        slope = -np.degrees(1) / np.sqrt(1 - cosine**2) * angle / smooth
        toward = slope[:, None] * (truth - cosine[:, None] * found / length) / length
        g = np.einsum("nij,ni->nj", t, toward) @ lights.T
        g = p * (g - (p * g).sum(axis=1, keepdims=True)) + HONESTY * p
        g[rows, nearest] -= HONESTY
        value = smooth.mean() - HONESTY * np.log(p[rows, nearest] + 1e-30).mean()
        gradient = [*np.einsum("nc,njc->j", g, f), (g @ prior).sum()]
        return value, np.array(gradient) / len(rows)

    start = np.array([0.3, 2.0, 2.0, 1.5])
    return minimize(
        loss, start, jac=True, method="L-BFGS-B", bounds=[(0, None)] * len(start), options={"maxiter": 40}
    ).x


def apply_weights(features, prior, w):
    return (
        vote.weights_from_log(np.tensordot(features, w[:-1], (1, 0)) + w[-1] * prior)
        @ vote.candidate_lights()
    )


def print_weights(data):
    """Fit to all with the shipped densities; then densities and weights anew without the frames they are tried on."""
    features = evidence_with(data, {})
    prior = vote.log_prior("scene") / vote.PRIOR_POWER
    everything = np.arange(len(features))
    w = fit_weights(features, prior, data, everything)
    print("fitted to all  ", w.round(3), told(data.errors(apply_weights(features, prior, w))))
    blocks = everything * BLOCKS // len(everything)
    lights = np.empty((len(features), 3))
    for block in range(BLOCKS):
        lights[blocks == block], _ = fitted_without(data, prior, blocks == block)
    print("blocks left out", told(data.errors(lights)))
    for sensor in np.unique(data.sensor):
        mine = data.sensor == sensor
        found, w = fitted_without(data, prior, mine)
        print(f"camera {sensor} left out", w.round(2), told(data.errors(found, mine)))


def fitted_without(data, prior, left_out):
    """Return the lights of the frames left out, and the weights, all fitted on the others."""
    others = np.flatnonzero(~left_out)
    features = evidence_with(data, fit_densities(data, others))
    w = fit_weights(features, prior, data, others)
    return apply_weights(features[left_out], prior, w), w


def told(errors):
    return f"mean {errors.mean():.3f}  median {np.median(errors):.3f}  above 5: {(errors > 5).mean():.3f}"


def fit_doubt(signs, errors):
    """Return the coefficients of the log-linear doubt by maximum likelihood of exponential errors.

    With that likelihood the predictions match the mean error overall and along every sign.
    """
    x = np.column_stack([np.ones(len(signs)), signs])

    def loss(k):
        expected = np.exp(np.clip(x @ k, -20, 20))
        ridge = 1e-3 * (k[1:] ** 2).sum()
        value = (x @ k + errors / expected).mean() + ridge
        gradient = x.T @ (1 - errors / expected) / len(errors)
        gradient[1:] += 2e-3 * k[1:]
        return value, gradient

    return minimize(
        loss, np.r_[np.log(errors.mean()), np.zeros(x.shape[1] - 1)], jac=True, method="L-BFGS-B"
    ).x


def print_doubt(path):
    for referred in ("scene", "display"):
        sets = [load(path)] if referred == "scene" else [load(path, random_casts(568, s)) for s in CASTS]
        signs, errors, acted_on = [], [], []
        for data in sets:
            votes = [vote.cast_vote(c, referred) for c in data.cells]
            signs.append([doubt.signs(v, c) for v, c in zip(votes, data.cells, strict=True)])
            lights = np.array([v.weights @ vote.candidate_lights() for v in votes])
            doubts = [doubt.doubt_deg(v, c, referred) for v, c in zip(votes, data.cells, strict=True)]
            believed = [doubt.believed_light(*pair, referred) for pair in zip(lights, doubts, strict=True)]
            errors.append(data.errors(lights))
            acted_on.append(data.errors(np.array(believed)))
            print(referred, "mean light:", told(errors[-1]), "  light acted on:", told(acted_on[-1]))
        blocks = np.concatenate([np.arange(len(e)) * BLOCKS // len(e) for e in errors])
        signs, errors = np.concatenate(signs), np.concatenate(errors)
        expected = np.empty(len(errors))
        for block in range(BLOCKS):
            k = fit_doubt(signs[blocks != block], errors[blocks != block])
            expected[blocks == block] = np.exp(k[0] + signs[blocks == block] @ k[1:])
        print(referred, "coefficients", fit_doubt(signs, errors).round(3))
        print_tenths(expected, np.concatenate(acted_on))


def print_tenths(expected, errors):
    order = np.argsort(expected)
    print("tenth  doubt   mean error   90 % below")
    for i, part in enumerate(np.array_split(order, 10)):
        print(
            f"{i + 1:5}  {expected[part].mean():5.2f}  {errors[part].mean():8.2f}  {np.percentile(errors[part], 90):10.2f}"
        )
    bad = errors > 5
    print(
        f"caught {bad[order[-len(order) // 5 :]].sum() / max(bad.sum(), 1):.2f}  within twice the doubt {(errors < 2 * expected).mean():.2f}"
    )


def main():
    args = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    args.add_argument("data", type=Path)
    args.add_argument("what", choices=("densities", "weights", "doubt"))
    args = args.parse_args()
    if args.what == "doubt":
        print_doubt(args.data)
    else:
        {"densities": print_densities, "weights": print_weights}[args.what](load(args.data))


if __name__ == "__main__":
    main()
