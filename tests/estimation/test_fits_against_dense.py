"""Local fits, residuals and variances against dense algebra written from the formulas, and general libraries."""

from itertools import pairwise

import numpy as np
import pytest
import statsmodels.api as sm

from estimation.errors import CannotEstimate
from estimation.inference import interval
from estimation.ladder import Ladder
from estimation.line_fit import Bandwidths
from estimation.local_polynomial import fit_rows, fit_side
from estimation.sample import Sample, build_sample
from estimation.variance import neighbour_residuals
from estimation.worst_bias import integral_bias, worst_bias

KERNELS = ("triangular", "uniform", "epanechnikov")


def kernel(u: np.ndarray, name: str) -> np.ndarray:
    value = {"triangular": 1 - u, "uniform": np.ones_like(u), "epanechnikov": 1 - u**2}[name]
    return np.where(u <= 1, np.maximum(value, 0), 0)


def draw(
    rows: int = 300,
    seed: int = 0,
    *,
    ties: bool = False,
    weighted: bool = False,
    offset: float = 0.0,
    unit: float = 1.0,
) -> tuple[Sample, np.ndarray, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    x = rng.normal(size=rows)
    if ties:
        x = np.round(x, 1)
    x = (offset + unit * x) - offset
    y = 3.0 + np.sin(x / unit) + 0.7 * (x >= 0) + rng.normal(0, 0.4, rows)
    w = rng.uniform(0.5, 2.0, rows) if weighted else np.ones(rows)
    sample = build_sample(
        position=x,
        outcome=y,
        above=x >= 0,
        treated="above",
        weight=w if weighted else None,
        score_magnitude=abs(offset) + 5 * unit,
    )
    return sample, x, y, w


@pytest.mark.parametrize("name", KERNELS)
@pytest.mark.parametrize("order", [0, 1, 2, 3])
def test_weights_have_their_identities(name: str, order: int) -> None:
    sample, *_ = draw(seed=order, weighted=True)
    side = sample.above
    fit = fit_side(side, bandwidth=1.3, kernel=name, order=order)
    d = side.distance[: fit.weights.shape[1]]
    for nu in range(order + 1):
        for j in range(order + 1):
            assert fit.weights[nu] @ d**j == pytest.approx(float(nu == j), abs=1e-9)


@pytest.mark.parametrize("name", KERNELS)
@pytest.mark.parametrize("order", [0, 1, 2, 3])
@pytest.mark.parametrize("kind", ["hc0", "hc1", "hc2", "hc3"])
def test_levels_and_hc_variances_are_those_of_weighted_regressions(name: str, order: int, kind: str) -> None:
    sample, x, y, w = draw(seed=10 + order, weighted=True)
    h = 1.2
    fit = fit_rows(sample, Bandwidths.common(h, 1.6), kernel=name, order=order, variance=kind)
    variance = 0.0
    levels = []
    for upper in (False, True):
        side = (x >= 0) == upper
        inside = side & (kernel(np.abs(x) / h, name) > 0)
        # The bias-corrected levels need the wider pilot; the plain ones are a weighted regression of this side.
        design = np.vander(x[inside], order + 1, increasing=True)
        weight = kernel(np.abs(x[inside]) / h, name) * w[inside]
        fitted = sm.WLS(y[inside], design, weights=weight).fit(cov_type=kind.upper())
        levels.append(fitted.params[0])
        variance += fitted.cov_params()[0, 0]
    assert fit.levels_below[0] == pytest.approx(levels[0], rel=1e-9)
    assert fit.levels_above[0] == pytest.approx(levels[1], rel=1e-9)
    assert fit.jump[0] == pytest.approx(levels[1] - levels[0], rel=1e-9)
    assert fit.covariance[0, 0] == pytest.approx(variance, rel=1e-9)


@pytest.mark.parametrize("order", [0, 1, 2])
@pytest.mark.parametrize("name", KERNELS)
def test_with_the_pilot_at_the_bandwidth_the_corrected_fit_is_one_order_up(name: str, order: int) -> None:
    sample, *_ = draw(seed=3, weighted=True)
    h = Bandwidths.common(1.4)
    for kind in ("neighbour", "hc0", "hc3"):
        low = fit_rows(sample, h, kernel=name, order=order, variance=kind)
        high = fit_rows(sample, h, kernel=name, order=order + 1, variance=kind)
        assert low.robust_jump[0] == pytest.approx(high.jump[0], rel=1e-9)
        assert low.robust_covariance[0, 0] == pytest.approx(high.covariance[0, 0], rel=1e-8)


def test_the_corrected_weights_are_the_formula() -> None:
    sample, x, y, w = draw(seed=4, weighted=True)
    h, b = 1.1, 1.7
    robust = []
    for upper in (False, True):
        side = (x >= 0) == upper
        xs, ys, ws = x[side], y[side], w[side]
        k_h, k_b = kernel(np.abs(xs) / h, "triangular") * ws, kernel(np.abs(xs) / b, "triangular") * ws
        r1, r2 = np.vander(xs, 2, increasing=True), np.vander(xs, 3, increasing=True)
        l_h = np.linalg.solve(r1.T @ (k_h[:, None] * r1), (r1 * k_h[:, None]).T)[0]
        v_b = np.linalg.solve(r2.T @ (k_b[:, None] * r2), (r2 * k_b[:, None]).T)[2]
        robust.append((l_h - (l_h @ xs**2) * v_b) @ ys)
    fit = fit_rows(sample, Bandwidths.common(h, b), kernel="triangular", order=1, variance="neighbour")
    assert fit.robust_jump[0] == pytest.approx(robust[1] - robust[0], rel=1e-10)


def slow_neighbour_residuals(distance: np.ndarray, y: np.ndarray, tie: float, nearest: int = 3) -> np.ndarray:
    """Methods 2, row by row: the J nearest on the side, every tie at the J-th distance kept."""
    result = np.empty(len(y))
    for i in range(len(y)):
        away = np.abs(distance - distance[i])
        away[i] = np.inf
        reach = np.sort(away)[min(nearest, len(y) - 1) - 1]
        chosen = away <= reach + tie
        j = chosen.sum()
        result[i] = np.sqrt(j / (j + 1)) * (y[i] - y[chosen].mean())
    return result


@pytest.mark.parametrize("shape", ["smooth", "ties", "heavy", "grid", "two points", "offset"])
def test_neighbour_residuals_are_the_slow_loop(shape: str) -> None:
    rng = np.random.default_rng(6)
    n = 200
    d = {
        "smooth": rng.uniform(0, 1, n),
        "ties": np.round(rng.uniform(0, 1, n), 2),
        "heavy": rng.integers(0, 6, n).astype(float),
        "grid": np.arange(n).astype(float),
        "two points": np.repeat([0.5, 2.0], n // 2),
        "offset": 1e6 + np.arange(n) * 1e-3 - 1e6,
    }[shape]
    d = np.sort(d)
    tie = 1e-9
    y = 1e5 + rng.normal(size=n)
    found = neighbour_residuals(d, y[:, None], resolution=tie)[:, 0]
    assert found == pytest.approx(slow_neighbour_residuals(d, y, tie), rel=1e-8, abs=1e-9)


@pytest.mark.parametrize("rows", [2, 3, 4])
def test_a_side_of_few_rows_uses_the_rows_it_has(rows: int) -> None:
    d, y = np.arange(rows).astype(float), np.random.default_rng(1).normal(size=rows)
    found = neighbour_residuals(d, y[:, None], resolution=1e-12)[:, 0]
    assert found == pytest.approx(slow_neighbour_residuals(d, y, 1e-12), rel=1e-12)


def test_clustered_errors_are_the_sum_over_clusters() -> None:
    rng = np.random.default_rng(2)
    _, x, y, _ = draw(seed=9)
    code = rng.integers(0, 25, len(x))
    sample = build_sample(
        position=x, outcome=y, above=x >= 0, treated="above", cluster=code, score_magnitude=5.0
    )
    h = 1.2
    fit = fit_rows(sample, Bandwidths.common(h), kernel="triangular", order=1, variance="hc0")
    inside = np.abs(x) < h
    above = (x >= 0).astype(float)
    design = np.column_stack((np.ones_like(x), above, x, above * x))[inside]
    weight = 1 - np.abs(x[inside]) / h
    whole = sm.WLS(y[inside], design, weights=weight).fit(
        cov_type="cluster", cov_kwds={"groups": code[inside], "use_correction": False}
    )
    groups = len(np.unique(code[inside]))
    expected = whole.cov_params()[1, 1] * groups / (groups - 1)
    assert fit.clusters == groups
    assert fit.covariance[0, 0] == pytest.approx(expected, rel=1e-9)
    t = interval(1.0, 0.5, level=0.95, degrees=groups - 1)
    assert t.high - t.low == pytest.approx(2 * 0.5 * 2.064, rel=0.02)


@pytest.mark.parametrize("order", [1, 2, 3])
def test_the_worst_bias_is_a_linear_programmes(order: int) -> None:
    # Maximise Σ l (f(x_i)) over |f″| ≤ 1 with f(0) = f′(0) = 0: f(x) = ∫ (x − t)₊ g(t) dt with |g| ≤ 1, so that on a
    # grid of t the worst g is the sign of W and the value Σ |W(t)| dt: maximised here over g directly.
    sample, *_ = draw(rows=120, seed=7)
    side = sample.above
    fit = fit_side(side, bandwidth=1.5, kernel="triangular", order=order)
    d, weights = side.distance[: fit.weights.shape[1]], fit.weights[0]
    t = (np.arange(60_000) + 0.5) / 60_000 * 1.5
    tail = np.maximum(d[:, None] - t[None, ::20], 0.0)
    coarse = np.abs(weights @ tail).sum() * (t[1] - t[0]) * 20
    assert worst_bias(d, weights, order=order) == pytest.approx(coarse, rel=2e-3)
    assert integral_bias(d, weights) == pytest.approx(worst_bias(d, weights, order=order), rel=1e-10)
    from scipy.optimize import linprog

    knots = np.linspace(0.0, 1.5, 151)
    reach = np.array(
        [weights @ (np.maximum(d - a, 0) ** 2 - np.maximum(d - b, 0) ** 2) / 2 for a, b in pairwise(knots)]
    )
    found = linprog(-reach, bounds=[(-1, 1)] * len(reach))
    assert -found.fun == pytest.approx(worst_bias(d, weights, order=order), rel=1e-2)


def test_too_few_distinct_scores_are_refused_in_words() -> None:
    x = np.array([-3.0, -2.0, -1.0, -0.5, 0.0, 0.0, 1.0, 1.0, 5.0])
    sample = build_sample(position=x, outcome=x, above=x >= 0, treated="above")
    expected = "Within 2 above the line there are 2 distinct scores; a fit of order 1 needs 3."
    widths = Bandwidths.common(2.0, 9.0)
    with pytest.raises(CannotEstimate) as direct:
        fit_rows(sample, widths, kernel="uniform", order=1, variance="neighbour")
    assert direct.value.sentence == expected
    with pytest.raises(CannotEstimate) as ladder:
        Ladder.build(sample, kernel="uniform", order=1).fit(widths)
    assert ladder.value.sentence == expected
