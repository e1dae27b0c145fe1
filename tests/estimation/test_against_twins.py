"""The product's numbers against the slow twins, on ordinary and on awkward samples."""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction
from functools import cache

import numpy as np
import pytest
from twins import bandwidth as bandwidth_twin
from twins import covariates as covariates_twin
from twins import intervals, randomisation, take_up, variance
from twins.local_polynomial import KERNEL, effect_weights, is_above, one_side_weights

from estimation.choices import Choices
from estimation.line import Line
from estimation.line_fit import Bandwidths
from estimation.randomisation import randomise
from estimation.sample import build_sample

KERNELS = tuple(KERNEL)


@dataclass(frozen=True)
class Awkward:
    """A sample as the product gets it, and the exact scores beside it: ticks decide what is tied."""

    x: np.ndarray  # score minus cutoff, as a subtraction leaves it
    ticks: np.ndarray  # the same in exact whole steps
    y: np.ndarray
    above: np.ndarray
    weight: np.ndarray | None
    unit: float  # a width's unit
    magnitude: float  # of the score before the cutoff was taken off
    treated: str


def outcome(rng, x, above, treated):
    took = above if treated == "above" else ~above
    return (
        3 + 1.2 * x - 0.8 * x**2 + 0.4 * x**3 + 0.9 * took * (1 + x**2) + rng.normal(0, 0.4 + 0.2 * np.abs(x))
    )


@cache
def sample(name: str) -> Awkward:
    rng = np.random.default_rng(sum(map(ord, name)))
    n = 260
    unit, offset, weight, rule = 1.0, 0.0, None, "at or above"
    ticks = rng.integers(-3000, 3000, n)
    step = 5e-4
    if name == "heavy ties":
        ticks, step = rng.integers(-15, 16, n), 0.1
        rule = "below"
    elif name == "offset":
        offset, step, ticks, rule = 1e6, 0.01, rng.integers(-150, 150, n), "above"
    elif name == "tiny unit":
        unit = 1e-6
    elif name == "weights":
        weight, rule = rng.uniform(0.2, 6, n), "at or below"
    elif name == "tiny side":
        ticks[ticks >= 0] *= -1
        ticks[:18] = rng.integers(100, 2600, 18)
    elif name == "level of a billion":
        weight = rng.integers(1, 5, n).astype(float)
    x = ticks * step
    above = is_above(ticks, rule)
    treated = "above" if "above" in rule else "below"
    y = outcome(rng, x, above, treated)
    if name == "level of a billion":
        y = np.round(y, 6) + 1e6
    position = (offset + x) * unit - offset * unit
    return Awkward(position, ticks, y, above, weight, unit, offset * unit, treated)


NAMES = ("plain", "heavy ties", "offset", "tiny unit", "weights", "tiny side", "level of a billion")
WIDTHS = dict.fromkeys(NAMES, (0.9, 1.1, 1.2, 1.4)) | {"tiny side": (0.6, 1.3, 0.8, 1.3)}


def line(a: Awkward, **choices) -> Line:
    built = build_sample(
        position=a.x,
        outcome=a.y,
        above=a.above,
        treated=a.treated,
        weight=a.weight,
        score_magnitude=a.magnitude,
    )
    return Line.prepare(built, Choices(**choices))


def widths_of(name: str) -> tuple[Bandwidths, tuple[float, float], tuple[float, float]]:
    u = sample(name).unit
    h0, h1, b0, b1 = (u * w for w in WIDTHS[name])
    return Bandwidths(below=h0, above=h1, pilot_below=b0, pilot_above=b1, rule="chosen"), (h0, h1), (b0, b1)


