"""Many sites together: against statsmodels' meta-analysis, dense algebra from the formulas, and simulation."""

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats
from statsmodels.stats.meta_analysis import combine_effects

from estimation.errors import CannotEstimate
from estimation.pooling import (
    SiteEstimates,
    heterogeneity,
    leave_one_out,
    random_effects,
    trend_in,
    weighted_mean,
)
from estimation.simultaneous import joint_test, simultaneous_band


def draw(k: int = 9, seed: int = 3, *, shared: float = 0.0, spread: float = 0.8) -> SiteEstimates:
    """K sites; `shared` > 0 gives them a joint covariance through common parts."""
    rng = np.random.default_rng(seed)
    error = rng.uniform(0.2, 0.9, k)
    covariance = None
    if shared:
        parts = np.column_stack((np.diag(error), shared * rng.normal(size=(k, 4))))
        covariance = parts @ parts.T
        error = np.sqrt(np.diagonal(covariance))
    y = 1.5 + spread * rng.normal(size=k) + error * rng.normal(size=k)
    return SiteEstimates(estimate=y, std_error=error, covariance=covariance)


@pytest.mark.parametrize(("k", "seed", "spread"), [(2, 1, 0.8), (9, 3, 0.8), (40, 5, 0.3), (12, 11, 0.0)])
def test_the_means_and_the_spread_are_statsmodels(k: int, seed: int, spread: float) -> None:
    sites = draw(k, seed, spread=spread)
    # DerSimonian & Laird (1986) is method "chi2" there.
    other = combine_effects(sites.estimate, sites.variance, method_re="chi2")
    found = heterogeneity(sites)
    assert found.q == pytest.approx(other.q, rel=1e-10)
    assert found.df == k - 1
    assert found.expected == pytest.approx(k - 1)
    assert found.tau2 == pytest.approx(max(other.tau2, 0.0), rel=1e-10, abs=1e-14)
    assert found.i2 == pytest.approx(max(other.i2, 0.0), rel=1e-10, abs=1e-14)
    assert found.p_value == pytest.approx(other.test_homogeneity().pvalue, rel=1e-10)
    fixed = weighted_mean(sites, 1 / sites.variance, level=0.95)
    assert fixed.found.estimate == pytest.approx(other.mean_effect_fe, rel=1e-12)
    assert fixed.found.std_error == pytest.approx(other.sd_eff_w_fe, rel=1e-12)
    assert fixed.weights == pytest.approx(other.weights_rel_fe, rel=1e-12)
    mixed = random_effects(sites, found.tau2, level=0.95).mean
    if other.tau2 < 0.0:  # not cut off at zero there: then the two means of ours are one
        assert mixed.found == fixed.found
        return
    assert mixed.found.estimate == pytest.approx(other.mean_effect_re, rel=1e-10)
    assert mixed.found.std_error == pytest.approx(other.sd_eff_w_re, rel=1e-10)
    low, high = other.conf_int(alpha=0.05, use_t=False)[1]
    assert (mixed.found.low, mixed.found.high) == pytest.approx((low, high), rel=1e-9)


def test_a_joint_covariance_enters_q_and_every_variance() -> None:
    sites = draw(shared=0.4)
    assert sites.covariance is not None
    weight = np.diag(1 / sites.variance)
    ones = np.ones((len(sites), 1))
    p = weight - weight @ ones @ np.linalg.inv(ones.T @ weight @ ones) @ ones.T @ weight
    product = p @ sites.covariance
    found = heterogeneity(sites)
    assert found.q == pytest.approx(sites.estimate @ p @ sites.estimate, rel=1e-10)
    assert found.expected == pytest.approx(np.trace(product), rel=1e-10)
    assert found.tau2 == pytest.approx(max(0, (found.q - np.trace(product)) / np.trace(p)), rel=1e-10)
    mean, variance = np.trace(product), 2 * np.trace(product @ product)
    # Satterthwaite: Q is a chi-square with 2·mean²/variance degrees, scaled to its mean.
    degrees = 2 * mean**2 / variance
    assert found.p_value == pytest.approx(stats.chi2.sf(found.q / mean * degrees, degrees), rel=1e-5)
    share = np.diag(weight) / np.trace(weight)
    fixed = weighted_mean(sites, 1 / sites.variance, level=0.9)
    assert fixed.found.std_error == pytest.approx(np.sqrt(share @ sites.covariance @ share), rel=1e-12)
    assert fixed.found.high == pytest.approx(
        share @ sites.estimate + stats.norm.ppf(0.95) * fixed.found.std_error, rel=1e-12
    )


