r"""How close is close: bandwidths from the data.

The MSE-optimal rule for order p works down from a global fit, with q = p + 1:

1. the x^(q+1) coefficient of each side from a global polynomial of order q + 1;
2. with it the bandwidth b at which an order q fit estimates the x^(p+1) coefficient best,
   b^(2q+3) = (2p + 3)·V_b / (2·(B_b² + 3·var(B_b)));
3. with those coefficients β, the bandwidth h^(2p+3) = V / (2(p + 1)·(B² + 3·var(B))),

where V = c·Σ l(c)²σ̂² and B = Σ_sides s·(Σ l(c) x^(p+1))/c^(p+1)·β use a first bandwidth
c = C·min(sd, IQR/1.349)·n^(−1/5). The terms 3·var(B) keep h finite where both sides bend alike.

References
----------
Imbens, G. & Kalyanaraman, K. (2012). Optimal bandwidth choice for the regression discontinuity estimator.
    Review of Economic Studies 79, 933–959. https://doi.org/10.1093/restud/rdr043
Calonico, S., Cattaneo, M. & Titiunik, R. (2014). Robust nonparametric confidence intervals for
    regression-discontinuity designs. Econometrica 82, 2295–2326. https://doi.org/10.3982/ECTA11757
Calonico, S., Cattaneo, M. & Farrell, M. (2018). On the effect of bias estimation on coverage accuracy in
    nonparametric inference. JASA 113, 767–779. https://doi.org/10.1080/01621459.2017.1285776  (coverage)
Armstrong, T. & Kolesár, M. (2020). Simple and honest confidence intervals in nonparametric regression.
    Quantitative Economics 11, 1–39. https://doi.org/10.3982/QE1199  (shortest honest interval)
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from estimation.arrays import Matrix, Vector
from estimation.choices import BANDWIDTH_RULES, Choices
from estimation.errors import CannotEstimate
from estimation.inference import critical_values
from estimation.kernels import RULE_OF_THUMB
from estimation.ladder import Ladder, Widths
from estimation.line_fit import Bandwidths
from estimation.moments import SideSums, combine, hankel, kernel_coefficients, solve
from estimation.sample import Sample

FEWEST_ROWS: Final = 10


@dataclass(frozen=True, slots=True, kw_only=True)
class Coefficient:
    """One coefficient of one side's fit in x, for each of v variables.

    Attributes
    ----------
    value, variance
        Of the x^ν coefficient, shape (v,).
    next_moment
        Σ l x^(order + 1): what the first power left out adds for each unit of its coefficient.
    """

    value: Vector
    variance: Vector
    next_moment: float


def coefficient(side: SideSums, *, bandwidth: float, kernel: str, order: int, power: int) -> Coefficient:
    """The x^`power` coefficient of an order-`order` fit of one side, from running sums.

    Raises
    ------
    CannotEstimate
        When the scores inside the bandwidth can't carry the fit.
    """
    sign = -1.0 if side.name == "below" else 1.0
    h = np.array([bandwidth])
    raw = side.raw(h, h, kernel)
    shape = kernel_coefficients(kernel)
    moments = combine(raw, shape, 2 * order + 2)
    unit = np.zeros((1, order + 1, 1), dtype=np.longdouble)
    unit[:, power] = 1.0
    weights = solve(hankel(moments[:, :, 0], order + 1), unit)[0, :, 0]
    if not np.all(np.isfinite(weights.astype(np.float64))):
        raise CannotEstimate(
            f"The scores {side.name} the line are too few or too alike for a fit of order {order}.",
            "Give a bandwidth as a number or lower the order.",
        )
    channels = side.channels
    value = weights @ moments[0, : order + 1, channels.first]
    if power == 0:
        value = value + side.centre
    polynomial = np.convolve(weights, weights)
    squares = combine(raw, np.convolve(shape, shape), len(polynomial))[0, :, channels.spread]
    # A sum of squares; where it is all but zero, rounding may leave it a shade below.
    variance = np.maximum(np.diagonal(channels.symmetric(polynomial @ squares)), 0.0)
    next_moment = weights @ moments[0, order + 1 : 2 * order + 2, 0]
    scale = bandwidth**-power
    return Coefficient(
        value=(value * scale * sign**power).astype(np.float64),
        variance=(variance * scale**2).astype(np.float64),
        next_moment=float(next_moment) * scale * bandwidth ** (order + 1) * sign ** (power + order + 1),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class ScoreSpread:
    """What the first bandwidth needs of the scores: their number and min(sd, IQR/1.349)."""

    rows: int
    width: float

    @classmethod
    def of(cls, sample: Sample) -> ScoreSpread:
        """Of both sides of a sample together; the IQR counts only where it is positive."""
        below, above = sample.below.distance, sample.above.distance
        rows = len(below) + len(above)
        mean = (above.sum() - below.sum()) / rows
        sd = float(np.sqrt((((above - mean) ** 2).sum() + ((below + mean) ** 2).sum()) / (rows - 1)))

        def score_at(position: float) -> float:
            i = int(np.floor(position))
            pair = [
                -below[len(below) - 1 - j] if j < len(below) else above[j - len(below)]
                for j in (i, min(i + 1, rows - 1))
            ]
            return float(pair[0] + (position - i) * (pair[1] - pair[0]))

        iqr = score_at(0.75 * (rows - 1)) - score_at(0.25 * (rows - 1))
        return cls(rows=rows, width=min(sd, iqr / 1.349) if iqr > 0.0 else sd)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Limits:
    low: Vector  # below, above: the nearest distance at which a side can carry the fit
    high: Vector

    def common(self, width: float) -> float:
        return float(np.clip(width, self.low.max(), max(self.high.max(), self.low.max())))

    def own(self, width: Vector) -> Vector:
        return np.clip(width, self.low, np.maximum(self.high, self.low))


def _limits(ladder: Ladder, order: int, kernel: str) -> _Limits:
    """The room a bandwidth has: q + 2 distinct scores and ten rows a side, and no more than the data's reach."""
    low = []
    for side in (ladder.below, ladder.above):
        scores = side.first_scores
        needed = order + 3
        if len(scores) < needed:
            there = "1 distinct score" if len(scores) == 1 else f"{len(scores)} distinct scores"
            raise CannotEstimate(
                f"There is no bandwidth to choose: {side.name.capitalize()} the line the data hold {there}, "
                f"and an order {order} estimate with its bias correction needs {needed}.",
                "Check the cutoff and the rows the study reads, or use local randomisation.",
            )
        # A kernel that ends at zero does not count a row on its edge: go to the next score, or past the last by a gap.
        edge = float(scores[needed - 1])
        if kernel != "uniform":
            edge = float(scores[needed] if len(scores) > needed else 2.0 * scores[-1] - scores[-2])
        nearest = np.sort(np.concatenate([part.side.distance[:FEWEST_ROWS] for part in side.parts]))
        tenth = nearest[min(FEWEST_ROWS, len(nearest)) - 1]
        low.append(max(edge, float(tenth)))
    return _Limits(low=np.array(low), high=np.array([ladder.below.reach, ladder.above.reach]))