def level_size(a: Awkward) -> float:
    """What rounding of a jump is measured against: the jump, or the outcome's level where that is large."""
    return 1e-9 + 1e-15 * float(np.max(np.abs(a.y)))


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize("kernel", KERNELS)
@pytest.mark.parametrize("order", range(4))
def test_effect_errors_and_worst_bias(name, kernel, order):
    a = sample(name)
    widths, h, b = widths_of(name)
    reading = line(a, kernel=kernel, order=order).reading(widths)
    plain = effect_weights(a.x, a.above, h, order, kernel, a.weight, treated=a.treated)
    robust = intervals.robust_weights(a.x, a.above, h, b, order, kernel, a.weight, treated=a.treated)
    residual = variance.both_neighbour_residuals(a.ticks, a.y, a.above)
    tolerance = level_size(a)
    np.testing.assert_allclose(reading.estimate, float(plain @ a.y), rtol=tolerance)
    np.testing.assert_allclose(reading.robust.estimate, float(robust @ a.y), rtol=tolerance)
    errors = [math.sqrt(variance.from_residuals(w, residual)) for w in (plain, robust)]
    np.testing.assert_allclose([reading.std_error, reading.robust.std_error], errors, rtol=1e-9)
    assert (reading.count_below, reading.count_above) == tuple(
        int((plain[s] != 0).sum()) for s in (~a.above, a.above)
    )
    if order == 0:
        assert reading.bias_aware is None
    elif order == 1:
        closed = float(intervals.worst_bias_local_linear(a.x.astype(np.longdouble), a.above, plain, 1.0))
        np.testing.assert_allclose(reading.unit_bias, closed, rtol=1e-9)
    elif kernel == "triangular" and name in ("plain", "heavy ties", "tiny unit"):
        integral = float(intervals.worst_bias_integral(a.x, a.above, plain, 1.0))
        np.testing.assert_allclose(reading.unit_bias, integral, rtol=1e-3)


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize("order", range(3))
@pytest.mark.parametrize("kind", ["hc0", "hc1", "hc2", "hc3"])
def test_sandwich_errors(name, order, kind):
    a = sample(name)
    widths, h, b = widths_of(name)
    reading = line(a, kernel="epanechnikov", order=order, variance=kind).reading(widths)
    plain = effect_weights(a.x, a.above, h, order, "epanechnikov", a.weight)
    residual = variance.both_hc_residuals(a.x, a.y, a.above, h, order, "epanechnikov", a.weight, kind)
    np.testing.assert_allclose(
        reading.std_error, math.sqrt(variance.from_residuals(plain, residual)), rtol=1e-8
    )
    # With the pilot at the bandwidth the corrected fit is the next order's, errors included.
    same = Bandwidths(below=b[0], above=b[1], pilot_below=b[0], pilot_above=b[1], rule="chosen")
    reading = line(a, kernel="epanechnikov", order=order, variance=kind).reading(same)
    plain = effect_weights(a.x, a.above, b, order + 1, "epanechnikov", a.weight)
    residual = variance.both_hc_residuals(a.x, a.y, a.above, b, order + 1, "epanechnikov", a.weight, kind)
    np.testing.assert_allclose(
        reading.robust.std_error, math.sqrt(variance.from_residuals(plain, residual)), rtol=1e-8
    )


def expected_widths(name: str, order: int, kernel: str, per_side: bool):
    """The twin's widths, with its own residuals from exact ticks; in units of the sample's own."""
    a = sample(name)
    return bandwidth_twin.mse(a.x, a.y, a.above, order, kernel, a.weight, per_side=per_side, ticks=a.ticks)


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize("kernel", KERNELS)
@pytest.mark.parametrize("order", range(4))
def test_mse_widths(name, kernel, order):
    a = sample(name)
    tolerance = 1e-8 if order < 3 else 1e-6
    found = line(a, kernel=kernel, order=order, bandwidth="mse", pilot="mse").bandwidths()
    expected = expected_widths(name, order, kernel, per_side=False)
    np.testing.assert_allclose([found.below, found.above, found.pilot_below], expected[:3], rtol=tolerance)
    found = line(a, kernel=kernel, order=order, bandwidth="mse per side").bandwidths()
    expected = expected_widths(name, order, kernel, per_side=True)
    np.testing.assert_allclose([found.below, found.above], expected[:2], rtol=tolerance)


@pytest.mark.parametrize("order", range(4))
def test_coverage_widths(order):
    a = sample("plain")
    mse = line(a, order=order).bandwidths().below
    found = line(a, order=order, bandwidth="coverage").bandwidths().below
    np.testing.assert_allclose(found, mse * bandwidth_twin.coverage_factor(len(a.x), order), rtol=1e-12)


