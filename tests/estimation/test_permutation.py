"""Assignments by lot against full enumeration and general-purpose tests."""

from itertools import combinations

import numpy as np
import pytest
from scipy import stats

from estimation.permutation import DRAWN_UP_TO, assignments, difference_in_means, permutation_p


def listed_p(values: np.ndarray, treated: np.ndarray) -> float:
    """Every assignment, one by one."""
    observed = abs(values[treated].mean() - values[~treated].mean())
    rows = np.arange(len(values))
    extreme = []
    for chosen in combinations(rows, int(treated.sum())):
        mask = np.isin(rows, chosen)
        extreme.append(abs(values[mask].mean() - values[~mask].mean()) >= observed - 1e-12)
    return float(np.mean(extreme))


@pytest.mark.parametrize(("rows", "treated"), [(7, 2), (10, 5), (11, 8)])
def test_a_small_set_is_exact(rows: int, treated: int) -> None:
    rng = np.random.default_rng(rows)
    values = rng.normal(size=rows)
    mask = np.zeros(rows, dtype=bool)
    mask[rng.choice(rows, treated, replace=False)] = True
    p, method = permutation_p(values, mask, draws=10, seed=1)
    assert method == "exact"
    assert p == pytest.approx(listed_p(values, mask), rel=1e-12)


def test_equal_groups_agree_with_the_general_purpose_test() -> None:
    # With equal groups the law is symmetric, so that doubling a tail and comparing |D| are the same test.
    rng = np.random.default_rng(5)
    values = rng.normal(size=12) + np.repeat([0.0, 0.8], 6)
    mask = np.repeat([False, True], 6)
    reference = stats.permutation_test(
        (values[mask], values[~mask]),
        lambda a, b, axis: a.mean(axis) - b.mean(axis),
        vectorized=True,
        n_resamples=np.inf,
    )
    assert permutation_p(values, mask, draws=10, seed=1)[0] == pytest.approx(reference.pvalue, rel=1e-12)


@pytest.mark.parametrize("ones", [3, 12, 30])
def test_a_binary_column_is_fishers_law(ones: int) -> None:
    rng = np.random.default_rng(ones)
    values = np.zeros(40)
    values[rng.choice(40, ones, replace=False)] = 1.0
    mask = np.zeros(40, dtype=bool)
    mask[:15] = True
    # |difference in shares| is monotone in |hits − their mean|: sum the hypergeometric law over it.
    law = stats.hypergeom(40, ones, 15)
    k = np.arange(0, 16)
    away = np.abs(k / 15 - (ones - k) / 25)
    observed = abs(values[mask].mean() - values[~mask].mean())
    expected = law.pmf(k)[away >= observed - 1e-12].sum()
    p, method = permutation_p(values, mask, draws=10, seed=1)
    assert method == "exact"
    assert p == pytest.approx(expected, rel=1e-9)


def test_draws_agree_with_the_exact_answer_within_their_error() -> None:
    rng = np.random.default_rng(2)
    values = rng.exponential(size=60)
    mask = np.arange(60) < 22
    drawn, method = permutation_p(values, mask, draws=20_000, seed=3)
    other, _ = permutation_p(values, mask, draws=20_000, seed=4)
    assert method == "drawn"
    reference = stats.permutation_test(
        (values[mask], values[~mask]),
        lambda a, b, axis: np.abs(a.mean(axis) - b.mean(axis)),
        vectorized=True,
        n_resamples=20_000,
        alternative="greater",
        rng=np.random.default_rng(8),
    ).pvalue
    error = np.sqrt(reference * (1 - reference) / 20_000)
    assert abs(drawn - reference) < 6 * error
    assert abs(drawn - other) < 6 * error


def test_the_normal_law_of_many_rows_has_the_moments_of_the_assignments() -> None:
    rng = np.random.default_rng(6)
    rows = DRAWN_UP_TO + 200
    values = rng.gamma(2.0, size=rows)
    mask = np.arange(rows) % 3 == 0
    p, method = permutation_p(values, mask, draws=10, seed=1)
    assert method == "normal"
    found = assignments((values - values.mean())[:, None], int(mask.sum()), draws=3000, seed=5)
    drawn = difference_in_means(found.sums[:, 0], 0.0, int(mask.sum()), rows)
    observed = values[mask].mean() - values[~mask].mean()
    z = abs(observed) / drawn.std()
    assert p == pytest.approx(2 * stats.norm.sf(z), rel=0.2)


def test_the_larger_group_is_drawn_through_the_smaller_one() -> None:
    values = np.random.default_rng(9).normal(size=(50, 2))
    found = assignments(values, 40, draws=400, seed=2)
    assert found.sums.shape == (400, 2)
    # Mean of a sum over 40 of 50 rows, and its spread, by sampling theory.
    expected = values.sum(axis=0) * 0.8
    spread = np.sqrt(40 * 10 / 50 * values.var(axis=0, ddof=1))
    assert np.all(np.abs(found.sums.mean(axis=0) - expected) < 5 * spread / np.sqrt(400))


def test_a_constant_column_never_speaks_against() -> None:
    assert permutation_p(np.ones(30), np.arange(30) < 12, draws=10, seed=0) == (1.0, "exact")