def test_q_has_its_stated_law_when_sites_depend_on_each_other() -> None:
    sites = draw(7, shared=0.5, spread=0.0)
    assert sites.covariance is not None
    rng = np.random.default_rng(8)
    root = np.linalg.cholesky(sites.covariance)
    p_values = []
    for _ in range(2000):
        y = root @ rng.standard_normal(7)
        p_values.append(
            heterogeneity(
                SiteEstimates(estimate=y, std_error=sites.std_error, covariance=sites.covariance)
            ).p_value
        )
    for level in (0.05, 0.2, 0.5):
        assert np.mean(np.array(p_values) < level) == pytest.approx(level, abs=4 * np.sqrt(level / 2000))


@pytest.mark.parametrize("shared", [0.0, 0.4])
def test_shrunken_effects_and_their_errors_are_the_dense_algebra(shared: float) -> None:
    sites, tau2 = draw(shared=shared), 0.5
    k = len(sites)
    sigma = np.diag(sites.variance) if sites.covariance is None else sites.covariance
    share = 1 / (sites.variance + tau2)
    share /= share.sum()
    keep = np.diag(tau2 / (tau2 + sites.variance))
    combine = keep + (np.eye(k) - keep) @ np.outer(np.ones(k), share)
    left = np.eye(k) - combine
    mse = combine @ sigma @ combine.T + tau2 * left @ left.T
    found = random_effects(sites, tau2, level=0.95)
    assert found.shrunken.estimate == pytest.approx(combine @ sites.estimate, rel=1e-12)
    assert found.shrunken.std_error == pytest.approx(np.sqrt(np.diagonal(mse)), rel=1e-12)
    # Higgins, Thompson & Spiegelhalter (2009): t with k − 2 degrees.
    assert found.prediction is not None
    reach = stats.t.ppf(0.975, k - 2) * np.sqrt(tau2 + found.mean.found.std_error**2)
    assert found.prediction[1] - found.mean.found.estimate == pytest.approx(reach, rel=1e-12)


def test_without_spread_every_shrunken_effect_is_the_mean_and_with_much_its_own() -> None:
    sites = draw()
    alike = random_effects(sites, 0.0, level=0.95)
    assert alike.shrunken.estimate == pytest.approx(np.full(9, alike.mean.found.estimate))
    assert alike.shrunken.std_error == pytest.approx(np.full(9, alike.mean.found.std_error))
    apart = random_effects(sites, 1e9, level=0.95)
    assert apart.shrunken.estimate == pytest.approx(sites.estimate, rel=1e-6)
    assert apart.shrunken.std_error == pytest.approx(sites.std_error, rel=1e-6)


@pytest.mark.parametrize("shared", [0.0, 0.4])
def test_leaving_one_out_is_doing_without_it(shared: float) -> None:
    sites = draw(6, shared=shared)
    without = leave_one_out(sites, level=0.95)
    for i, found in enumerate(without):
        kept = np.array([j for j in range(6) if j != i])
        rest = SiteEstimates(
            estimate=sites.estimate[kept],
            std_error=sites.std_error[kept],
            covariance=None if sites.covariance is None else sites.covariance[kept][:, kept],
        )
        tau2 = heterogeneity(rest).tau2
        assert found.tau2 == pytest.approx(tau2, rel=1e-10)
        mixed = random_effects(rest, tau2, level=0.95).mean.found
        assert found.random.estimate == pytest.approx(mixed.estimate, rel=1e-12)
        assert found.random.high == pytest.approx(mixed.high, rel=1e-12)
        fixed = weighted_mean(rest, 1 / rest.variance, level=0.95).found
        assert found.fixed.low == pytest.approx(fixed.low, rel=1e-12)
        assert found.fixed.p_value == pytest.approx(fixed.p_value, rel=1e-9)


def test_the_trend_is_a_weighted_regression() -> None:
    rng = np.random.default_rng(2)
    cutoff = rng.uniform(30, 60, 14)
    error = rng.uniform(0.3, 0.8, 14)
    y = 0.1 * cutoff + 0.9 * rng.normal(size=14)
    sites = SiteEstimates(estimate=y, std_error=error)
    found = trend_in(cutoff, sites, level=0.95)
    assert found.tau2 > 0
    # Its moment equation: with weights 1/v, the residual Q is k − 2 plus τ² tr(P).
    design = sm.add_constant(cutoff)
    plain = sm.WLS(y, design, weights=1 / error**2).fit()
    q = float(np.sum(plain.resid**2 / error**2))
    w = np.diag(1 / error**2)
    p = w - w @ design @ np.linalg.inv(design.T @ w @ design) @ design.T @ w
    assert found.tau2 == pytest.approx((q - 12) / np.trace(p), rel=1e-8)
    other = sm.WLS(y, design, weights=1 / (error**2 + found.tau2)).fit(
        cov_type="fixed scale", cov_kwds={"scale": 1.0}
    )
    assert found.slope.estimate == pytest.approx(other.params[1], rel=1e-9)
    assert found.slope.std_error == pytest.approx(other.bse[1], rel=1e-9)
    at = np.array([1.0, found.centre])
    assert found.level.estimate == pytest.approx(at @ other.params, rel=1e-9)
    assert found.level.std_error == pytest.approx(np.sqrt(at @ other.cov_params() @ at), rel=1e-9)
    assert found.covariance[0, 1] == pytest.approx(0.0, abs=1e-12)