@dataclass(frozen=True, slots=True, kw_only=True)
class MseWidths:
    """The MSE-optimal widths of one variable.

    Attributes
    ----------
    common, pilot_common
        h and b, the same on both sides.
    own, pilot_own
        A side's own h and b, shape (2,), below first.
    """

    common: float
    pilot_common: float
    own: Vector
    pilot_own: Vector


def mse_widths(ladder: Ladder, spread: ScoreSpread, *, order: int, variable: int = 0) -> MseWidths:
    """The MSE-optimal bandwidths of the module's opening, for one variable of the ladder."""
    kernel, p, q = ladder.kernel, order, order + 1
    limits = _limits(ladder, order, kernel)
    c = limits.common(RULE_OF_THUMB[kernel] * spread.width * spread.rows**-0.2)
    sides = (ladder.below, ladder.above)
    signs = np.array([-1.0, 1.0]) * ladder.treated_sign

    def pick(fits: list[Coefficient]) -> tuple[Vector, Vector, Vector]:
        return (
            np.array([fit.value[variable] for fit in fits]),
            np.array([fit.variance[variable] for fit in fits]),
            np.array([fit.next_moment for fit in fits]),
        )

    whole = [
        coefficient(side, bandwidth=side.reach, kernel="uniform", order=q + 1, power=q + 1) for side in sides
    ]
    steep, steep_variance, _ = pick(whole)

    # Step 2: the width for the x^(p+1) coefficient by an order q fit.
    bends = [coefficient(side, bandwidth=c, kernel=kernel, order=q, power=p + 1) for side in sides]
    _, variance, moment = pick(bends)
    share = signs * moment / c
    power = 1.0 / (2 * q + 3)
    noise = (2 * p + 3) * c ** (2 * p + 3) * variance
    bias, uncertainty = share * steep, share**2 * steep_variance
    pilot = limits.common(
        _ratio(noise.sum(), 2.0 * (bias.sum() ** 2 + 3.0 * uncertainty.sum())).item() ** power
    )
    pilot_own = limits.own(_ratio(noise, 2.0 * (bias**2 + 3.0 * uncertainty)) ** power)

    # Step 3: the width for the level by an order p fit, common and side by side.
    levels = [coefficient(side, bandwidth=c, kernel=kernel, order=p, power=0) for side in sides]
    _, variance, moment = pick(levels)
    noise, share = c * variance, signs * moment / c ** (p + 1)
    power = 1.0 / (2 * p + 3)

    def bend_at(widths: Vector) -> tuple[Vector, Vector]:
        fits = [
            coefficient(side, bandwidth=float(b), kernel=kernel, order=q, power=p + 1)
            for side, b in zip(sides, widths)
        ]
        value, value_variance, _ = pick(fits)
        return share * value, share**2 * value_variance

    bias, uncertainty = bend_at(np.array([pilot, pilot]))
    common = _ratio(noise.sum(), 2.0 * (p + 1) * (bias.sum() ** 2 + 3.0 * uncertainty.sum())) ** power
    bias, uncertainty = bend_at(pilot_own)
    own = _ratio(noise, 2.0 * (p + 1) * (bias**2 + 3.0 * uncertainty)) ** power
    return MseWidths(
        common=limits.common(common.item()), pilot_common=pilot, own=limits.own(own), pilot_own=pilot_own
    )


