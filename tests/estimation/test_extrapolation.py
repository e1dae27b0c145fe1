"""Effects away from the line: against weighted regressions of a general library, and where the truth is known."""

import numpy as np
import pytest
import statsmodels.api as sm

from estimation.choices import Choices
from estimation.effect_slope import effect_slope
from estimation.errors import CannotEstimate
from estimation.extrapolation import Extrapolation, Group, extrapolate
from estimation.line import Line
from estimation.line_fit import Bandwidths
from estimation.sample import build_sample

LOW, HIGH = 40.0, 60.0


def groups(
    seed: int = 1,
    *,
    rows: int = 900,
    noise: float = 1.0,
    bend: float = 0.0,
    fuzzy: bool = False,
    clusters: int = 0,
) -> tuple[Group, Group]:
    rng = np.random.default_rng(seed)
    found = []
    shock = rng.normal(0, 0.8, max(clusters, 1))
    for cutoff, gap in ((LOW, 3.0), (HIGH, 0.0)):
        x = rng.uniform(20, 80, rows)
        treated = x >= cutoff
        took = (rng.uniform(size=rows) < 0.8 * treated).astype(float) if fuzzy else treated.astype(float)
        code = rng.integers(0, clusters, rows) if clusters else None
        control = 10 + 0.1 * x + gap + bend * (x - LOW) * (cutoff == HIGH)
        effect = 2.0 + 0.2 * (x - LOW)
        y = control + effect * took + noise * rng.normal(size=rows) + (shock[code] if clusters else 0.0)
        values = np.column_stack((y, took)) if fuzzy else y[:, None]
        found.append(
            Group(score=x, values=values, treated=treated, cutoff=cutoff, bandwidth=9.0, cluster=code)
        )
    return found[0], found[1]


def run(low: Group, high: Group, points: np.ndarray, **more: object) -> Extrapolation:
    options = {"kernel": "triangular", "order": 1, "level": 0.95, "treated_above": True} | more
    return extrapolate(low, high, points=points, **options)  # type: ignore[arg-type]


def wls(
    group: Group, rows: np.ndarray, point: float, order: int
) -> sm.regression.linear_model.RegressionResults:
    x, y = group.score[rows], group.values[rows, 0]
    k = np.maximum(1 - np.abs(x - point) / group.bandwidth, 0)
    inside = k > 0
    return sm.WLS(y[inside], np.vander(x[inside] - point, order + 1, increasing=True), weights=k[inside]).fit(
        cov_type="HC0"
    )


def test_each_curve_is_a_weighted_regression_and_the_parts_are_independent() -> None:
    low, high = groups()
    points = np.array([LOW, 46.0, 58.0])
    found = run(low, high, points, variance="hc0")
    for i, point in enumerate(points):
        for order, centre in ((1, found.estimate[i]), (2, found.robust[i].estimate)):  # type: ignore[union-attr]
            parts = [
                wls(low, low.treated, point, order),
                wls(high, ~high.treated, point, order),
                wls(low, ~low.treated, LOW, order),
                wls(high, ~high.treated, LOW, order),
            ]
            expected = sum(s * p.params[0] for s, p in zip((1, -1, -1, 1), parts))
            assert centre == pytest.approx(expected, rel=1e-9)
    # Far enough apart, no row serves both fits of the other group, so that the four variances add.
    parts = [
        wls(low, low.treated, 58.0, 2),
        wls(high, ~high.treated, 58.0, 2),
        wls(low, ~low.treated, LOW, 2),
        wls(high, ~high.treated, LOW, 2),
    ]
    robust = found.robust[2]
    assert robust is not None
    assert robust.std_error == pytest.approx(np.sqrt(sum(p.cov_params()[0, 0] for p in parts)), rel=1e-9)
    # At the first cutoff the other group's two fits are one, and cancel: the group's own effect.
    at_line = found.robust[0]
    assert at_line is not None
    own = [parts[2], wls(low, low.treated, LOW, 2)]
    assert at_line.std_error == pytest.approx(np.sqrt(sum(p.cov_params()[0, 0] for p in own)), rel=1e-9)