def test_the_trend_of_dependent_sites_has_the_sandwich() -> None:
    sites = draw(8, shared=0.5, spread=0.0)
    cutoff = np.arange(8.0)
    found = trend_in(cutoff, sites, level=0.95)
    design = np.column_stack((np.ones(8), cutoff - found.centre))
    w = np.diag(1 / (sites.variance + found.tau2))
    bread = np.linalg.inv(design.T @ w @ design)
    assert sites.covariance is not None
    meat = design.T @ w @ (sites.covariance + found.tau2 * np.eye(8)) @ w @ design
    assert found.covariance == pytest.approx(bread @ meat @ bread, rel=1e-9, abs=1e-12)


def test_independent_bands_are_sidaks_and_joint_ones_between_it_and_one_interval() -> None:
    sites = draw(5)
    band = simultaneous_band(sites, level=0.95, seed=1)
    c = stats.norm.ppf(0.5 + 0.95**0.2 / 2)
    assert band.low == pytest.approx(sites.estimate - c * sites.std_error, rel=1e-12)
    t = simultaneous_band(sites, level=0.95, seed=1, degrees=np.array([7.0, np.nan, 30, 9, 4]))
    assert t.high[0] - sites.estimate[0] == pytest.approx(
        stats.t.ppf(0.5 + 0.95**0.2 / 2, 7) * sites.std_error[0], rel=1e-10
    )
    assert t.high[1] == pytest.approx(band.high[1], rel=1e-12)
    # The same law told as a joint covariance gives Šidák back, within the simulation's own error.
    told = SiteEstimates(
        estimate=sites.estimate, std_error=sites.std_error, covariance=np.diag(sites.variance)
    )
    joint = simultaneous_band(told, level=0.95, seed=4, draws=100_000)
    assert joint.pointwise_level == pytest.approx(band.pointwise_level, abs=0.001)
    # Sites that move as one need no more than one interval.
    one = SiteEstimates(
        estimate=sites.estimate,
        std_error=sites.std_error,
        covariance=np.outer(sites.std_error, sites.std_error),
    )
    assert simultaneous_band(one, level=0.95, seed=4, draws=100_000).pointwise_level == pytest.approx(
        0.95, abs=0.003
    )
    # In between: the multivariate normal's own integral.
    mixed = draw(4, shared=0.5)
    assert mixed.covariance is not None
    correlation = mixed.covariance / np.outer(mixed.std_error, mixed.std_error)
    found = simultaneous_band(mixed, level=0.9, seed=9, draws=100_000)
    reach = stats.norm.ppf(0.5 + found.pointwise_level / 2)
    law = stats.multivariate_normal(cov=correlation, seed=1)
    inside = law.cdf(np.full(4, reach), lower_limit=np.full(4, -reach))
    assert inside == pytest.approx(0.9, abs=0.004)
    again = simultaneous_band(mixed, level=0.9, seed=9, draws=100_000)
    assert np.array_equal(found.low, again.low)


def test_the_joint_test_is_wald_and_with_clusters_hotelling() -> None:
    sites = draw(5, shared=0.5)
    assert sites.covariance is not None
    wald = sites.estimate @ np.linalg.inv(sites.covariance) @ sites.estimate
    found = joint_test(sites)
    assert found.statistic == pytest.approx(wald, rel=1e-10)
    assert found.p_value == pytest.approx(stats.chi2.sf(wald, 5), rel=1e-8)
    few = joint_test(
        SiteEstimates(
            estimate=sites.estimate, std_error=sites.std_error, covariance=sites.covariance, degrees=19.0
        )
    )
    assert few.p_value == pytest.approx(stats.f.sf(wald * 15 / (19 * 5), 5, 15), rel=1e-8)
    bare = joint_test(SiteEstimates(estimate=sites.estimate, std_error=sites.std_error))
    assert bare.statistic == pytest.approx(np.sum((sites.estimate / sites.std_error) ** 2))


def test_questions_that_need_more_sites_say_so() -> None:
    one = SiteEstimates(estimate=np.array([1.0]), std_error=np.array([0.5]))
    with pytest.raises(CannotEstimate) as problem:
        heterogeneity(one)
    assert (
        problem.value.sentence == "How far sites differ takes 2 sites with an estimate; here 1 site has one."
    )
    with pytest.raises(CannotEstimate):
        leave_one_out(draw(2), level=0.95)
    with pytest.raises(CannotEstimate) as problem:
        trend_in(np.full(5, 50.0), draw(5), level=0.95)
    assert "same cutoff" in problem.value.sentence
    two = SiteEstimates(estimate=np.array([1.0, 2.0]), std_error=np.array([0.5, 0.4]))
    assert random_effects(two, 0.1, level=0.95).prediction is None
