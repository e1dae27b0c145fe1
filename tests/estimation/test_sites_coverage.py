"""How often intervals over several sites hold the truth: all sites at once, and the pooled effect. Simulated; slow."""

import numpy as np
import pytest

from estimation.choices import Choices
from estimation.inference import interval
from estimation.line import Line
from estimation.line_fit import Bandwidths
from estimation.pooling import SiteEstimates, heterogeneity, random_effects, weighted_mean
from estimation.sample import build_sample
from estimation.shared_clusters import joint_covariance, shares_of_jump
from estimation.simultaneous import simultaneous_band
from estimation.site_ladder import SiteLadder

pytestmark = pytest.mark.slow

RUNS = 1500
SITES, ROWS = 8, 400
WIDTH = 0.6


def curve(x: np.ndarray) -> np.ndarray:
    return np.sin(1.5 * x) + 0.5 * x**2


def draw(rng: np.random.Generator, effects: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    site = np.repeat(np.arange(SITES), ROWS)
    x = 2.0 * rng.beta(2, 2, SITES * ROWS) - 1.0
    y = curve(x) + effects[site] * (x >= 0) + rng.normal(0, 0.5, len(x))
    return site, x, y


def estimates(site: np.ndarray, x: np.ndarray, y: np.ndarray) -> SiteEstimates:
    ladder = SiteLadder.build(
        position=x,
        values=y[:, None],
        above=x >= 0,
        site=site,
        sites=SITES,
        weight=None,
        treated="above",
        kernel="triangular",
        order=1,
        has_take_up=False,
        score_magnitude=1.0,
    )
    fits = ladder.fits(np.full(SITES, WIDTH), np.full(SITES, WIDTH))
    return SiteEstimates(estimate=fits.robust_jump[:, 0], std_error=np.sqrt(fits.robust_covariance[:, 0, 0]))


def within(share: float, level: float, runs: int, slack: float = 0.0) -> bool:
    """Whether a simulated share is a level's, give or take three of the simulation's own errors and a slack below."""
    error = 3.0 * np.sqrt(level * (1.0 - level) / runs)
    return level - slack - error <= share <= level + 0.02 + error


@pytest.mark.parametrize("different", [False, True])
def test_bands_hold_at_all_sites_at_once_and_means_hold_theirs(different: bool) -> None:
    rng = np.random.default_rng(17)
    effects = np.linspace(-0.5, 1.5, SITES) if different else np.full(SITES, 0.5)
    all_at_once, one_by_one, equal, pooled = 0, 0, 0, 0
    for run in range(RUNS):
        site, x, y = draw(rng, effects)
        sites = estimates(site, x, y)
        band = simultaneous_band(sites, level=0.95, seed=run)
        all_at_once += bool(np.all((band.low <= effects) & (effects <= band.high)))
        alone = [interval(e, s, level=0.95) for e, s in zip(sites.estimate, sites.std_error)]
        one_by_one += sum(one.low <= tau <= one.high for one, tau in zip(alone, effects))
        mean = weighted_mean(sites, np.ones(SITES), level=0.95).found
        equal += mean.low <= effects.mean() <= mean.high
        # The pooled effect: every site has the same density at its line, so that its truth is their plain mean.
        line = Line.prepare(
            build_sample(position=x, outcome=y, above=x >= 0, treated="above"), Choices(curvature=1.0)
        )
        robust = line.reading(Bandwidths.common(WIDTH)).robust
        pooled += robust.low <= effects.mean() <= robust.high
    print(
        f"different={different}: at once {all_at_once / RUNS:.3f}, alone {one_by_one / RUNS / SITES:.3f}, "
        f"equal {equal / RUNS:.3f}, pooled {pooled / RUNS:.3f}"
    )
    assert within(one_by_one / RUNS / SITES, 0.95, RUNS, 0.015)
    assert within(all_at_once / RUNS, 0.95, RUNS, 0.025)
    assert within(equal / RUNS, 0.95, RUNS, 0.015)
    assert within(pooled / RUNS, 0.95, RUNS, 0.015)


def test_joint_bands_and_means_hold_with_clusters_that_span_sites() -> None:
    rng = np.random.default_rng(23)
    runs, sites, clusters = 400, 5, 80
    band_holds, mean_holds, naive_holds = 0, 0, 0
    for run in range(runs):
        n = 300 * sites
        site, code = np.repeat(np.arange(sites), 300), rng.integers(0, clusters, n)
        x = rng.uniform(-1, 1, n)
        # A shock to the treated of a cluster, wherever they live: what sites share moves their effects together.
        shock = rng.normal(0, 1.0, clusters)[code]
        y = curve(x) + (x >= 0) * (0.5 + shock) + rng.normal(0, 0.5, n)
        found, shares = [], []
        for s in range(sites):
            own = site == s
            line = Line.prepare(
                build_sample(
                    position=x[own], outcome=y[own], above=x[own] >= 0, treated="above", cluster=code[own]
                ),
                Choices(curvature=1.0),
            )
            widths = Bandwidths.common(WIDTH)
            found.append(line.reading(widths).robust)
            changes = line.cluster_changes(widths)
            assert changes is not None
            shares.append(shares_of_jump(changes))
        covariance, count = joint_covariance(shares)
        y_hat, error = (np.array([getattr(one, name) for one in found]) for name in ("estimate", "std_error"))
        joint = SiteEstimates(
            estimate=y_hat, std_error=error, covariance=covariance, degrees=float(count - 1)
        )
        band = simultaneous_band(joint, level=0.95, seed=run, draws=4000, degrees=np.full(sites, count - 1.0))
        band_holds += bool(np.all((band.low <= 0.5) & (band.high >= 0.5)))
        mean = weighted_mean(joint, np.ones(sites), level=0.95).found
        mean_holds += mean.low <= 0.5 <= mean.high
        apart = weighted_mean(
            SiteEstimates(estimate=y_hat, std_error=error), np.ones(sites), level=0.95
        ).found
        naive_holds += apart.low <= 0.5 <= apart.high
    print(
        f"clusters: at once {band_holds / runs:.3f}, mean {mean_holds / runs:.3f}, mean as if independent "
        f"{naive_holds / runs:.3f}"
    )
    assert within(band_holds / runs, 0.95, runs, 0.02)
    assert within(mean_holds / runs, 0.95, runs, 0.02)
    assert naive_holds < mean_holds - 0.02 * runs  # what ignoring the shared clusters costs


def test_the_random_effects_mean_and_shrunken_effects_hold_over_draws_of_sites() -> None:
    rng = np.random.default_rng(29)
    runs, k, tau = 3000, 25, 0.6
    mean_holds, shrunken, alike = 0, 0, 0
    for _ in range(runs):
        error = rng.uniform(0.2, 0.8, k)
        truth = 1.0 + tau * rng.normal(size=k)
        sites = SiteEstimates(estimate=truth + error * rng.normal(size=k), std_error=error)
        found = random_effects(sites, heterogeneity(sites).tau2, level=0.95)
        mean_holds += found.mean.found.low <= 1.0 <= found.mean.found.high
        shrunken += int(np.sum((found.shrunken.low <= truth) & (truth <= found.shrunken.high)))
        same = SiteEstimates(estimate=1.0 + error * rng.normal(size=k), std_error=error)
        alike += heterogeneity(same).p_value < 0.05
    print(
        f"random effects: mean {mean_holds / runs:.3f}, shrunken {shrunken / runs / k:.3f}, Q {alike / runs:.3f}"
    )
    assert within(mean_holds / runs, 0.95, runs, 0.02)
    assert within(shrunken / runs / k, 0.95, runs, 0.02)
    assert abs(alike / runs - 0.05) < 0.015