def test_without_noise_it_finds_the_effect_between_the_cutoffs() -> None:
    low, high = groups(noise=0.0)
    points = np.linspace(LOW, HIGH - 0.01, 7)
    found = run(low, high, points)
    assert found.estimate == pytest.approx(2.0 + 0.2 * (points - LOW), rel=1e-8)
    assert found.constancy.slopes.estimate == pytest.approx(0.0, abs=1e-8)
    assert found.constancy.gap[:5] == pytest.approx(np.full(5, 3.0), rel=1e-8)
    assert (found.first, found.other) == (LOW, HIGH)
    assert np.array_equal(run(high, low, points).estimate, found.estimate)


def test_reflecting_the_score_reflects_everything() -> None:
    low, high = groups(2)
    points = np.array([45.0, 55.0])

    def mirrored(group: Group) -> Group:
        return Group(
            score=-group.score,
            values=group.values,
            treated=group.treated,
            cutoff=-group.cutoff,
            bandwidth=group.bandwidth,
        )

    up = run(low, high, points)
    down = run(mirrored(low), mirrored(high), -points, treated_above=False)
    assert down.estimate == pytest.approx(up.estimate, rel=1e-12)
    assert down.covariance == pytest.approx(up.covariance, rel=1e-9)
    assert down.constancy.slopes.estimate == pytest.approx(-up.constancy.slopes.estimate, rel=1e-9)
    assert down.constancy.points == pytest.approx(-up.constancy.points)
    assert down.first == -LOW


def test_curves_that_are_not_parallel_are_found_out() -> None:
    straight, bent = run(*groups(3), np.array([50.0])), run(*groups(3, bend=0.4), np.array([50.0]))
    assert straight.constancy.slopes.low < 0.0 < straight.constancy.slopes.high
    assert bent.constancy.slopes.high < 0.0
    assert bent.constancy.slopes.estimate == pytest.approx(-0.4, abs=0.3)


def test_a_ratio_is_the_outcome_over_take_up_and_its_error_the_delta_method() -> None:
    low, high = groups(4, fuzzy=True)
    points = np.array([50.0])
    found = run(low, high, points)
    jumps, spread = [], []
    for combine in ([1.0, 0.0], [0.0, 1.0], [1.0, 1.0]):
        parts = [
            Group(
                score=g.score,
                values=(g.values @ np.array(combine))[:, None],
                treated=g.treated,
                cutoff=g.cutoff,
                bandwidth=g.bandwidth,
            )
            for g in (low, high)
        ]
        one = run(parts[0], parts[1], points).robust[0]
        assert one is not None
        jumps.append(one.estimate)
        spread.append(one.std_error**2)
    r = jumps[0] / jumps[1]
    both = (spread[2] - spread[0] - spread[1]) / 2
    error = np.sqrt(spread[0] + r * r * spread[1] - 2 * r * both) / abs(jumps[1])
    robust = found.robust[0]
    assert robust is not None
    assert robust.estimate == pytest.approx(r, rel=1e-9)
    assert robust.std_error == pytest.approx(error, rel=1e-8)


def test_clusters_in_both_groups_are_summed_over_both() -> None:
    low, high = groups(5, clusters=40)
    found = run(low, high, np.array([50.0]))
    assert low.cluster is not None and high.cluster is not None
    sums = np.zeros(40)
    for group, rows, point, sign in (
        (low, low.treated, 50.0, 1.0),
        (high, ~high.treated, 50.0, -1.0),
        (low, ~low.treated, LOW, -1.0),
        (high, ~high.treated, LOW, 1.0),
    ):
        x, y, code = group.score[rows], group.values[rows, 0], group.cluster[rows]  # type: ignore[index]
        k = np.maximum(1 - np.abs(x - point) / 9.0, 0)
        design = np.vander(x - point, 3, increasing=True)
        weights = np.linalg.solve(design.T @ (k[:, None] * design), (design * k[:, None]).T)
        residual = y - design @ (weights @ y)
        np.add.at(sums, code, sign * weights[0] * residual)
    robust = found.robust[0]
    assert robust is not None
    assert robust.std_error == pytest.approx(np.sqrt(np.sum(sums**2) * 40 / 39), rel=1e-8)


