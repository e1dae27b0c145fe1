r"""The MSE-optimal bandwidth of every site at once: `estimation.bandwidth.mse_widths` with sites for queries.

The same three steps and the same formulas; see there for them and their sources.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from estimation.arrays import Codes, Matrix, Vector
from estimation.bandwidth import coverage_factor
from estimation.choices import Choices
from estimation.kernels import RULE_OF_THUMB
from estimation.moments import combine, hankel, kernel_coefficients, solve
from estimation.site_ladder import SideOfSites, SiteLadder


@dataclass(frozen=True, slots=True, kw_only=True)
class SiteWidths:
    """Bandwidths of S sites, shape (S,) each, NaN where a site has no width to choose."""

    below: Vector
    above: Vector


@dataclass(frozen=True, slots=True)
class _Coefficients:
    value: Matrix  # (S, v)
    variance: Matrix
    next_moment: Vector  # (S,)


def _coefficients(side: SideOfSites, bandwidth: Vector, kernel: str, order: int, power: int) -> _Coefficients:
    """The x^`power` coefficient of an order-`order` fit of one side of every site, NaN where it can't be had."""
    sign = -1.0 if side.name == "below" else 1.0
    raw = side.raw(bandwidth, kernel)
    shape = kernel_coefficients(kernel)
    moments = combine(raw, shape, 2 * order + 2)
    unit = np.zeros((len(bandwidth), order + 1, 1), dtype=np.longdouble)
    unit[:, power] = 1.0
    weights = solve(hankel(moments[:, :, 0], order + 1), unit)[:, :, 0]
    channels, squared_shape = side.channels, np.convolve(shape, shape)
    value = np.einsum("sj,sja->sa", weights, moments[:, : order + 1, channels.first])
    polynomial = np.stack(
        [
            np.sum(
                [weights[:, i] * weights[:, r - i] for i in range(max(0, r - order), min(r, order) + 1)],
                axis=0,
            )
            for r in range(2 * order + 1)
        ],
        axis=1,
    )
    squares = combine(raw, squared_shape, polynomial.shape[1])[:, :, channels.spread]
    spread = channels.symmetric(np.einsum("sr,srp->sp", polynomial, squares))
    variance = np.maximum(np.diagonal(spread, axis1=1, axis2=2), 0.0)
    next_moment = np.einsum("sj,sj->s", weights, moments[:, order + 1 : 2 * order + 2, 0])
    scale = bandwidth**-power
    return _Coefficients(
        (value * (scale * sign**power)[:, None]).astype(np.float64),
        (variance * (scale**2)[:, None]).astype(np.float64),
        next_moment.astype(np.float64) * scale * bandwidth ** (order + 1) * sign ** (power + order + 1),
    )


@dataclass(frozen=True, slots=True)
class _Room:
    """The least and the largest width of each side of each site, shape (2, S), below first."""

    low: Matrix
    high: Matrix

    def common(self, width: Vector) -> Vector:
        low = self.low.max(axis=0)
        return np.asarray(np.clip(width, low, np.maximum(self.high.max(axis=0), low)))

    def own(self, width: Matrix) -> Matrix:
        return np.asarray(np.clip(width, self.low, np.maximum(self.high, self.low)))


def _room(ladder: SiteLadder) -> _Room:
    needed = ladder.order + 3
    low = []
    for side in (ladder.below, ladder.above):
        scores = side.first_scores
        there = np.isfinite(scores).sum(axis=1)
        # A kernel that ends at zero does not count a row on its edge: go to the next score.
        inside = (
            np.full(len(there), needed - 1) if ladder.kernel == "uniform" else np.minimum(needed, there - 1)
        )
        nearest = scores[np.arange(len(there)), np.maximum(inside, 0)]
        low.append(np.where(there >= needed, np.maximum(nearest, side.tenth), np.nan))
    return _Room(np.stack(low), np.stack([ladder.below.reach, ladder.above.reach]))


def choose_site_widths(
    ladder: SiteLadder, rows: Codes, spread: Vector, choices: Choices
) -> SiteWidths | None:
    """Each site's own bandwidths as the study's rule chooses them; None for a rule that needs each site's own line.

    Parameters
    ----------
    rows, spread
        `estimation.bandwidth.ScoreSpread` of each site, shape (S,).
    """
    rule = choices.bandwidth
    if not isinstance(rule, str):
        below, above = (rule, rule) if isinstance(rule, (int, float)) else rule
        return SiteWidths(below=np.full(len(rows), float(below)), above=np.full(len(rows), float(above)))
    if rule == "bias-aware" or choices.pilot == "mse":
        return None
    room = _room(ladder)
    per_side = rule.endswith("per side")
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        found = [_mse(ladder, room, rows, spread, variable, per_side) for variable in range(ladder.targets)]
        factor = (
            np.array([coverage_factor(max(int(n), 1), choices.order) for n in rows])
            if rule.startswith("coverage")
            else np.ones(len(rows))
        )
        narrowest = np.min(found, axis=0) * factor
        if per_side:
            own = room.own(narrowest)
            return SiteWidths(below=own[0], above=own[1])
        common = room.common(narrowest[0])
    return SiteWidths(below=common, above=common.copy())


