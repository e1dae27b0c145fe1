"""The ladder answers what the rows answer, to 1e-10 of the numbers' own scale, on awkward data too."""

from dataclasses import fields

import numpy as np
import pytest

from estimation.errors import CannotEstimate
from estimation.ladder import Ladder, Widths
from estimation.line_fit import Bandwidths, LineFit
from estimation.local_polynomial import fit_rows
from estimation.moments import BLOCK, solve
from estimation.sample import Sample, build_sample
from estimation.variance import neighbour_residuals

WIDTHS = [(0.7, 0.8, 0.7, 0.7), (0.9, 0.7, 1.3, 1.4), (1.1, 1.1, 0.8, 0.9), (4.0, 4.0, 4.0, 4.0)]


def draw(
    rows: int = 800,
    *,
    seed: int = 0,
    offset: float = 0.0,
    unit: float = 1.0,
    ties: bool = False,
    weighted: bool = False,
    level: float = 5.0,
    treated: str = "above",
) -> Sample:
    rng = np.random.default_rng(seed)
    x = rng.normal(size=rows)
    if ties:
        x = np.round(x, 1)
    y = level + np.sin(x) + 0.5 * (x >= 0) + rng.normal(size=rows)
    position = (x * unit + offset) - offset
    return build_sample(
        position=position,
        outcome=y,
        above=x >= 0,
        treated=treated,  # type: ignore[arg-type]
        weight=rng.uniform(0.5, 2.0, rows) if weighted else None,
        take_up=(rng.uniform(size=rows) < 0.3 + 0.4 * (x > 0)).astype(float),
        covariates=rng.normal(size=(rows, 2)),
        score_magnitude=abs(offset) + 5 * unit,
    )


def agree(fast: LineFit, slow: LineFit, tolerance: float = 1e-10) -> None:
    for field in fields(LineFit):
        one, other = np.asarray(getattr(fast, field.name)), np.asarray(getattr(slow, field.name))
        if field.name in ("count_below", "count_above"):
            assert one == other
        elif field.name != "clusters" and np.all(np.isfinite(other.astype(float))):
            # Jumps are differences of levels: their digits are those of the outcome's own spread (about 1 here).
            scale = max(float(np.abs(other).max(initial=0.0)), 1.0 if "jump" in field.name else 0.0)
            assert one == pytest.approx(other, rel=tolerance, abs=tolerance * scale), field.name


@pytest.mark.parametrize("kernel", ["triangular", "uniform", "epanechnikov"])
@pytest.mark.parametrize("order", [0, 1, 2, 3])
@pytest.mark.parametrize(
    "kind",
    [
        {},
        {"ties": True},
        {"weighted": True, "treated": "below"},
        {"offset": 1e6},
        {"unit": 1e-6},
        {"offset": 1e6, "unit": 1e3, "ties": True, "weighted": True},
        {"level": 1e5},
    ],
)
def test_the_ladder_is_the_rows(kernel: str, order: int, kind: dict[str, object]) -> None:
    sample = draw(seed=order, **kind)  # type: ignore[arg-type]
    unit = float(kind.get("unit", 1.0))  # type: ignore[arg-type]
    ladder = Ladder.build(sample, kernel=kernel, order=order, adjust=True)
    for below, above, pilot_below, pilot_above in WIDTHS:
        widths = Bandwidths(
            below=below * unit,
            above=above * unit,
            pilot_below=pilot_below * unit,
            pilot_above=pilot_above * unit,
            rule="chosen",
        )
        slow = fit_rows(sample, widths, kernel=kernel, order=order, variance="neighbour", adjust=True)
        # An outcome 1e5 away from nought has five digits fewer to give, in the slow way too.
        agree(ladder.fit(widths, adjust=True), slow, 1e-10 if kind.get("level") is None else 1e-8)


