"""Ratios of jumps and their sets against instrumental-variable fits and brute force."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from linearmodels.iv import IV2SLS

from estimation.inference import critical_values
from estimation.line_fit import Bandwidths
from estimation.local_polynomial import fit_rows
from estimation.reading import read_fit
from estimation.sample import build_sample
from estimation.take_up import anderson_rubin, honest_anderson_rubin, ratio_of_jumps


def draw(jump: float = 0.5, rows: int = 800, seed: int = 0) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    x = rng.uniform(-1, 1, rows)
    took = (rng.uniform(size=rows) < 0.2 + jump * (x >= 0)).astype(float)
    return x, np.sin(x) + took + rng.normal(0, 0.5, rows), took


@pytest.mark.parametrize("order", [1, 2])
@pytest.mark.parametrize("name", ["triangular", "uniform"])
def test_the_ratio_and_its_error_are_two_stage_least_squares(order: int, name: str) -> None:
    x, y, took = draw()
    h = 0.6
    sample = build_sample(
        position=x, outcome=y, above=x >= 0, treated="above", take_up=took, score_magnitude=1.0
    )
    fit = fit_rows(sample, Bandwidths.common(h), kernel=name, order=order, variance="hc0")
    reading = read_fit(fit, level=0.95, curvature=np.array([1.0, 1.0]), fuzzy=True)
    inside = np.abs(x) < h
    xs, above = x[inside], (x[inside] >= 0).astype(float)
    k = 1 - np.abs(xs) / h if name == "triangular" else np.ones(len(xs))
    terms = np.column_stack([xs**j for j in range(order + 1)] + [above * xs**j for j in range(1, order + 1)])
    result = IV2SLS(y[inside], terms, took[inside], above, weights=k).fit(cov_type="robust", debiased=False)
    assert reading.estimate == pytest.approx(float(result.params["endog"]), rel=1e-8)
    # The sandwich of the ratio is that of y − r·t, row by row: HC0 to the last digits.
    assert reading.std_error == pytest.approx(float(result.std_errors["endog"]), rel=1e-6)


def brute_set(jump: np.ndarray, covariance: np.ndarray, grid: np.ndarray, z: float) -> np.ndarray:
    gap = (jump[0] - grid * jump[1]) ** 2
    return gap <= z**2 * (covariance[0, 0] + grid**2 * covariance[1, 1] - 2 * grid * covariance[0, 1])


def holds(pieces: tuple[tuple[float, float], ...], grid: np.ndarray) -> np.ndarray:
    inside = np.zeros(len(grid), dtype=bool)
    for low, high in pieces:
        inside |= (grid >= low) & (grid <= high)
    return inside


@given(
    st.floats(-3, 3),
    st.floats(-1, 1),
    st.floats(0.05, 1.0),
    st.floats(0.02, 0.8),
    st.floats(-0.95, 0.95),
)
@settings(max_examples=200)
def test_the_anderson_rubin_set_is_what_brute_force_keeps(
    outcome: float, take_up: float, error_y: float, error_t: float, correlation: float
) -> None:
    jump = np.array([outcome, take_up])
    cross = correlation * error_y * error_t
    covariance = np.array([[error_y**2, cross], [cross, error_t**2]])
    pieces = anderson_rubin(jump, covariance, level=0.95)
    grid = np.concatenate((-np.geomspace(1e4, 1e-4, 4000), np.geomspace(1e-4, 1e4, 4000)))
    expected = brute_set(jump, covariance, grid, 1.959963984540054)
    found = holds(pieces, grid)
    # Points within rounding of an end may fall either way.
    ends = np.array([end for piece in pieces for end in piece if np.isfinite(end)])
    near = np.zeros(len(grid), dtype=bool)
    for end in ends:
        near |= np.abs(grid - end) <= 1e-6 * (1 + abs(end))
    assert np.array_equal(found[~near], expected[~near])


@pytest.mark.parametrize(
    ("jump", "covariance", "shape"),
    [
        ([1.0, 0.5], [[0.01, 0.0], [0.0, 0.01]], "interval"),
        ([1.0, 0.05], [[0.01, 0.0], [0.0, 0.01]], "rays"),
        ([0.05, 0.05], [[0.01, 0.0], [0.0, 0.01]], "everything"),
    ],
)
def test_the_three_shapes(jump: list[float], covariance: list[list[float]], shape: str) -> None:
    pieces = anderson_rubin(np.array(jump), np.array(covariance), level=0.95)
    kind = {
        1: "everything" if np.isinf(pieces[0][0]) and np.isinf(pieces[0][1]) else "interval",
        2: "rays",
    }[len(pieces)]
    assert kind == shape


@given(
    st.floats(-3, 3),
    st.floats(-1, 1),
    st.floats(0.05, 1.0),
    st.floats(0.02, 0.8),
    st.floats(-0.9, 0.9),
    st.floats(0.0, 2.0),
    st.floats(0.0, 2.0),
)
@settings(max_examples=60)
def test_the_honest_set_is_what_brute_force_keeps(
    outcome: float, take_up: float, error_y: float, error_t: float, correlation: float, m_y: float, m_t: float
) -> None:
    jump = np.array([outcome, take_up])
    cross = correlation * error_y * error_t
    covariance = np.array([[error_y**2, cross], [cross, error_t**2]])
    pieces = honest_anderson_rubin(jump, covariance, unit_bias=0.2, curvature=(m_y, m_t), level=0.95)
    grid = np.concatenate((-np.geomspace(1e3, 1e-3, 1500), np.geomspace(1e-3, 1e3, 1500)))
    error = np.sqrt(covariance[0, 0] + grid**2 * covariance[1, 1] - 2 * grid * covariance[0, 1])
    bias = (m_y + np.abs(grid) * m_t) * 0.2
    expected = np.abs(jump[0] - grid * jump[1]) <= critical_values(bias / error, 0.95) * error
    near = np.zeros(len(grid), dtype=bool)
    for piece in pieces:
        for end in piece:
            if np.isfinite(end):
                near |= np.abs(grid - end) <= 1e-5 * (1 + abs(end))
    assert np.array_equal(holds(pieces, grid)[~near], expected[~near])


def test_without_bends_the_honest_set_is_the_plain_one() -> None:
    jump, covariance = np.array([1.0, 0.4]), np.array([[0.04, 0.005], [0.005, 0.01]])
    plain = anderson_rubin(jump, covariance, level=0.95)
    honest = honest_anderson_rubin(jump, covariance, unit_bias=0.2, curvature=(0.0, 0.0), level=0.95)
    assert np.array(honest) == pytest.approx(np.array(plain), rel=1e-8)


def test_the_set_holds_the_ratio_and_shrinks_to_the_delta_interval_when_take_up_is_strong() -> None:
    x, y, took = draw(jump=0.7, rows=60_000, seed=4)
    sample = build_sample(
        position=x, outcome=y, above=x >= 0, treated="above", take_up=took, score_magnitude=1.0
    )
    fit = fit_rows(sample, Bandwidths.common(0.7), kernel="triangular", order=1, variance="neighbour")
    reading = read_fit(fit, level=0.95, curvature=np.array([1.0, 1.0]), fuzzy=True)
    assert reading.take_up is not None
    ((low, high),) = reading.take_up.anderson_rubin
    assert low < reading.robust.estimate < high
    assert (low, high) == pytest.approx((reading.robust.low, reading.robust.high), rel=0.01)
    assert not reading.take_up.weak


def test_no_jump_in_take_up_has_no_ratio() -> None:
    found = ratio_of_jumps(np.array([1.0, 0.0]), np.eye(2))
    assert np.isnan(found.estimate)
    assert np.isnan(found.std_error)