def _mse(
    ladder: SiteLadder, room: _Room, rows: Codes, spread: Vector, variable: int, per_side: bool
) -> Matrix:
    """(2, S): h below and above, the same unless `per_side`."""
    kernel, p, q = ladder.kernel, ladder.order, ladder.order + 1
    sides = (ladder.below, ladder.above)
    c = room.common(RULE_OF_THUMB[kernel] * spread * np.maximum(rows, 1) ** -0.2)
    # A site with no width to choose asks at 1 and is unknown at the end.
    known = np.isfinite(c)
    c = np.where(known, c, 1.0)
    signs = (np.array([-1.0, 1.0]) * ladder.treated_sign)[:, None]

    def pick(fits: list[_Coefficients]) -> tuple[Matrix, Matrix, Matrix]:
        return (
            np.stack([fit.value[:, variable] for fit in fits]),
            np.stack([fit.variance[:, variable] for fit in fits]),
            np.stack([fit.next_moment for fit in fits]),
        )

    steep, steep_variance, _ = pick(
        [_coefficients(side, side.reach, "uniform", q + 1, q + 1) for side in sides]
    )
    _, variance, moment = pick([_coefficients(side, c, kernel, q, p + 1) for side in sides])
    share = signs * moment / c
    power = 1.0 / (2 * q + 3)
    noise = (2 * p + 3) * c ** (2 * p + 3) * variance
    bias, uncertainty = share * steep, share**2 * steep_variance
    if per_side:
        pilot = room.own(_ratio(noise, 2.0 * (bias**2 + 3.0 * uncertainty)) ** power)
    else:
        one = (
            _ratio(noise.sum(axis=0), 2.0 * (bias.sum(axis=0) ** 2 + 3.0 * uncertainty.sum(axis=0))) ** power
        )
        pilot = np.stack((room.common(one),) * 2)
    pilot = np.where(known, pilot, 1.0)

    _, variance, moment = pick([_coefficients(side, c, kernel, p, 0) for side in sides])
    noise, share = c * variance, signs * moment / c ** (p + 1)
    power = 1.0 / (2 * p + 3)
    value, value_variance, _ = pick(
        [_coefficients(side, width, kernel, q, p + 1) for side, width in zip(sides, pilot)]
    )
    bias, uncertainty = share * value, share**2 * value_variance
    if per_side:
        found = room.own(_ratio(noise, 2.0 * (p + 1) * (bias**2 + 3.0 * uncertainty)) ** power)
    else:
        total = 2.0 * (p + 1) * (bias.sum(axis=0) ** 2 + 3.0 * uncertainty.sum(axis=0))
        found = np.stack((room.common(_ratio(noise.sum(axis=0), total) ** power),) * 2)
    return np.asarray(np.where(known & np.isfinite(steep).all(axis=0), found, np.nan))


def _ratio(noise: Vector, bias: Vector) -> Vector:
    """Noise / bias, infinite (then bounded by the data's reach) where nothing bends."""
    positive = bias > 0.0
    return np.asarray(np.where(positive | np.isnan(bias), noise / np.where(positive, bias, 1.0), np.inf))


def score_spreads(ladder: SiteLadder) -> tuple[Codes, Vector]:
    """(rows, min(sd, IQR/1.349) of the scores) of each site, as the first bandwidth asks for them."""
    below, above = ladder.below, ladder.above
    sites = len(below.starts) - 1
    rows, spread = np.zeros(sites, dtype=np.int64), np.full(sites, np.nan)
    for s in range(sites):
        lower = below.distance[below.starts[s] : below.starts[s + 1]]
        upper = above.distance[above.starts[s] : above.starts[s + 1]]
        x = np.concatenate((-lower[::-1], upper))
        rows[s] = len(x)
        if len(x) < 2:
            continue
        sd = float(x.std(ddof=1))
        low, high = (_score_at(x, share * (len(x) - 1)) for share in (0.25, 0.75))
        spread[s] = min(sd, (high - low) / 1.349) if high > low else sd
    return rows, spread


def _score_at(ascending: Vector, position: float) -> float:
    i = int(position)
    after = ascending[min(i + 1, len(ascending) - 1)]
    return float(ascending[i] + (position - i) * (after - ascending[i]))
