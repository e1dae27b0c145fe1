"""The choice of a randomisation window, against a plain loop over windows."""

import numpy as np
import pytest

from estimation.errors import CannotEstimate
from estimation.permutation import permutation_p
from estimation.window import choose_window


def test_without_covariates_it_is_the_smallest_with_ten_a_side() -> None:
    rng = np.random.default_rng(1)
    x = rng.uniform(-1.0, 1.0, 400)
    window = choose_window(position=x, above=x >= 0)
    distances = np.sort(np.abs(x))
    for half in distances:
        inside = np.abs(x) <= half
        if min((inside & (x >= 0)).sum(), (inside & (x < 0)).sum()) >= 10:
            break
    assert window.chosen_by == "count"
    assert window.high == pytest.approx(half)
    assert window.low == -window.high


def test_it_stops_before_the_first_window_in_which_a_covariate_differs() -> None:
    rng = np.random.default_rng(3)
    x = rng.uniform(-1.0, 1.0, 3000)
    flat = rng.normal(size=3000)
    # Differs between the sides only away from the line.
    sloped = 4.0 * np.sign(x) * np.maximum(np.abs(x) - 0.2, 0.0) + rng.normal(size=3000)
    window = choose_window(
        position=x, above=x >= 0, covariates=np.column_stack((flat, sloped)), names=("flat", "sloped")
    )
    assert window.chosen_by == "covariates"
    failing = window.steps[-1]
    assert failing.smallest_p is not None
    assert failing.smallest_p < 0.15
    assert all(step.smallest_p is not None and step.smallest_p >= 0.15 for step in window.steps[:-1])
    assert window.high == window.steps[-2].half
    # Each step's p-value is near that of drawn assignments on the same rows.
    for step in window.steps[:: max(1, len(window.steps) // 5)]:
        inside = np.abs(x) <= step.half
        drawn = min(
            permutation_p(column[inside], x[inside] >= 0, draws=4000, seed=7)[0] for column in (flat, sloped)
        )
        assert step.smallest_p == pytest.approx(drawn, abs=0.05)


def test_ties_enter_together() -> None:
    x = np.repeat(np.arange(-10, 10) + 0.5, 7)
    window = choose_window(position=x, above=x >= 0)
    assert window.high == 1.5
    assert (window.below, window.above) == (14, 14)


def test_missing_values_of_a_covariate_sit_out_its_comparison_only() -> None:
    rng = np.random.default_rng(5)
    x = rng.uniform(-1.0, 1.0, 600)
    gap = np.where(rng.uniform(size=600) < 0.3, np.nan, rng.normal(size=600))
    whole = choose_window(position=x, above=x >= 0, covariates=gap[:, None], names=("gap",))
    assert whole.smallest_p is not None
    assert whole.below + whole.above == int((np.abs(x) <= whole.high).sum())


def test_a_window_that_fails_at_once_is_refused_with_its_reason() -> None:
    rng = np.random.default_rng(2)
    x = rng.uniform(-1.0, 1.0, 500)
    jumps = 3.0 * (x >= 0) + rng.normal(size=500)
    with pytest.raises(CannotEstimate) as problem:
        choose_window(position=x, above=x >= 0, covariates=jumps[:, None], names=("rooms",))
    assert "rooms already differs between the sides (p = 0.0" in problem.value.sentence


def test_too_few_rows_are_refused() -> None:
    x = np.array([-0.1, 0.2, 0.3])
    with pytest.raises(CannotEstimate) as problem:
        choose_window(position=x, above=x >= 0)
    assert problem.value.sentence == "No window holds 10 rows on each side of the line."
