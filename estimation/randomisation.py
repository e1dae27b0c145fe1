r"""The answer as if by lot: inside a window so narrow that the side of the line was chance.

Under the sharp null every assignment of m of the N rows is equally likely, and the difference in means D is
compared with D* over those assignments. A constant effect τ is tested by taking it off the treated outcomes
first: with T the real assignment, D*(y − τT) = A − cτ, where A = D*(y) and c = D*(T), |c| ≤ 1. So an assignment
is as extreme as the real one exactly when |A − cτ| ≥ |D − τ|, that is for τ between (D − A)/(1 − c) and
(D + A)/(1 + c). The p-value at τ is the share of these intervals that hold τ, all of them hold D, and the ends of
the confidence interval are order statistics of their ends: the inversion is exact and needs no grid.

With partial take-up t the effect r is one on those who take it: y − r·t is what the lot cannot have moved
(Imbens & Rosenbaum 2005), the same with A − r·D*(t) and D − r·D(t) in place of A − cτ and D − τ. Assignments that
would have moved take-up as far as the real one, |D*(t)| ≥ |D(t)|, are counted as holding every r, which errs on the
wide side.

References
----------
Cattaneo, M., Frandsen, B. & Titiunik, R. (2015). Randomization inference in the regression discontinuity design.
    Journal of Causal Inference 3, 1–24. https://doi.org/10.1515/jci-2013-0010
Imbens, G. & Rosenbaum, P. (2005). Robust, accurate confidence intervals with a weak instrument: quarter of birth and
    education. JRSS A 168, 109–126. https://doi.org/10.1111/j.1467-985X.2004.00339.x
Hodges, J. & Lehmann, E. (1963). Estimates of location based on rank tests. Annals of Mathematical Statistics
    34, 598–611. https://doi.org/10.1214/aoms/1177704172
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

import numpy as np

from estimation.arrays import Mask, Vector
from estimation.errors import CannotEstimate
from estimation.inference import quantile
from estimation.permutation import (
    Assignments,
    assignments,
    by_normal_law,
    difference_in_means,
    permutation_p,
)
from estimation.window import Window

FEWEST_DRAWS: Final = 10_000
_PAIRS_AT_ONCE: Final = 4_000_000


@dataclass(frozen=True, slots=True, kw_only=True)
class Randomisation:
    """The local randomisation answer.

    Attributes
    ----------
    window
        (low, high) in score minus cutoff.
    below, above
        Rows with an outcome inside it.
    estimate
        Difference in means, treated less other, after slopes where they were removed; with take-up that difference over
        the one in take-up.
    intention
        The difference in means of the outcome itself.
    hodges_lehmann
        Median of all differences between a treated and another row.
    p_value, low, high
        Of no effect for any row; interval for an effect that is the same for every row.
    draws
        Assignments drawn; 0 where all were listed or the law is known.
    exact
        Whether the p-value is exact.
    slope_removed
        Whether each side's own slope in the score was taken off first.
    statistic
        What was compared, in words.
    """

    window: tuple[float, float]
    below: int
    above: int
    estimate: float
    intention: float
    hodges_lehmann: float
    p_value: float
    low: float
    high: float
    level: float
    draws: int
    exact: bool
    slope_removed: bool
    statistic: str
    seed: int


def randomise(
    *,
    position: Vector,
    outcome: Vector,
    above: Mask,
    treated: Literal["above", "below"],
    window: Window | tuple[float, float],
    level: float = 0.95,
    draws: int = FEWEST_DRAWS,
    seed: int = 0,
    slope: bool = False,
    take_up: Vector | None = None,
) -> Randomisation:
    """Test and interval inside a window.

    Parameters
    ----------
    position, outcome, above
        Shape (n,); rows outside the window are left alone. Outcomes must be known.
    slope
        Take each side's least-squares slope in the score off its outcomes (and take-up) first.
    take_up
        Shape (n,), known; None where everyone did what the rule says.

    Raises
    ------
    CannotEstimate
        When a side of the window holds fewer than two rows.
    """
    low, high = (window.low, window.high) if isinstance(window, Window) else window
    inside = np.flatnonzero((position >= low) & (position <= high))
    # One order whatever the file's: the draws then belong to the same rows.
    inside = inside[np.lexsort((outcome[inside], position[inside]))]
    x, y, upper = position[inside], outcome[inside], above[inside]
    below_rows, above_rows = int((~upper).sum()), int(upper.sum())
    if min(below_rows, above_rows) < 2:
        raise CannotEstimate(
            f"Within the window {low:.6g} to {high:.6g} there are {below_rows} rows with an outcome below the line and "
            f"{above_rows} above; local randomisation needs two on each side.",
            "Widen the window.",
        )
    if slope:
        y = _without_slopes(x, y, upper)
    took = upper if treated == "above" else ~upper
    dose = took.astype(np.float64)
    if take_up is not None:
        dose = _without_slopes(x, take_up[inside], upper) if slope else take_up[inside]
    found = None
    if not by_normal_law(len(y), int(took.sum())):
        columns = np.column_stack((y - y.mean(), dose - dose.mean()))
        found = assignments(columns, int(took.sum()), draws=draws, seed=seed)
    p_value, method = permutation_p(y, took, draws=draws, seed=seed, found=found)
    ends = _normal_interval(y, dose, took, level) if found is None else _interval(y, dose, took, found, level)
    intention, moved = _gap(y, took), _gap(dose, took)
    return Randomisation(
        window=(low, high),
        below=below_rows,
        above=above_rows,
        estimate=intention / moved if moved != 0.0 else float("nan"),
        intention=intention,
        hodges_lehmann=hodges_lehmann(y[took], y[~took]),
        p_value=p_value,
        low=ends[0],
        high=ends[1],
        level=level,
        draws=draws if method == "drawn" else 0,
        exact=method == "exact",
        slope_removed=slope,
        statistic="difference in means"
        + (", slopes removed" if slope else "")
        + (", normal law of the assignments" if method == "normal" else ""),
        seed=seed,
    )


def _without_slopes(x: Vector, y: Vector, upper: Mask) -> Vector:
    result = y.copy()
    for side in (upper, ~upper):
        away = x[side] - x[side].mean()
        spread = float(away @ away)
        if spread > 0.0:
            result[side] -= x[side] * float(away @ y[side]) / spread
    return result


def _gap(values: Vector, took: Mask) -> float:
    return float(values[took].mean() - values[~took].mean())


def _interval(y: Vector, dose: Vector, took: Mask, found: Assignments, level: float) -> tuple[float, float]:
    """The effects that the test at `level` does not reject; ends are infinite where too few assignments exist."""
    rows, count = len(y), int(took.sum())
    observed, moved = _gap(y, took), _gap(dose, took)
    if moved < 0.0:  # a mirror image: both differences change sign, the ratio does not
        observed, moved = -observed, -moved
    a = difference_in_means(found.sums[:, 0], 0.0, count, rows)
    c = difference_in_means(found.sums[:, 1], 0.0, count, rows)
    ends = []
    for top, bottom in ((observed - a, moved - c), (observed + a, moved + c)):
        # The real assignment and its mirror are as extreme as themselves at every effect.
        ends.append(np.divide(top, bottom, out=np.full(len(a), np.nan), where=bottom > 1e-12 * moved))
    always = np.isnan(ends[0]) | np.isnan(ends[1])
    lower = np.where(always, -np.inf, np.fmin(ends[0], ends[1]))
    upper = np.where(always, np.inf, np.fmax(ends[0], ends[1]))
    total = len(a) + (0 if found.listed else 1)
    # p(τ) > α needs more than α·total assignments to hold τ; the real one is counted beside the draws.
    needed = int(np.floor((1.0 - level) * total + 1e-9)) + (1 if found.listed else 0)
    if needed < 1:
        return -np.inf, np.inf
    return float(np.sort(lower)[needed - 1]), float(np.sort(-upper)[needed - 1] * -1.0)


def _normal_interval(y: Vector, dose: Vector, took: Mask, level: float) -> tuple[float, float]:
    """Roots in r of (D − r·D(t))² = z²·Var(D*) with Var(D*) = N/(m n)·s²(y − r·t), a quadratic."""
    rows, count = len(y), int(took.sum())
    observed, moved = _gap(y, took), _gap(dose, took)
    scale = quantile(level) ** 2 * rows / (count * (rows - count))
    spread = np.cov(y, dose)
    a, b, c = (
        moved**2 - scale * spread[1, 1],
        observed * moved - scale * spread[0, 1],
        observed**2 - scale * spread[0, 0],
    )
    if a <= 0.0:  # take-up does not move enough to bound the ratio
        return -np.inf, np.inf
    reach = np.sqrt(max(b * b - a * c, 0.0))
    return float((b - reach) / a), float((b + reach) / a)


def hodges_lehmann(treated: Vector, other: Vector) -> float:
    """Median of all pairwise differences treated − other.

    Small sets list the pairs. Large ones search for the middle value by counting: #{pairs ≤ v} is a merge of two
    sorted lists, so that each step of a bisection costs (m + n)·log n and no pair is stored.
    """
    a, b = np.sort(treated), np.sort(other)
    pairs = len(a) * len(b)
    ranks = ((pairs - 1) // 2, pairs // 2)
    if pairs <= _PAIRS_AT_ONCE:
        differences = np.partition((a[:, None] - b[None, :]).ravel(), ranks)
        return float(0.5 * (differences[ranks[0]] + differences[ranks[1]]))
    return 0.5 * (_pair_of_rank(a, b, ranks[0]) + _pair_of_rank(a, b, ranks[1]))


def _pair_of_rank(a: Vector, b: Vector, rank: int) -> float:
    low, high = float(a[0] - b[-1]), float(a[-1] - b[0])
    while True:
        middle = low + 0.5 * (high - low)
        if not low < middle < high:
            break
        # #{a_i − b_j ≤ middle} = Σ_i #{b_j ≥ a_i − middle}
        if len(a) * len(b) - int(np.searchsorted(b, a - middle, side="left").sum()) > rank:
            high = middle
        else:
            low = middle
    return high
