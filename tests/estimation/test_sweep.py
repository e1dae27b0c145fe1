"""A sweep is the readings at its widths, whatever the study holds; and choices change without summing rows again."""

from dataclasses import replace

import numpy as np
import pytest

from estimation.choices import Choices
from estimation.errors import CannotEstimate
from estimation.line import Line, leading_interval
from estimation.line_fit import Bandwidths
from estimation.local_polynomial import fit_rows
from estimation.sample import build_sample

GRID = np.array([1e-7, 0.004, 0.25, 0.9, 0.5, 1.3])


def prepared(choices: Choices, *, fuzzy: bool = False, clustered: bool = False, seed: int = 0) -> Line:
    rng = np.random.default_rng(seed)
    n = 1500
    x = rng.uniform(-1, 1, n)
    code = rng.integers(0, 35, n)
    took = (rng.uniform(size=n) < 0.2 + 0.5 * (x >= 0)).astype(float)
    covariates = rng.normal(size=(n, 2))
    y = 4 + np.sin(2 * x) + took + covariates @ [0.5, -0.3] + rng.normal(0, 0.4, 35)[code]
    data = {
        "position": x,
        "outcome": y + rng.normal(size=n),
        "above": x >= 0,
        "treated": "above",
        "weight": rng.uniform(0.5, 2, n),
        "take_up": took if fuzzy else None,
        "cluster": code if clustered else None,
        "score_magnitude": 1.0,
    }
    return Line.prepare(
        build_sample(**data),  # type: ignore[arg-type]
        choices,
        build_sample(**data, covariates=covariates),  # type: ignore[arg-type]
    )


@pytest.mark.parametrize("fuzzy", [False, True])
@pytest.mark.parametrize("clustered", [False, True])
@pytest.mark.parametrize("adjust", [False, True])
@pytest.mark.parametrize("interval", ["robust", "plain", "bias-aware"])
@pytest.mark.parametrize("variance", ["neighbour", "hc1", "hc3"])
def test_a_sweep_is_the_readings_at_its_widths(
    fuzzy: bool, clustered: bool, adjust: bool, interval: str, variance: str
) -> None:
    choices = Choices(interval=interval, adjust=adjust, variance=variance, curvature=3.0, pilot=0.7)
    line = prepared(choices, fuzzy=fuzzy, clustered=clustered)
    assert line.on_ladder == (variance != "hc3" or clustered)
    sweep = line.sweep(GRID)
    for i, width in enumerate(GRID):
        found = (sweep.estimate[i], sweep.std_error[i], sweep.low[i], sweep.high[i])
        try:
            reading = line.reading(line.at(float(width)))
        except CannotEstimate:
            assert np.isnan(found).all()
            continue
        expected = (reading.estimate, reading.std_error, *leading_interval(reading, interval))
        assert found == pytest.approx(expected, rel=1e-9, nan_ok=True)
        assert (sweep.count_below[i], sweep.count_above[i]) == (reading.count_below, reading.count_above)
    assert np.isnan(sweep.estimate[0])
    assert np.isfinite(sweep.estimate[2:]).all()


@pytest.mark.parametrize("order", [0, 2, 3])
@pytest.mark.parametrize("interval", ["robust", "bias-aware"])
def test_a_sweep_of_other_orders_is_the_readings(order: int, interval: str) -> None:
    line = prepared(Choices(interval=interval, order=order, variance="hc0", curvature=3.0), seed=1)
    sweep = line.sweep(GRID[2:4])
    for i in range(2):
        reading = line.reading(line.at(float(GRID[2 + i])))
        low, high = leading_interval(reading, interval)
        assert (sweep.low[i], sweep.high[i]) == pytest.approx((low, high), rel=1e-9, nan_ok=True)


def test_two_scores_too_few_are_not_an_answer() -> None:
    # Two distinct scores a side carry a line exactly, with nothing left to judge it by: the reading refuses it.
    x = np.repeat([-4.0, -3.0, -2.0, -1.0, 1.0, 2.0, 3.0, 4.0], 30)
    y = x + np.random.default_rng(0).normal(size=len(x))
    sample = build_sample(position=x, outcome=y, above=x >= 0, treated="above", score_magnitude=4.0)
    line = Line.prepare(sample, Choices(kernel="uniform", curvature=1.0, interval="plain", pilot=4.0))
    sweep = line.sweep(np.array([2.5, 4.0]))
    with pytest.raises(CannotEstimate):
        line.reading(line.at(2.5))
    assert np.isnan(sweep.estimate[0]) and np.isfinite(sweep.estimate[1])


@pytest.mark.parametrize("clustered", [False, True])
def test_a_sweep_that_is_stopped_keeps_what_it_has(clustered: bool) -> None:
    line = prepared(Choices(), clustered=clustered)
    asked: list[int] = []

    def stop() -> bool:
        asked.append(1)
        return len(asked) > 1

    grid = np.linspace(0.3, 1.0, 25)
    sweep = line.sweep(grid, stop)
    known = np.isfinite(sweep.estimate)
    # Without clusters all widths are one question; with them some are answered between two looks.
    assert known.all() if not clustered else known[:10].all() and not known[10:].any()
    assert not np.isfinite(line.sweep(grid, lambda: True).estimate).any()


def test_a_cap_holds_in_sweeps_too() -> None:
    line = replace(prepared(Choices(variance="hc1"), fuzzy=True), cap=(0.4, 0.6))
    sweep = line.sweep(np.array([0.5, 0.9]))
    for i, width in enumerate((0.5, 0.9)):
        reading = line.reading(line.at(width))
        assert sweep.low[i] == pytest.approx(reading.robust.low, rel=1e-10)
    assert sweep.count_below[0] == sweep.count_below[1] < sweep.count_above[0] < sweep.count_above[1]


def test_a_change_to_fitted_residuals_sums_them_once() -> None:
    line = prepared(Choices())
    assert not line.squared
    changed = line.choosing(Choices(variance="hc1"))
    assert changed.on_ladder and set(changed.squared) == {False, True}
    kept = changed.squared[False]
    again = line.choosing(Choices(variance="hc0"))
    assert again.squared[False] is kept
    widths = Bandwidths.common(0.6)
    for which in (changed, again):
        rows = fit_rows(line.sample, widths, kernel="triangular", order=1, variance=which.choices.variance)
        reading = which.reading(widths)
        assert reading.std_error == pytest.approx(np.sqrt(rows.covariance[0, 0]), rel=1e-10)
        error = np.sqrt(rows.robust_covariance[0, 0])
        assert reading.robust.high - reading.robust.low == pytest.approx(
            2 * 1.959963984540054 * error, rel=1e-9
        )


@pytest.mark.parametrize("variance", ["hc0", "hc1", "hc2"])
def test_covariates_jump_with_the_same_error_from_sums_and_from_rows(variance: str) -> None:
    line = prepared(Choices(variance=variance), fuzzy=True)
    widths = Bandwidths.common(0.6, 0.8)
    jump, error = line.covariate_jumps(widths)
    assert line.with_covariates is not None
    rows = fit_rows(line.with_covariates, widths, kernel="triangular", order=1, variance=variance)
    assert jump == pytest.approx(rows.robust_jump[2:], rel=1e-9)
    assert error == pytest.approx(np.sqrt(np.diagonal(rows.robust_covariance)[2:]), rel=1e-9)
