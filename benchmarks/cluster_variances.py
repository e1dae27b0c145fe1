"""Which clustered variance holds its level: four of them on the same draws, at a fixed bandwidth.

Run: python benchmarks/cluster_variances.py [--draws 1000] [--seed 5]

Outcomes share a cluster effect (ICC 0.2, 4,000 rows). Clusters lie across the line, or each keeps to one side in a
stretch of the score of its own. The estimate is local linear, triangular, bandwidth 0.5, on a straight line, so that
no bias blurs the comparison; intervals are estimate ± t(G − 1)·error with G the clusters inside the bandwidth.

- neighbours: Σ_g (Σ l e)²·G/(G − 1) with nearest-neighbour residuals, whoever the neighbours are;
- other clusters: the same with the three nearest rows of other clusters;
- sandwich: the same with the fit's residuals;
- jackknife: (G − 1)/G·Σ_g (τ without g − τ)².

Columns: coverage at 95 %, and the mean error over the true spread of the estimate.
"""

from __future__ import annotations

import argparse

import numpy as np

from estimation.cluster_ladder import ClusterLadder
from estimation.errors import CannotEstimate
from estimation.inference import quantile
from estimation.line_fit import Bandwidths
from estimation.local_polynomial import fit_rows, fit_side
from estimation.sample import Sample, build_sample
from estimation.variance import clustered_spread, neighbour_residuals

WIDTH = 0.5
EFFECT = 0.3


def draw(rng: np.random.Generator, clusters: int, across: bool, rows: int = 4000) -> Sample:
    """One data set of a straight line with a jump."""
    code = rng.integers(clusters, size=rows)
    if across:
        x = rng.uniform(-1.0, 1.0, rows)
    else:
        centre = rng.uniform(-1.0, 1.0, clusters)
        x = centre[code] + rng.uniform(-0.02, 0.02, rows)
        x = np.where(centre[code] >= 0.0, np.abs(x), -np.abs(x))
    shared = rng.normal(0.0, np.sqrt(0.2), clusters)[code]
    y = 0.5 * x + EFFECT * (x >= 0.0) + shared + rng.normal(0.0, np.sqrt(0.8), rows)
    return build_sample(
        position=x, outcome=y, above=x >= 0.0, treated="above", cluster=code, score_magnitude=1.0
    )


def other_cluster_residuals(distance: np.ndarray, y: np.ndarray, code: np.ndarray) -> np.ndarray:
    """Like nearest-neighbour residuals with J = 3, from rows of other clusters only."""
    away = np.abs(distance[:, None] - distance)
    away[code[:, None] == code] = np.inf
    nearest = np.argpartition(away, 3, axis=1)[:, :3]
    return np.sqrt(3.0 / 4.0) * (y - y[nearest].mean(axis=1))


def from_residuals(sample: Sample, kind: str) -> tuple[float, int]:
    """Clustered variance of the jump from one kind of fixed residuals, and the clusters inside."""
    scores, codes = [], []
    for (_, side), sign in zip(sample.sides, (-1.0, 1.0)):
        assert side.cluster is not None
        fit = fit_side(side, bandwidth=WIDTH, kernel="triangular", order=1)
        inside = fit.weights.shape[1]
        near = slice(0, min(inside + 400, len(side)))
        if kind == "neighbours":
            e = neighbour_residuals(side.distance[near], side.values[near], resolution=sample.resolution)[
                :, 0
            ]
        else:
            e = other_cluster_residuals(side.distance[near], side.outcome[near], side.cluster[near])
        scores.append(sign * fit.weights[0] * e[:inside])
        codes.append(side.cluster[:inside])
    spread = clustered_spread(np.concatenate(scores)[:, None], np.concatenate(codes))
    assert spread.clusters is not None
    return float(spread.covariance[0, 0]), spread.clusters


def main(draws: int, seed: int) -> None:
    """Print the table."""
    names = ("neighbours", "other clusters", "sandwich", "jackknife")
    print("| clusters | " + " | ".join(names) + " |")
    print("|:---|" + "---:|" * len(names))
    for across in (True, False):
        for clusters in (20, 40, 100):
            errors: dict[str, list[float]] = {name: [] for name in names}
            hits: dict[str, list[bool]] = {name: [] for name in names}
            estimates: list[float] = []
            for i in range(draws):
                sample = draw(np.random.default_rng([seed, clusters, across, i]), clusters, across)
                widths = Bandwidths.common(WIDTH)
                try:
                    fit = fit_rows(sample, widths, kernel="triangular", order=1, variance="hc0")
                except CannotEstimate:
                    continue  # no cluster of one side inside the bandwidth
                ladder = ClusterLadder.build(sample, kernel="triangular", order=1)
                jackknife = ladder.spread(widths, order=1, variance="neighbour")
                estimates.append(float(fit.jump[0]))
                found = {
                    "sandwich": (float(fit.covariance[0, 0]), fit.clusters or 0),
                    "jackknife": (float(jackknife.covariance[0, 0]), jackknife.clusters),
                } | {name: from_residuals(sample, name) for name in names[:2]}
                for name, (variance, count) in found.items():
                    error = float(np.sqrt(variance))
                    errors[name].append(error)
                    hits[name].append(
                        abs(estimates[-1] - EFFECT) <= quantile(0.95, max(count - 1.0, 1.0)) * error
                    )
            spread = float(np.std(estimates))
            cells = [f"{100 * np.mean(hits[n]):.1f} %, {np.mean(errors[n]) / spread:.2f}" for n in names]
            place = "across the line" if across else "each on one side"
            print(f"| {clusters}, {place} | " + " | ".join(cells) + " |", flush=True)


if __name__ == "__main__":
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--draws", type=int, default=1000)
    parser.add_argument("--seed", type=int, default=5)
    options = parser.parse_args()
    main(options.draws, options.seed)
