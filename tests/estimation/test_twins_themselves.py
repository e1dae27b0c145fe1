"""The twins against second sources: general-purpose libraries, identities, direct maximisation."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
import statsmodels.api as sm
from linearmodels.iv import IV2SLS
from scipy import stats
from twins import bandwidth as bandwidth_twin
from twins import covariates, intervals, randomisation, take_up, variance
from twins.local_polynomial import effect_weights, kernel_weights, one_side_weights

KERNELS = ("triangular", "uniform", "epanechnikov")


def draw(seed=1, n=120):
    rng = np.random.default_rng(seed)
    x = np.round(rng.normal(0.1, 1, n), 2)
    y = 1 + 2 * x + 0.7 * x**2 + 1.5 * (x >= 0) + rng.normal(0, 0.5 + 0.3 * np.abs(x), n)
    return rng, x, y, x >= 0, rng.uniform(0.5, 3, n)


@pytest.mark.parametrize("kernel", KERNELS)
@pytest.mark.parametrize("order", range(4))
def test_weights_reproduce_polynomials(kernel, order):
    _, x, _, above, weight = draw()
    for derivative in range(order + 1):
        weights = one_side_weights(x[above], 1.1, order, kernel, weight[above], derivative)
        for power in range(order + 1):
            moment = np.sum(weights * x[above].astype(np.longdouble) ** power)
            assert abs(moment - (power == derivative)) < 1e-14


@pytest.mark.parametrize("kernel", KERNELS)
@pytest.mark.parametrize("order", range(4))
def test_fits_and_their_errors_are_those_of_weighted_least_squares(kernel, order):
    _, x, y, above, weight = draw()
    k = kernel_weights(x[above], 1.2, kernel, weight[above]).astype(float)
    inside = k > 0
    design = np.vander(x[above][inside], order + 1, increasing=True)
    fit = sm.WLS(y[above][inside], design, weights=k[inside])
    weights = one_side_weights(x[above], 1.2, order, kernel, weight[above])
    np.testing.assert_allclose(float(weights @ y[above]), fit.fit().params[0], rtol=1e-11)
    for kind in ("hc0", "hc1", "hc2", "hc3"):
        residual = variance.hc_residuals(x[above], y[above], 1.2, order, kernel, weight[above], kind)
        ours = math.sqrt(variance.from_residuals(weights, residual))
        np.testing.assert_allclose(ours, fit.fit(cov_type=kind.upper()).bse[0], rtol=1e-10)


def test_clustered_error_is_that_of_one_stacked_regression():
    rng, x, y, above, _ = draw(2, 300)
    cluster = rng.integers(0, 25, len(x))
    k = kernel_weights(x, 1.2).astype(float)
    inside = k > 0
    design = np.column_stack([np.ones_like(x), x, above, above * x])[inside]
    groups = len(set(cluster[inside].tolist()))
    fit = sm.WLS(y[inside], design, weights=k[inside]).fit(
        cov_type="cluster", cov_kwds={"groups": cluster[inside], "use_correction": False}
    )
    weights = effect_weights(x, above, 1.2, 1)
    residual = variance.both_hc_residuals(x, y, above, 1.2, 1)
    ours, count = variance.clustered(weights, residual, cluster)
    assert count == groups
    np.testing.assert_allclose(math.sqrt(ours), fit.bse[2] * math.sqrt(groups / (groups - 1)), rtol=1e-10)


def test_spatial_error_without_reach_is_hc0_and_of_blocks_is_clustered():
    _, x, y, above, _ = draw(3)
    weights = effect_weights(x, above, 1.2, 1)
    residual = variance.both_hc_residuals(x, y, above, 1.2, 1)
    east = np.arange(len(x), dtype=float)
    alone = variance.spatial(weights, residual, east, 0 * east, 0.5)
    np.testing.assert_allclose(float(alone), float(variance.from_residuals(weights, residual)), rtol=1e-12)
    block = np.arange(len(x)) // 6
    together = variance.spatial(weights, residual, 10.0 * block, 0 * east, 0.5)
    clustered, count = variance.clustered(weights, residual, block)
    np.testing.assert_allclose(float(together), float(clustered) * (count - 1) / count, rtol=1e-10)


def test_neighbours_by_hand():
    # Three neighbours of the row at 0 are 1, 2 and the two rows tied at 3; hence J = 4.
    residual = variance.neighbour_residuals(np.array([0.0, 1, 2, 3, 3]), np.array([10.0, 1, 2, 3, 6]))
    np.testing.assert_allclose(float(residual[0] ** 2), 4 / 5 * (10 - 3) ** 2, rtol=1e-15)


def test_bandwidth_formula_minimises_its_own_error():
    """The closed form of one step against a fine search of V·(c/h)^(1+2ν) + (B² + 3R)·(h/c)^(2a)."""
    for ahead, power, derivative in ((2, 2, 0), (1, 3, 2), (3, 3, 0), (1, 2, 1)):
        v, b, r, c = 0.03, 0.4, 0.01, 1.7
        found = bandwidth_twin.optimum(
            np.longdouble(v), np.longdouble(b), np.longdouble(r), c, ahead, power, derivative
        )
        h = np.linspace(0.2, 5, 2_000_001)
        error = v * (c / h) ** (1 + 2 * derivative) + (b**2 + 3 * r) * (h / c) ** (2 * ahead)
        assert abs(found - h[np.argmin(error)]) < 1e-5


def test_worst_bias_three_ways():
    _, x, _, above, _ = draw(4, 60)
    weights = effect_weights(x, above, 0.9, 1, "triangular")
    closed = float(intervals.worst_bias_local_linear(x, above, weights, 3.0))
    integral = float(intervals.worst_bias_integral(x, above, weights, 3.0))
    # Local linear: the closed form is the integral, since W keeps one sign; x² attains it.
    np.testing.assert_allclose(integral, closed, rtol=1e-4)
    for order in (1, 2):
        weights = intervals.robust_weights(x, above, 0.9, 0.9, 1) if order == 2 else weights
        integral = float(intervals.worst_bias_integral(x, above, weights, 3.0))
        direct = intervals.worst_bias_linear_programme(x, above, weights, 3.0, cells=4000)
        assert direct <= integral * (1 + 1e-4)
        np.testing.assert_allclose(direct, integral, rtol=2e-3)


@pytest.mark.parametrize("ratio", [0.0, 0.05, 0.3, 1.0, 2.5, 8.0])
@pytest.mark.parametrize("level", [0.9, 0.95, 0.99])
def test_critical_value_squared_is_a_non_central_chi_square_quantile(ratio, level):
    ours = intervals.critical_value(ratio, level)
    reference = stats.chi2.ppf(level, 1) if ratio == 0 else stats.ncx2.ppf(level, 1, ratio**2)
    np.testing.assert_allclose(ours, math.sqrt(reference), rtol=1e-8)


def test_robust_weights_with_equal_widths_are_the_next_order():
    _, x, _, above, weight = draw(5)
    for order in (0, 1, 2):
        ours = intervals.robust_weights(x, above, 1.1, 1.1, order, "epanechnikov", weight)
        reference = effect_weights(x, above, 1.1, order + 1, "epanechnikov", weight)
        np.testing.assert_allclose(ours.astype(float), reference.astype(float), atol=1e-13)


def test_ratio_and_its_error_are_those_of_two_stage_least_squares():
    rng, x, y, above, _ = draw(6, 300)
    t = (rng.random(300) < 0.2 + 0.6 * above).astype(float)
    k = kernel_weights(x, 1.2).astype(float)
    inside = k > 0
    design = np.column_stack([np.ones_like(x), x, above * x])[inside]
    fit = IV2SLS(y[inside], design, t[inside], above[inside].astype(float), weights=k[inside]).fit(
        cov_type="robust"
    )
    weights = effect_weights(x, above, 1.2, 1)
    e_y, e_t = (variance.both_hc_residuals(x, v, above, 1.2, 1) for v in (y, t))
    jump_y, jump_t = float(weights @ y), float(weights @ t)
    v_yy, v_tt = (float(variance.from_residuals(weights, e)) for e in (e_y, e_t))
    v_yt = float(variance.from_residuals(weights, e_y, e_t))
    ratio = jump_y / jump_t
    np.testing.assert_allclose(ratio, fit.params.iloc[-1], rtol=1e-9)
    np.testing.assert_allclose(
        take_up.delta_error(ratio, jump_t, v_yy, v_tt, v_yt), fit.std_errors.iloc[-1], rtol=1e-9
    )


def test_anderson_rubin_set_by_its_quadratic():
    v_yy, v_tt, v_yt, z = 0.01, 0.005, 0.001, 1.96
    for jump_y, jump_t, shape in ((0.4, 0.5, 1), (0.4, 0.12, 2), (0.1, 0.01, 1)):
        found = take_up.anderson_rubin(jump_y, jump_t, v_yy, v_tt, v_yt, z)
        assert len(found) == shape
        quadratic = [jump_t**2 - z**2 * v_tt, -2 * (jump_y * jump_t - z**2 * v_yt), jump_y**2 - z**2 * v_yy]
        ends = sorted(e for part in found for e in part if math.isfinite(e))
        real = sorted(r.real for r in np.roots(quadratic) if abs(r.imag) < 1e-12)
        np.testing.assert_allclose(ends, real, rtol=1e-10)


def test_common_coefficients_by_residuals_of_residuals():
    rng, x, y, above, _ = draw(7, 200)
    z = np.column_stack([rng.normal(size=200) + x, rng.integers(0, 2, 200)]).astype(float)
    jump, gamma = covariates.stacked(x, y, z, above, 1.2, 1)
    k = kernel_weights(x, 1.2).astype(float)
    inside = k > 0
    design = np.column_stack([np.ones_like(x), x, above, above * x])[inside]

    def rest(column):
        return column[inside] - sm.WLS(column[inside], design, weights=k[inside]).fit().fittedvalues

    tilde = np.column_stack([rest(z[:, 0]), rest(z[:, 1])])
    expected = np.linalg.solve(
        (tilde * k[inside][:, None]).T @ tilde, (tilde * k[inside][:, None]).T @ rest(y)
    )
    np.testing.assert_allclose(gamma.astype(float), expected, rtol=1e-9)
    weights = effect_weights(x, above, 1.2, 1).astype(float)
    np.testing.assert_allclose(float(jump), weights @ (y - z @ expected), rtol=1e-10)


def test_enumeration_is_that_of_a_general_permutation_test():
    rng = np.random.default_rng(8)
    y, treated = rng.integers(0, 6, 9).astype(float), np.array([1, 0, 0, 1, 1, 0, 0, 1, 0], dtype=bool)
    found = float(randomisation.p_value(y, treated))
    reference = stats.permutation_test(
        (y[treated], y[~treated]),
        lambda a, b, axis: np.abs(a.mean(axis=axis) - b.mean(axis=axis)),
        n_resamples=np.inf,
        alternative="greater",
        vectorized=True,
    )
    np.testing.assert_allclose(found, reference.pvalue, rtol=1e-12)


def test_hypergeometric_is_the_enumeration_of_a_binary_outcome():
    y = np.array([1, 0, 0, 1, 1, 0, 0, 0, 1], dtype=float)
    treated = np.array([1, 0, 0, 1, 1, 0, 0, 1, 0], dtype=bool)
    exact = randomisation.hypergeometric_p_value(4, 9, 4, int(y[treated].sum()))
    assert exact == randomisation.p_value(y, treated)
    assert isinstance(exact, Fraction)