@pytest.mark.parametrize("kernel", ["triangular", "uniform", "epanechnikov"])
@pytest.mark.parametrize("order", [0, 1, 2, 3])
@pytest.mark.parametrize(
    "kind",
    [
        {},
        {"ties": True},
        {"weighted": True, "treated": "below"},
        {"offset": 1e6, "unit": 1e3, "ties": True, "weighted": True},
        {"unit": 1e-6},
        {"level": 1e5},
    ],
)
def test_fitted_residuals_are_the_rows_at_any_width(kernel: str, order: int, kind: dict[str, object]) -> None:
    # 2,000 rows: some blocks of running sums, and rows after the last of them.
    sample = draw(2000, seed=40 + order, **kind)  # type: ignore[arg-type]
    unit = float(kind.get("unit", 1.0))  # type: ignore[arg-type]
    ladder = Ladder.build(sample, kernel=kernel, order=order, adjust=True).with_squares(sample)
    for pair in WIDTHS:
        below, above, pilot_below, pilot_above = (unit * width for width in pair)
        widths = Bandwidths(
            below=below, above=above, pilot_below=pilot_below, pilot_above=pilot_above, rule="chosen"
        )
        for variance in ("hc0", "hc1"):
            fast = ladder.fits(Widths.single(widths), adjust=True, variance=variance, unit_bias=False).at(0)
            slow = fit_rows(sample, widths, kernel=kernel, order=order, variance=variance, adjust=True)
            for name in ("covariance", "robust_covariance"):
                one, other = getattr(fast, name), getattr(slow, name)
                scale = np.sqrt(np.outer(np.diagonal(other), np.diagonal(other)))
                assert one / scale == pytest.approx(other / scale, rel=1e-10, abs=1e-10), name
            assert fast.robust_jump == pytest.approx(slow.robust_jump, rel=1e-9, abs=1e-10)
            assert np.isnan(fast.unit_bias)


def test_fitted_residuals_of_a_steep_outcome_keep_their_digits() -> None:
    # A squared outcome is ten million times its squared noise: without the trend taken off first, the expansion
    # would have lost seven digits.
    rng = np.random.default_rng(8)
    x = np.where(rng.uniform(size=4000) < 0.05, 0.0, rng.uniform(-1, 1, 4000))
    y = 300 * x + 20 * x**2 + rng.normal(0, 0.1, 4000)
    sample = build_sample(position=x, outcome=y, above=x >= 0, treated="above", score_magnitude=1.0)
    ladder = Ladder.build(sample, kernel="triangular", order=1).with_squares(sample)
    for width in (0.05, 0.3, 1.0):
        widths = Bandwidths.common(width, 0.8)
        slow = fit_rows(sample, widths, kernel="triangular", order=1, variance="hc0")
        fast = ladder.fit(widths, variance="hc0")
        assert fast.covariance == pytest.approx(slow.covariance, rel=1e-10)
        assert fast.robust_covariance == pytest.approx(slow.robust_covariance, rel=1e-10)


def test_many_widths_with_fitted_residuals_are_the_widths_one_by_one() -> None:
    sample = draw(3000, seed=6)
    ladder = Ladder.build(sample, kernel="epanechnikov", order=1).with_squares(sample)
    grid = np.array([1e-6, 0.03, 0.5, 1.0, 3.0])
    fits = ladder.fits(Widths.common(grid, 0.9), variance="hc1")
    assert np.isnan(fits.covariance[0]).all()
    for i in range(1, len(grid)):
        agree(fits.at(i), ladder.fit(Bandwidths.common(float(grid[i]), 0.9), variance="hc1"), 1e-12)


def test_a_ladder_without_squares_says_so() -> None:
    sample = draw(300)
    with pytest.raises(ValueError, match="with_squares"):
        Ladder.build(sample, kernel="uniform", order=1).fit(Bandwidths.common(0.8), variance="hc0")


def test_lower_orders_are_asked_of_a_higher_ladder() -> None:
    sample = draw(seed=4)
    ladder = Ladder.build(sample, kernel="triangular", order=3)
    for order in (0, 1, 2):
        widths = Bandwidths.common(0.8)
        agree(
            ladder.fit(widths, order=order),
            fit_rows(sample, widths, kernel="triangular", order=order, variance="neighbour"),
        )


