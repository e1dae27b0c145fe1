"""The bandwidth rules against the formulas of the methods note, written out densely a second time."""

import numpy as np
import pytest
from scipy import stats

from estimation.bandwidth import (
    ScoreSpread,
    choose_bandwidths,
    coverage_factor,
    mse_widths,
    rule_of_thumb_curvature,
    shortest_honest_width,
)
from estimation.choices import Choices
from estimation.ladder import Ladder
from estimation.sample import build_sample

FIRST = {"triangular": 2.576, "uniform": 1.843, "epanechnikov": 2.34}


def kernel(u: np.ndarray, name: str) -> np.ndarray:
    value = {"triangular": 1 - u, "uniform": np.ones_like(u), "epanechnikov": 1 - u**2}[name]
    return np.where(u <= 1, np.maximum(value, 0), 0)


def noise(d: np.ndarray, y: np.ndarray) -> np.ndarray:
    """Nearest-neighbour variance of each row, J = 3, for scores without ties."""
    result = np.empty(len(y))
    for i in range(len(y)):
        order = np.argsort(np.abs(d - d[i]), kind="stable")[1:4]
        result[i] = 0.75 * (y[i] - y[order].mean()) ** 2
    return result


def weights(x: np.ndarray, w: np.ndarray, h: float, name: str, order: int, power: int) -> np.ndarray:
    k = kernel(np.abs(x) / h, name) * w
    design = np.vander(x / h, order + 1, increasing=True)
    return np.linalg.solve(design.T @ (k[:, None] * design), (design * k[:, None]).T)[power] / h**power


def dense_rule(
    x: np.ndarray, y: np.ndarray, w: np.ndarray, name: str, p: int
) -> tuple[float, float, list[float], list[float]]:
    """(h, b, own h, own b) by steps 1–3 of methods 3."""
    q, n = p + 1, len(x)
    spread = min(x.std(ddof=1), (np.quantile(x, 0.75) - np.quantile(x, 0.25)) / 1.349)
    c = FIRST[name] * spread * n**-0.2
    sides = [x < 0, x >= 0]
    sign = [-1.0, 1.0]
    variance = [noise(np.abs(x[s]), y[s]) for s in sides]
    top = []
    for s, v in zip(sides, variance):
        reach = np.abs(x[s]).max()
        line = weights(x[s], w[s], reach * (1 + 1e-12), "uniform", q + 1, q + 1)
        top.append((line @ y[s], line**2 @ v))
    v_b, b_b, r_b = [], [], []
    for s, v, sg, (beta, var) in zip(sides, variance, sign, top):
        line = weights(x[s], w[s], c, name, q, p + 1)
        v_b.append(c ** (2 * p + 3) * (line**2 @ v))
        factor = sg * (line @ x[s] ** (q + 1)) / c
        b_b.append(factor * beta)
        r_b.append(factor**2 * var)
    power = 1 / (2 * q + 3)
    b = ((2 * p + 3) * sum(v_b) / (2 * (sum(b_b) ** 2 + 3 * sum(r_b)))) ** power
    own_b = [((2 * p + 3) * v / (2 * (bias**2 + 3 * r))) ** power for v, bias, r in zip(v_b, b_b, r_b)]
    largest = np.abs(x).max()
    b = min(b, largest)
    own_b = [min(value, np.abs(x[s]).max()) for value, s in zip(own_b, sides)]

    def step3(pilots: list[float]) -> tuple[list[float], list[float], list[float]]:
        vs, bs, rs = [], [], []
        for s, v, sg, pilot in zip(sides, variance, sign, pilots):
            line = weights(x[s], w[s], c, name, p, 0)
            bend = weights(x[s], w[s], pilot, name, q, p + 1)
            factor = sg * (line @ x[s] ** (p + 1)) / c ** (p + 1)
            vs.append(c * (line**2 @ v))
            bs.append(factor * (bend @ y[s]))
            rs.append(factor**2 * (bend**2 @ v))
        return vs, bs, rs

    power = 1 / (2 * p + 3)
    vs, bs, rs = step3([b, b])
    h = (sum(vs) / (2 * (p + 1) * (sum(bs) ** 2 + 3 * sum(rs)))) ** power
    vs, bs, rs = step3(own_b)
    own_h = [(v / (2 * (p + 1) * (bias**2 + 3 * r))) ** power for v, bias, r in zip(vs, bs, rs)]
    return min(h, largest), b, [min(value, np.abs(x[s]).max()) for value, s in zip(own_h, sides)], own_b


@pytest.mark.parametrize("name", ["triangular", "uniform", "epanechnikov"])
@pytest.mark.parametrize("order", [0, 1, 2, 3])
@pytest.mark.parametrize("treated", ["above", "below"])
def test_the_mse_rule_is_the_three_steps(name: str, order: int, treated: str) -> None:
    rng = np.random.default_rng(30 + order)
    x = rng.normal(0.2, 1.0, 500)
    y = np.exp(0.6 * x) + 0.5 * (x >= 0) - 0.4 * x**2 * (x >= 0) + rng.normal(0, 0.3, 500)
    w = rng.uniform(0.5, 2.0, 500)
    sample = build_sample(position=x, outcome=y, above=x >= 0, treated=treated, weight=w, score_magnitude=5.0)  # type: ignore[arg-type]
    ladder = Ladder.build(sample, kernel=name, order=order)
    found = mse_widths(ladder, ScoreSpread.of(sample), order=order)
    h, b, own_h, own_b = dense_rule(x, y, w, name, order)
    assert found.common == pytest.approx(h, rel=1e-7)
    assert found.pilot_common == pytest.approx(b, rel=1e-7)
    assert found.own == pytest.approx(own_h, rel=1e-7)
    assert found.pilot_own == pytest.approx(own_b, rel=1e-7)