@pytest.mark.parametrize("name", NAMES)
def test_curvature_and_honest_interval(name):
    a = sample(name)
    widths, h, _ = widths_of(name)
    prepared = line(a, level=0.9)
    bound = intervals.curvature_auto(a.x, a.y, a.above, a.weight)
    np.testing.assert_allclose(prepared.curvature[0], bound, rtol=1e-8)
    reading = prepared.reading(widths)
    weights = effect_weights(a.x, a.above, h, 1, "triangular", a.weight, treated=a.treated)
    residual = variance.both_neighbour_residuals(a.ticks, a.y, a.above)
    error = math.sqrt(variance.from_residuals(weights, residual))
    bias = float(intervals.worst_bias_local_linear(a.x.astype(np.longdouble), a.above, weights, bound))
    reach = intervals.critical_value(bias / error, 0.9) * error
    centre = float(weights @ a.y)
    assert reading.bias_aware is not None
    np.testing.assert_allclose(
        [reading.bias_aware.low, reading.bias_aware.high], [centre - reach, centre + reach], rtol=1e-7
    )


@pytest.mark.parametrize("strength", [0.7, 0.25, 0.02])
@pytest.mark.parametrize("kind", ["neighbour", "hc1"])
def test_take_up(strength, kind):
    a = sample("weights")
    rng = np.random.default_rng(int(100 * strength))
    took = a.above if a.treated == "above" else ~a.above
    t = (rng.random(len(a.x)) < 0.2 + strength * took).astype(float)
    built = build_sample(
        position=a.x, outcome=a.y, above=a.above, treated=a.treated, weight=a.weight, take_up=t
    )
    widths = Bandwidths.common(1.2)
    reading = Line.prepare(built, Choices(variance=kind)).reading(widths)
    for order, centre, error in (
        (1, reading.estimate, reading.std_error),
        (2, reading.robust.estimate, reading.robust.std_error),
    ):
        w = effect_weights(a.x, a.above, 1.2, order, "triangular", a.weight, treated=a.treated)
        if kind == "neighbour":
            e = [variance.both_neighbour_residuals(a.ticks, v, a.above) for v in (a.y, t)]
        else:
            e = [
                variance.both_hc_residuals(a.x, v, a.above, 1.2, order, "triangular", a.weight, kind)
                for v in (a.y, t)
            ]
        jump = float(w @ a.y), float(w @ t)
        spread = [float(variance.from_residuals(w, *pair)) for pair in ((e[0],), (e[1],), (e[0], e[1]))]
        np.testing.assert_allclose(centre, jump[0] / jump[1], rtol=1e-9)
        np.testing.assert_allclose(error, take_up.delta_error(centre, jump[1], *spread), rtol=1e-8)
    assert reading.take_up is not None
    z = 1.959963984540054
    expected = take_up.anderson_rubin(*jump, *spread, z)  # of the corrected jumps, which came last
    np.testing.assert_allclose(np.ravel(reading.take_up.anderson_rubin), np.ravel(expected), rtol=1e-7)
    np.testing.assert_allclose(
        reading.intention.estimate,
        float(effect_weights(a.x, a.above, 1.2, 1, "triangular", a.weight, treated=a.treated) @ a.y),
        rtol=1e-10,
    )


@pytest.mark.parametrize("name", ["plain", "heavy ties", "weights", "tiny unit", "offset"])
@pytest.mark.parametrize("order", [0, 1, 2])
def test_covariates(name, order):
    a = sample(name)
    rng = np.random.default_rng(9)
    z = np.column_stack([rng.normal(50, 10, len(a.x)), rng.integers(0, 2, len(a.x))]).astype(float)
    y = a.y + 0.05 * z[:, 0] - 0.4 * z[:, 1]
    common = {"position": a.x, "outcome": y, "above": a.above, "treated": a.treated, "weight": a.weight}
    without = build_sample(**common, score_magnitude=a.magnitude)
    with_them = build_sample(**common, covariates=z, score_magnitude=a.magnitude)
    prepared = Line.prepare(without, Choices(order=order), with_covariates=with_them)
    widths, h, _ = widths_of(name)
    reading = prepared.reading(widths, adjust=True)
    jump, gamma = covariates_twin.stacked(a.x, y, z, a.above, h, order, "triangular", a.weight)
    sign = 1 if a.treated == "above" else -1
    np.testing.assert_allclose(reading.estimate, sign * float(jump), rtol=1e-8)
    weights = effect_weights(a.x, a.above, h, order, "triangular", a.weight)
    residual = variance.both_neighbour_residuals(a.ticks, y.astype(np.longdouble) - z @ gamma, a.above)
    np.testing.assert_allclose(
        reading.std_error, math.sqrt(variance.from_residuals(weights, residual)), rtol=1e-8
    )