def test_many_widths_are_the_widths_one_by_one_and_nan_where_none_fits() -> None:
    ladder = Ladder.build(draw(seed=5), kernel="triangular", order=1)
    grid = np.array([1e-6, 0.03, 0.5, 1.0, 3.0])
    fits = ladder.fits(Widths.common(grid))
    assert np.isnan(fits.jump[0]).all()
    for i in range(1, len(grid)):
        agree(fits.at(i), ladder.fit(Bandwidths.common(float(grid[i]))), 1e-12)
    with pytest.raises(CannotEstimate):
        ladder.fit(Bandwidths.common(1e-6))


@pytest.mark.parametrize("rows", [BLOCK - 1, BLOCK, BLOCK + 1, 5 * BLOCK])
def test_widths_that_end_at_the_edges_of_blocks(rows: int) -> None:
    rng = np.random.default_rng(rows)
    half = np.sort(rng.uniform(0.01, 1.0, rows))
    x = np.concatenate((-half, half))
    y = np.cos(x) + rng.normal(size=2 * rows)
    sample = build_sample(position=x, outcome=y, above=x >= 0, treated="above", score_magnitude=1.0)
    ladder = Ladder.build(sample, kernel="uniform", order=1)
    for count in {BLOCK - 1, BLOCK, min(BLOCK + 1, rows), rows}:
        if count > rows:
            continue
        widths = Bandwidths.common(float(half[count - 1]))
        slow = fit_rows(sample, widths, kernel="uniform", order=1, variance="neighbour")
        assert slow.count_below == count
        agree(ladder.fit(widths), slow)


def test_merged_parts_answer_with_the_sum_of_their_rows() -> None:
    # Three parts, each with residuals of its own: the merged answer is the dense formula over all rows with
    # those residuals, at every width.
    parts = [draw(900, seed=20 + i, weighted=True, level=5.0 + i) for i in range(3)]
    merged = Ladder.merge([Ladder.build(part, kernel="triangular", order=1) for part in parts])
    h = 0.9
    fit = merged.fit(Bandwidths.common(h))
    level, variance = [], 0.0
    for name in ("below", "above"):
        sides = [getattr(part, name) for part in parts]
        d = np.concatenate([side.distance for side in sides])
        y = np.concatenate([side.outcome for side in sides])
        w = np.concatenate([side.weight for side in sides])
        e = np.concatenate(
            [
                neighbour_residuals(side.distance, side.values, resolution=part.resolution)[:, 0]
                for part, side in zip(parts, sides)
            ]
        )
        k = np.maximum(1 - d / h, 0) * w
        design = np.column_stack((np.ones_like(d), d))
        line = np.linalg.solve(design.T @ (k[:, None] * design), (design * k[:, None]).T)[0]
        level.append(line @ y)
        variance += (line**2) @ e**2
    assert fit.levels_below[0] == pytest.approx(level[0], rel=1e-11)
    assert fit.jump[0] == pytest.approx(level[1] - level[0], rel=1e-10)
    assert fit.covariance[0, 0] == pytest.approx(variance, rel=1e-10)
    assert fit.count_below == sum(int((part.below.distance < h).sum()) for part in parts)


def test_ladders_of_different_kernels_do_not_merge() -> None:
    sample = draw(300)
    with pytest.raises(ValueError, match="do not merge"):
        Ladder.merge([Ladder.build(sample, kernel=kernel, order=1) for kernel in ("triangular", "uniform")])


def test_small_systems_are_solved_and_singular_ones_said() -> None:
    rng = np.random.default_rng(1)
    root = rng.normal(size=(6, 4, 4))
    gram = (root @ root.transpose(0, 2, 1)).astype(np.longdouble)
    right = rng.normal(size=(6, 4, 2)).astype(np.longdouble)
    found = solve(gram, right).astype(float)
    assert found == pytest.approx(np.linalg.solve(gram.astype(float), right.astype(float)), rel=1e-8)
    gram[2] = 0.0
    assert np.isnan(solve(gram, right)[2].astype(float)).all()