def test_equal_bends_on_both_sides_do_not_send_the_width_to_the_end() -> None:
    rng = np.random.default_rng(1)
    x = rng.uniform(-1, 1, 4000)
    y = 3 * x**2 + rng.normal(0, 0.3, 4000)
    sample = build_sample(position=x, outcome=y, above=x >= 0, treated="above", score_magnitude=1.0)
    ladder = Ladder.build(sample, kernel="triangular", order=1)
    assert mse_widths(ladder, ScoreSpread.of(sample), order=1).common < 0.95


@pytest.mark.parametrize(("order", "power"), [(0, 0.0), (1, -1 / 20), (2, -2 / 35), (3, -1 / 18)])
def test_the_coverage_factor(order: int, power: float) -> None:
    assert coverage_factor(1000, order) == pytest.approx(1000**power, rel=1e-12)


def test_the_rules_reach_the_choices() -> None:
    rng = np.random.default_rng(5)
    x = rng.uniform(-1, 1, 800)
    y = np.sin(2 * x) + rng.normal(0, 0.2, 800)
    sample = build_sample(position=x, outcome=y, above=x >= 0, treated="above", score_magnitude=1.0)
    ladder, spread = Ladder.build(sample, kernel="triangular", order=1), ScoreSpread.of(sample)
    mse = mse_widths(ladder, spread, order=1)

    def chosen(**given: object) -> object:
        return choose_bandwidths(ladder, spread, Choices(**given))  # type: ignore[arg-type]

    widths = choose_bandwidths(ladder, spread, Choices(bandwidth="coverage"))
    assert widths.below == pytest.approx(mse.common * 800 ** (-1 / 20), rel=1e-12)
    assert widths.pilot_below == widths.below
    own = choose_bandwidths(ladder, spread, Choices(bandwidth="mse per side", pilot="mse"))
    assert (own.below, own.above) == pytest.approx(tuple(mse.own), rel=1e-12)
    assert own.pilot_below == pytest.approx(mse.pilot_common, rel=1e-12)
    pair = choose_bandwidths(ladder, spread, Choices(bandwidth=(0.3, 0.5), pilot=0.6))
    assert (pair.below, pair.above, pair.pilot_below, pair.pilot_above) == (0.3, 0.5, 0.6, 0.6)


def test_the_rule_of_thumb_curvature_is_a_quartics() -> None:
    rng = np.random.default_rng(8)
    x = rng.uniform(-2, 3, 900)
    y = np.cos(1.5 * x) + rng.normal(0, 0.1, 900)
    sample = build_sample(position=x, outcome=y, above=x >= 0, treated="above", score_magnitude=3.0)
    ladder = Ladder.build(sample, kernel="triangular", order=1)
    bends = []
    for side in (x < 0, x >= 0):
        quartic = np.polynomial.Polynomial.fit(x[side], y[side], 4).convert().deriv(2)
        end = x[side][np.argmax(np.abs(x[side]))]
        bends.append(np.abs(quartic(np.linspace(0.0, end, 20_001))).max())
    assert rule_of_thumb_curvature(ladder)[0] == pytest.approx(max(bends), rel=1e-6)


def test_the_shortest_honest_width_beats_every_width_on_a_fine_grid() -> None:
    rng = np.random.default_rng(9)
    x = rng.uniform(-1, 1, 700)
    y = x**2 + 0.3 * (x >= 0) + rng.normal(0, 0.25, 700)
    sample = build_sample(position=x, outcome=y, above=x >= 0, treated="above", score_magnitude=1.0)
    ladder, spread = Ladder.build(sample, kernel="triangular", order=1), ScoreSpread.of(sample)
    bound = 2.0
    best = shortest_honest_width(ladder, spread, order=1, curvature=bound, level=0.95)
    # Constant noise a side, as the search uses it: mean neighbour variance within the first bandwidth.
    c = 2.576 * spread.width * 700**-0.2
    sides = [x < 0, x >= 0]
    sigma = [noise(np.abs(x[s]), y[s])[np.abs(x[s]) <= c].mean() for s in sides]

    def half(h: float) -> float:
        variance = bias = 0.0
        for s, v in zip(sides, sigma):
            line = weights(x[s], np.ones(s.sum()), h, "triangular", 1, 0)
            variance += v * (line**2).sum()
            bias += 0.5 * bound * abs(line @ x[s] ** 2)
        error = np.sqrt(variance)
        return float(stats.foldnorm.ppf(0.95, bias / error) * error)

    grid = np.geomspace(0.08, 1.0, 400)
    assert half(best) <= min(half(float(h)) for h in grid) * (1 + 1e-6)
