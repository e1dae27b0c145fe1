"""Small random samples, drawn to be awkward, against the slow twins; and the views of a line against them (hypothesis)."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from twins import intervals, variance
from twins.local_polynomial import KERNEL, effect_weights, one_side_weights

from estimation.choices import Choices
from estimation.errors import CannotEstimate
from estimation.inference import breakdown_curvature
from estimation.line import Line
from estimation.line_fit import Bandwidths
from estimation.sample import build_sample
from estimation.take_up import honest_anderson_rubin


def draw(seed: int, rows: int, spread: str, heavy: bool):
    """Whole-number scores, so that the twin's ties are exact: spread out, lumpy, crowded at the line, or one side thin."""
    rng = np.random.default_rng(seed)
    if spread == "even":
        ticks = rng.permutation(np.arange(-2 * rows, 2 * rows))[:rows]
    elif spread == "lumpy":
        ticks = rng.integers(-9, 10, rows)
    elif spread == "crowded":
        ticks = np.round(rng.standard_cauchy(rows) * 6).astype(int).clip(-400, 400)
    else:
        ticks = np.where(rng.random(rows) < 0.2, rng.integers(0, 40, rows), -rng.integers(1, 40, rows))
    weight = np.exp(rng.normal(0, 4, rows)) if heavy else None
    y = rng.normal(0, 1, rows) + 0.01 * ticks
    return ticks, y, ticks >= 0, weight


def distinct_inside(ticks, side, width, kernel):
    d = np.abs(ticks[side])
    return len(set(d[d <= width if kernel == "uniform" else d < width].tolist()))


@given(
    seed=st.integers(0, 10_000),
    rows=st.integers(20, 70),
    spread=st.sampled_from(["even", "lumpy", "crowded", "thin"]),
    heavy=st.booleans(),
    kernel=st.sampled_from(sorted(KERNEL)),
    order=st.integers(0, 3),
    share=st.floats(0.1, 1.3),
    pilot_share=st.floats(0.5, 2.0),
    step=st.sampled_from([1.0, 0.1, 1e-6, 1e4]),
)
@settings(max_examples=150)
def test_any_sample(seed, rows, spread, heavy, kernel, order, share, pilot_share, step):
    ticks, y, above, weight = draw(seed, rows, spread, heavy)
    # A width between two ticks: no row stands on its edge, where rounding would decide.
    reach = float(np.max(np.abs(ticks)))
    h = (math.floor(share * reach) + 0.5) * step
    b = (math.floor(pilot_share * share * reach) + 0.5) * step
    x = ticks * step
    needs = [
        distinct_inside(ticks, side, width / step, kernel) - least
        for side in (above, ~above)
        for width, least in ((h, order + 2), (b, order + 3))
    ]

    def read():
        sample = build_sample(position=x, outcome=y, above=above, treated="above", weight=weight)
        widths = Bandwidths(below=h, above=h, pilot_below=b, pilot_above=b, rule="chosen")
        return Line.prepare(sample, Choices(kernel=kernel, order=order, curvature=1.0)).reading(widths)

    if min(needs) < 0:
        with pytest.raises(CannotEstimate):
            read()
        return
    reading = read()
    plain = effect_weights(x, above, h, order, kernel, weight)
    robust = intervals.robust_weights(x, above, h, b, order, kernel, weight)
    residual = variance.both_neighbour_residuals(ticks, y, above)
    # Digits that the sum itself loses: its terms against its value.
    for weights, found in ((plain, reading.estimate), (robust, reading.robust.estimate)):
        terms = float(np.sum(np.abs(weights * y)))
        assert found == pytest.approx(float(weights @ y), rel=1e-9, abs=1e-10 * terms)
    errors = [math.sqrt(variance.from_residuals(w, residual)) for w in (plain, robust)]
    assert [reading.std_error, reading.robust.std_error] == pytest.approx(errors, rel=1e-8)


@pytest.mark.parametrize("kernel", sorted(KERNEL))
@pytest.mark.parametrize("order", [1, 2])
def test_curves_and_bins(kernel, order):
    ticks, y, above, weight = draw(3, 70, "lumpy", False)
    x = ticks * 0.1
    line = Line.prepare(
        build_sample(position=x, outcome=y, above=above, treated="above", weight=weight),
        Choices(kernel=kernel, order=order),
    )
    curve = line.curve(Bandwidths.common(0.75), points=7)
    bins = line.bins(0.8, 4)
    for part, heaps, side in ((curve.below, bins.below, ~above), (curve.above, bins.above, above)):
        residual = variance.neighbour_residuals(ticks[side], y[side])
        for spot, fit, low, high in zip(part.x, part.fit, part.low, part.high):
            w = sum(
                one_side_weights(x[side], 0.75, order, kernel, None, j) * spot**j for j in range(order + 1)
            )
            error = math.sqrt(variance.from_residuals(w, residual))
            assert fit == pytest.approx(float(w @ y[side]), rel=1e-9, abs=1e-11)
            assert (high - low) / 2 == pytest.approx(1.959963984540054 * error, rel=1e-8)
        for centre, mean, count in zip(heaps.centre, heaps.mean, heaps.count):
            # Bins of 0.2: two ticks each, the line's own tick with the first; the reach itself with the last.
            d = np.abs(ticks[side])
            first = round((abs(centre) - 0.1) * 10)
            inside = (d >= first) & ((d < first + 2) | (d == 8) & (first == 6))
            assert count == inside.sum()
            assert mean == pytest.approx(y[side][inside].mean(), rel=1e-12)


@pytest.mark.parametrize("estimate", [-0.9, 0.4, 2.5])
@pytest.mark.parametrize("unit_bias", [0.01, 0.3])
def test_breakdown_curvature_is_where_the_twins_interval_reaches_zero(estimate, unit_bias):
    error = 0.15
    found = breakdown_curvature(estimate, error, unit_bias=unit_bias, level=0.95)
    reach = intervals.critical_value(found * unit_bias / error) * error
    assert reach == pytest.approx(abs(estimate), rel=1e-8)


@pytest.mark.parametrize("jump_t", [0.6, 0.3, 0.12, 0.02, -0.4])
@pytest.mark.parametrize("unit_bias", [0.0, 0.02, 0.08])
def test_honest_set_row_by_row(jump_t, unit_bias):
    """Membership of many ratios by the twin's critical value, against the product's pieces."""
    jump = np.array([0.5, jump_t])
    covariance = np.array([[0.01, 0.0015], [0.0015, 0.004]])
    bend = (1.5, 0.8)
    pieces = honest_anderson_rubin(jump, covariance, unit_bias=unit_bias, curvature=bend, level=0.95)
    for ratio in np.tan(np.linspace(-1.56, 1.56, 301)):
        error = math.sqrt(covariance[0, 0] + ratio**2 * covariance[1, 1] - 2 * ratio * covariance[0, 1])
        bias = unit_bias * (bend[0] + abs(ratio) * bend[1])
        gap = abs(jump[0] - ratio * jump[1]) - intervals.critical_value(bias / error) * error
        if abs(gap) > 1e-9 * error:
            assert any(low <= ratio <= high for low, high in pieces) == (gap < 0)