def _ratio(noise: Vector, bias: Vector) -> Vector:
    """Noise / bias, infinite (then bounded by the data's reach) where nothing bends."""
    return np.asarray(np.where(bias > 0.0, noise / np.where(bias > 0.0, bias, 1.0), np.inf))


def coverage_factor(rows: int, order: int) -> float:
    """What turns an MSE-optimal width into a coverage-error optimal one: n^(−p/((3+p)(3+2p)))."""
    return float(rows ** (-order / ((3 + order) * (3 + 2 * order))))


def rule_of_thumb_curvature(ladder: Ladder) -> Vector:
    """Largest |second derivative| of a global quartic of each side, the larger side, shape (targets,).

    A rule of thumb, not knowledge: the bound can't be learnt honestly from the data it is meant to protect.
    """
    largest = np.zeros(ladder.targets)
    for side in (ladder.below, ladder.above):
        h = np.array([side.reach])
        moments = combine(side.raw(h, h, "uniform"), kernel_coefficients("uniform"), 9)
        order = min(4, len(side.first_scores) - 1)
        if order < 2:
            raise CannotEstimate(
                f"The data hold too few distinct scores {side.name} the line to judge how it bends.",
                "State a number for estimate.curvature.",
            )
        right = moments[:, : order + 1, side.channels.first]
        fitted = solve(hankel(moments[:, :, 0], order + 1), right)[0].astype(np.float64)
        largest = np.maximum(largest, _largest_bend(fitted[:, : ladder.targets]) / side.reach**2)
    return largest


def _largest_bend(coefficients: Matrix) -> Vector:
    """Max over 0 ≤ u ≤ 1 of |second derivative| of Σ a_j u^j, shape (v,) for coefficients (p + 1, v)."""
    found = []
    for a in coefficients.T:
        bend = np.polynomial.Polynomial(a).deriv(2)
        turns = bend.deriv().roots() if bend.degree() > 1 else np.zeros(0)
        inner = [float(t.real) for t in np.atleast_1d(turns) if 0.0 < t.real < 1.0]
        found.append(max(abs(float(bend(u))) for u in (0.0, 1.0, *inner)))
    return np.array(found)