@pytest.mark.parametrize("kind", ["hc0", "hc1"])
@pytest.mark.parametrize("order", [1, 2])
def test_clusters_across_the_line(kind, order):
    a = sample("weights")
    cluster = np.random.default_rng(10).integers(0, 23, len(a.x))
    built = build_sample(
        position=a.x, outcome=a.y, above=a.above, treated=a.treated, weight=a.weight, cluster=cluster
    )
    reading = Line.prepare(built, Choices(order=order, variance=kind)).reading(Bandwidths.common(0.8))
    weights = effect_weights(a.x, a.above, 0.8, order, "triangular", a.weight)
    residual = variance.both_hc_residuals(a.x, a.y, a.above, 0.8, order, "triangular", a.weight, kind)
    expected, count = variance.clustered(weights, residual, cluster)
    np.testing.assert_allclose(reading.std_error, math.sqrt(expected), rtol=1e-8)
    assert reading.clusters == count


@pytest.mark.parametrize("seed", range(8))
def test_lots_that_can_be_listed(seed):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(7, 11))
    x = rng.uniform(-1, 1, n)
    x[:2], x[-2:] = -np.abs(x[:2]), np.abs(x[-2:])
    above = x >= 0
    y = rng.integers(0, 2, n).astype(float) if seed % 2 else rng.integers(-4, 9, n).astype(float)
    y[0] += y.min() == y.max()
    treated = "above" if seed % 3 else "below"
    took = above if treated == "above" else ~above
    level = 0.8
    found = randomise(
        position=x,
        outcome=y,
        above=above,
        treated=treated,
        window=(-1.0, 1.0),
        level=level,
        draws=10_000,
        seed=1,
    )
    assert found.exact
    np.testing.assert_allclose(found.p_value, float(randomisation.p_value(y, took)), rtol=1e-12)
    if seed % 2:
        exact = randomisation.hypergeometric_p_value(int(y.sum()), n, int(took.sum()), int(y[took].sum()))
        np.testing.assert_allclose(found.p_value, float(exact), rtol=1e-12)
    np.testing.assert_allclose(found.hodges_lehmann, randomisation.hodges_lehmann(y, took), rtol=1e-12)
    # Just inside either end the effect is kept, just outside it is not.
    for end, outward in ((found.low, -1), (found.high, 1)):
        if math.isfinite(end):
            assert randomisation.p_value(y, took, end - outward * 1e-6) > Fraction(1, 5)
            assert randomisation.p_value(y, took, end + outward * 1e-6) <= Fraction(1, 5)


def test_a_global_fit_is_the_width_without_end():
    """The twin's infinite width is a uniform kernel that reaches everything."""
    a = sample("weights")
    side, part = a.x[a.above], a.weight[a.above]
    everything = one_side_weights(side, math.inf, 3, "triangular", part, 2)
    wide = one_side_weights(side, 100.0, 3, "uniform", part, 2)
    np.testing.assert_allclose(everything.astype(float), wide.astype(float), atol=1e-13)


@pytest.mark.parametrize("per_side", [False, True])
def test_with_take_up_both_equations_share_the_smaller_width(per_side):
    a = sample("plain")
    rng = np.random.default_rng(12)
    for slope in (0.0, 1.5):  # a bend in take-up that is slight, then strong
        t = (rng.random(len(a.x)) < 0.2 + 0.5 * a.above * np.exp(-slope * np.abs(a.x))).astype(float)
        built = build_sample(position=a.x, outcome=a.y, above=a.above, treated="above", take_up=t)
        rule = "mse per side" if per_side else "mse"
        found = Line.prepare(built, Choices(bandwidth=rule)).bandwidths()
        both = [bandwidth_twin.mse(a.x, v, a.above, 1, per_side=per_side, ticks=a.ticks) for v in (a.y, t)]
        np.testing.assert_allclose([found.below, found.above], np.min(both, axis=0)[:2], rtol=1e-8)
