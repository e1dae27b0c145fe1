"""Variances against general libraries and by hand, through the sums that answer at any width."""

import numpy as np
import pytest
import statsmodels.api as sm

from estimation.ladder import Ladder
from estimation.line_fit import Bandwidths
from estimation.sample import build_sample
from estimation.squares import Trend
from estimation.variance import clustered_spread, neighbour_residuals


@pytest.mark.parametrize("kind", ["hc0", "hc1"])
@pytest.mark.parametrize("order", [0, 1, 2, 3])
@pytest.mark.parametrize("kernel", ["triangular", "uniform", "epanechnikov"])
def test_sums_give_the_variance_of_weighted_regressions(kind: str, order: int, kernel: str) -> None:
    rng = np.random.default_rng(order)
    n, h = 1200, 0.7
    x = rng.uniform(-1, 1, n)
    y = 2 + np.exp(x) + 0.4 * (x >= 0) + rng.normal(0, 0.2 + 0.3 * np.abs(x))
    w = rng.uniform(0.5, 2, n)
    sample = build_sample(position=x, outcome=y, above=x >= 0, treated="above", weight=w, score_magnitude=1.0)
    ladder = Ladder.build(sample, kernel=kernel, order=order).with_squares(sample)
    fit = ladder.fit(Bandwidths.common(h), variance=kind)
    u = np.abs(x) / h
    k = {"triangular": 1 - u, "uniform": np.ones(n), "epanechnikov": 1 - u**2}[kernel] * w
    # With the pilot at the bandwidth the corrected fit is the weighted regression of one order more.
    for found, degree in ((fit.covariance, order), (fit.robust_covariance, order + 1)):
        variance = 0.0
        for side in (x < 0, x >= 0):
            inside = side & (u < 1)
            design = np.vander(x[inside], degree + 1, increasing=True)
            slow = sm.WLS(y[inside], design, weights=k[inside]).fit(cov_type=kind.upper())
            variance += slow.cov_params()[0, 0]
        assert found[0, 0] == pytest.approx(variance, rel=1e-9)


def test_a_trend_is_taken_off_and_put_back_exactly() -> None:
    rng = np.random.default_rng(3)
    x = np.sort(rng.uniform(0, 5, 40))
    sample = build_sample(
        position=np.concatenate((-x, x)),
        outcome=np.tile(1.5 - 2 * x + 0.25 * x**2, 2),
        above=np.arange(80) >= 40,
        treated="above",
    )
    trend = Trend.of(sample.above, np.array([1.0]), 2)
    assert trend.at(sample.above.distance)[:, 0] == pytest.approx(sample.above.outcome - 1.0, abs=1e-12)


def test_one_cluster_a_row_is_the_independent_spread_with_its_factor() -> None:
    rng = np.random.default_rng(4)
    scores = rng.normal(size=(50, 2))
    spread = clustered_spread(scores, rng.permutation(50))
    assert spread.clusters == 50
    assert spread.covariance == pytest.approx(scores.T @ scores * 50 / 49, rel=1e-13)


def test_neighbours_of_the_same_cluster_cancel_what_the_cluster_shares() -> None:
    # Why nearest-neighbour residuals do not serve a clustered study: with clusters that keep to a stretch of the
    # score, a shock of any size to a cluster leaves the residuals of its inner rows as they were.
    rng = np.random.default_rng(5)
    distance = np.sort(rng.uniform(0, 1, 200))
    cluster = np.repeat(np.arange(10), 20)
    noise = rng.normal(size=200)
    shocks = rng.normal(0, 100, 10)[cluster]
    inner = np.tile(np.arange(20), 10)
    inner_rows = (inner >= 3) & (inner < 17)
    calm, shaken = (
        neighbour_residuals(distance, (noise + shock)[:, None], resolution=1e-12)[:, 0]
        for shock in (0.0, shocks)
    )
    assert shaken[inner_rows] == pytest.approx(calm[inner_rows], abs=1e-11)