def shortest_honest_width(
    ladder: Ladder, spread: ScoreSpread, *, order: int, curvature: float, level: float
) -> float:
    """The common bandwidth whose bias-aware interval is shortest, found on the ladder.

    Half the length, cv(bias/se)·se, falls and then rises as the width grows; a grid on a log scale finds the
    valley, and finer grids inside it the place. The error is that of a constant noise on each side, learnt once
    near the line: with an error estimated afresh at each width the search would settle where it happens to be
    too small, and the interval would fall short of its level (Armstrong & Kolesár 2020, section 4).
    """
    if order == 0:
        raise CannotEstimate(
            "A bias-aware bandwidth needs order 1 or more: means are biased by the slope, which no bound on the "
            "curvature bounds.",
            "Set estimate.order to 1 or choose another bandwidth rule.",
        )
    limits = _limits(ladder, order, ladder.kernel)
    sides = (ladder.below, ladder.above)
    first = limits.common(RULE_OF_THUMB[ladder.kernel] * spread.width * spread.rows**-0.2)
    noise = [_noise_near(side, first) for side in sides]
    low, high = float(limits.low.max()), max(float(limits.high.max()), float(limits.low.max()) * (1 + 1e-9))
    best = high
    for count in (200, 40, 40, 40, 40):
        grid = np.geomspace(low, high, count)
        squares = [_squared_weights(side, grid, ladder.kernel, order) for side in sides]
        error = np.sqrt(noise[0] * squares[0] + noise[1] * squares[1])
        bias = ladder.fits(Widths.common(grid), order=order).unit_bias * curvature
        half = critical_values(bias / np.where(error > 0.0, error, np.nan), level) * error
        usable = np.isfinite(half)
        if not usable.any():
            raise CannotEstimate(
                "No bandwidth gives a bias-aware interval on these data.", "Give a bandwidth as a number."
            )
        i = int(np.argmin(np.where(usable, half, np.inf)))
        best, low, high = float(grid[i]), float(grid[max(i - 1, 0)]), float(grid[min(i + 1, count - 1)])
    return best


def _noise_near(side: SideSums, bandwidth: float) -> float:
    """Mean squared residual of the outcome within a bandwidth."""
    h = np.array([bandwidth])
    sums = side.raw(h, h, "uniform")[0, 0]
    return float(sums[side.channels.spread.start] / sums[side.channels.squared_weight])


def _squared_weights(side: SideSums, bandwidth: Vector, kernel: str, order: int) -> Vector:
    """Σ l² of the level's weights at each width, shape (H,)."""
    raw, shape = side.raw(bandwidth, bandwidth, kernel), kernel_coefficients(kernel)
    moments = combine(raw, shape, 2 * order + 1)[:, :, 0]
    unit = np.zeros((len(bandwidth), order + 1, 1), dtype=np.longdouble)
    unit[:, 0] = 1.0
    weights = solve(hankel(moments, order + 1), unit)[:, :, 0]
    squares = combine(raw, np.convolve(shape, shape), 2 * order + 1)[:, :, side.channels.squared_weight]
    return np.asarray(
        np.einsum("hi,hij,hj->h", weights, hankel(squares, order + 1), weights), dtype=np.float64
    )


def choose_bandwidths(ladder: Ladder, spread: ScoreSpread, choices: Choices) -> Bandwidths:
    """The bandwidths that the study's choices ask for.

    With take-up (a second target) both equations share one bandwidth, the smaller of the two.
    """
    rule, order = choices.bandwidth, choices.order
    if not isinstance(rule, str):
        below, above = (rule, rule) if isinstance(rule, (int, float)) else rule
        return _with_pilot(float(below), float(above), "chosen", ladder, spread, choices)
    if rule not in BANDWIDTH_RULES:
        raise ValueError(f"no bandwidth rule is called {rule!r}")
    if rule == "bias-aware":
        bound = (
            rule_of_thumb_curvature(ladder)[0] if isinstance(choices.curvature, str) else choices.curvature
        )
        width = shortest_honest_width(
            ladder, spread, order=order, curvature=float(bound), level=choices.level
        )
        return _with_pilot(width, width, rule, ladder, spread, choices)
    found = [mse_widths(ladder, spread, order=order, variable=v) for v in range(ladder.targets)]
    factor = coverage_factor(spread.rows, order) if rule.startswith("coverage") else 1.0
    limits = _limits(ladder, order, ladder.kernel)  # the factor must not push a width below what a fit needs
    if rule.endswith("per side"):
        own = limits.own(np.min([widths.own for widths in found], axis=0) * factor)
        return _with_pilot(float(own[0]), float(own[1]), rule, ladder, spread, choices)
    common = limits.common(min(widths.common for widths in found) * factor)
    return _with_pilot(common, common, rule, ladder, spread, choices)


def _with_pilot(
    below: float, above: float, rule: str, ladder: Ladder, spread: ScoreSpread, choices: Choices
) -> Bandwidths:
    widths = Bandwidths(below=below, above=above, pilot_below=below, pilot_above=above, rule=rule)
    if choices.pilot == "same":
        return widths
    if isinstance(choices.pilot, str):
        b = min(
            mse_widths(ladder, spread, order=choices.order, variable=v).pilot_common
            for v in range(ladder.targets)
        )
    else:
        b = float(choices.pilot)
    return replace(widths, pilot_below=b, pilot_above=b)