def test_what_cannot_be_reached_is_left_out_or_refused() -> None:
    low, high = groups(6)
    short = Group(
        score=np.minimum(low.score, 47.0),
        values=low.values,
        treated=low.treated,
        cutoff=LOW,
        bandwidth=9.0,
    )
    found = run(short, high, np.array([44.0, 59.0]))
    assert found.robust[0] is not None
    assert found.robust[1] is None and np.isnan(found.estimate[1])
    with pytest.raises(CannotEstimate) as problem:
        run(low, low, np.array([50.0]))
    assert problem.value.sentence == "The two sites have the same cutoff, so that nothing lies between."


@pytest.mark.parametrize("treated", ["above", "below"])
@pytest.mark.parametrize("fuzzy", [False, True])
def test_the_slope_of_the_effect_is_the_truth_without_noise(treated: str, fuzzy: bool) -> None:
    x = np.linspace(-2, 2, 801)
    on = (x >= 0) == (treated == "above")
    t = np.where(on, 0.7 + 0.1 * x, 0.2 - 0.05 * x)
    level = 1.5 + 0.4 * x  # the effect of take-up
    y = 3 + 0.3 * x - 0.2 * x**2 + level * (t if fuzzy else on)
    sample = build_sample(
        position=x,
        outcome=y,
        above=x >= 0,
        treated=treated,
        take_up=t if fuzzy else None,  # type: ignore[arg-type]
    )
    line = Line.prepare(sample, Choices(order=2, curvature=1.0))
    assert effect_slope(line, Bandwidths.common(1.0)).estimate == pytest.approx(0.4, rel=1e-6)


def test_the_slope_of_the_effect_is_an_interaction_in_a_weighted_regression() -> None:
    rng = np.random.default_rng(7)
    x = rng.uniform(-1, 1, 800)
    y = np.sin(x) + (x >= 0) * (1 + 0.5 * x) + rng.normal(0, 0.3, 800)
    line = Line.prepare(
        build_sample(position=x, outcome=y, above=x >= 0, treated="above"), Choices(variance="hc0")
    )
    found = effect_slope(line, Bandwidths.common(0.7))
    k = np.maximum(1 - np.abs(x) / 0.7, 0)
    inside = k > 0
    base = np.vander(x, 3, increasing=True)
    design = np.column_stack((base, base * (x >= 0)[:, None]))[inside]
    other = sm.WLS(y[inside], design, weights=k[inside]).fit(cov_type="HC0")
    assert found.estimate == pytest.approx(other.params[4], rel=1e-8)
    assert found.std_error == pytest.approx(other.bse[4], rel=1e-8)


def test_the_error_of_a_ratios_slope_is_what_small_changes_do() -> None:
    """The delta method against moving each row's outcome and take-up a little (numerical derivative)."""
    rng = np.random.default_rng(9)
    n = 60
    x = np.sort(rng.uniform(-1, 1, n))
    t = (rng.uniform(size=n) < 0.2 + 0.6 * (x >= 0)).astype(float)
    y = x + 2 * t + rng.normal(0, 0.5, n)

    def slope(y: np.ndarray, t: np.ndarray) -> tuple[float, float]:
        line = Line.prepare(
            build_sample(position=x, outcome=y, above=x >= 0, treated="above", take_up=t),
            Choices(variance="hc0", curvature=1.0),
        )
        found = effect_slope(line, Bandwidths.common(0.9))
        return found.estimate, found.std_error

    def residual(v: np.ndarray) -> np.ndarray:
        left = np.zeros(n)
        for side in (x < 0, x >= 0):
            k = np.maximum(1 - np.abs(x[side]) / 0.9, 0)
            design = np.vander(x[side], 3, increasing=True)
            fit = np.linalg.solve(design.T @ (k[:, None] * design), design.T @ (k * v[side]))
            left[side] = v[side] - design @ fit
        return left

    estimate, error = slope(y, t)
    ry, rt, step = residual(y), residual(t), 1e-6
    total = 0.0
    for i in range(n):
        bump = np.zeros(n)
        bump[i] = step
        total += ((slope(y + bump * ry[i], t + bump * rt[i])[0] - estimate) / step) ** 2
    assert error == pytest.approx(np.sqrt(total), rel=1e-3)
