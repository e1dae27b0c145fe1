r"""Local polynomial fits at the line, as weights on the rows.

With r_p(x) = (1, x, …, x^p)′, k = K(x/h)·weight and A = Σ k r r′, the coefficient of x^ν on one side is
Σ l_i y_i with l_i = e_ν′ A⁻¹ r_i k_i. The effect is Σ l y on the treated side less Σ l y on the other.
The bias-corrected estimate takes off what the next power of x leaves behind,
l_bc = l_h − (Σ l_h x^(p+1))·v_b, where v_b are the weights of the x^(p+1) coefficient of an order p + 1 fit
at the pilot width b; with b = h it is the order p + 1 fit itself.

References
----------
Fan, J. & Gijbels, I. (1996). Local Polynomial Modelling and Its Applications. Chapman & Hall.
Calonico, S., Cattaneo, M. & Titiunik, R. (2014). Robust nonparametric confidence intervals for
    regression-discontinuity designs. Econometrica 82, 2295–2326. https://doi.org/10.3982/ECTA11757
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import partial

import numpy as np

from estimation.adjustment import common_coefficients
from estimation.arrays import Matrix, Vector
from estimation.cluster_ladder import SINGULAR, cluster_rule
from estimation.kernels import count_inside, kernel_values
from estimation.line_fit import Bandwidths, LineFit, too_few
from estimation.sample import Sample, Side, SideName
from estimation.variance import (
    clustered_spread,
    fit_residuals,
    independent_spread,
    mass_point_starts,
    neighbour_residuals,
)
from estimation.worst_bias import worst_bias


@dataclass(frozen=True, slots=True, kw_only=True)
class SideFit:
    """One weighted fit on the `len(weights[0])` nearest rows of a side.

    Attributes
    ----------
    basis
        r(d) with d = |x|, shape (m, p + 1).
    weights
        Row ν holds the weights of the coefficient of d^ν, shape (p + 1, m).
    kernel
        k = K(d/h)·weight, shape (m,).
    leverage
        k_i r_i′ A⁻¹ r_i, shape (m,).
    """

    basis: Matrix
    weights: Matrix
    kernel: Vector
    leverage: Vector


def fit_side(
    side: Side, *, bandwidth: float, kernel: str, order: int, name: str = "beside", resolution: float = 0.0
) -> SideFit:
    """Weights of every coefficient of one side's local fit in d = |x|.

    Solved by QR of √k·r(d/h), scaled by the bandwidth so that its condition does not depend on units.

    Raises
    ------
    CannotEstimate
        When fewer than p + 2 distinct scores have a positive weight.
    """
    count = count_inside(side.distance, bandwidth, kernel)
    require_distinct(side, count, order=order, bandwidth=bandwidth, name=name, resolution=resolution)
    distance = side.distance[:count]
    k = kernel_values(distance, bandwidth, kernel) * side.weights(count)
    basis = np.vander(distance / bandwidth, order + 1, increasing=True)
    root = np.sqrt(k)
    q, r = np.linalg.qr(basis * root[:, None])
    weights = np.linalg.solve(r, q.T) * root
    powers = bandwidth ** np.arange(order + 1)
    return SideFit(
        basis=basis * powers,
        weights=weights / powers[:, None],
        kernel=k,
        leverage=np.einsum("ij,ij->i", q, q),
    )


def require_distinct(
    side: Side, count: int, *, order: int, bandwidth: float, name: str, resolution: float
) -> None:
    """Refuse a side that can't carry a fit of this order with anything left to judge it by."""
    found = len(mass_point_starts(side.distance[: min(count, 4096)], resolution))
    if found < order + 2 and count > 4096:
        found = len(mass_point_starts(side.distance[:count], resolution))
    if found < order + 2:
        raise too_few(found, bandwidth=bandwidth, name=name, order=order)


def fit_rows(
    sample: Sample, bandwidths: Bandwidths, *, kernel: str, order: int, variance: str, adjust: bool = False
) -> LineFit:
    """The fit at the line straight from the rows: the slow, obvious way that the ladder is held to.

    Parameters
    ----------
    sample
        Rows of both sides; any donut is already taken out.
    variance
        "neighbour", "hc0" … "hc3"; with clusters the sandwich for "hc0" and "hc1", else the jackknife, which fits
        again without each cluster in turn (a clustered `Line` asks `estimation.cluster_ladder` instead).
    adjust
        Whether the sample's covariates adjust the earlier variables (see `estimation.adjustment`).
    """
    # The jackknife scores a cluster that a side can't do without by the fit's own residuals.
    jackknife = sample.below.cluster is not None and cluster_rule(variance) == "jackknife"
    residuals = "hc0" if jackknife else variance
    parts = {
        name: _rows_of_side(sample, name, side, bandwidths, kernel=kernel, order=order, variance=residuals)
        for name, side in sample.sides
    }
    below, above = parts["below"], parts["above"]
    sign = sample.treated_sign
    covariance, clusters = _joint_spread(sample, below, above, "plain")
    robust_covariance, _ = _joint_spread(sample, below, above, "robust")
    if jackknife:
        covariance, robust_covariance = _jackknife(sample, parts, bandwidths, kernel=kernel, order=order)
    return LineFit(
        levels_below=below.level,
        levels_above=above.level,
        jump=sign * (above.level - below.level),
        covariance=covariance,
        robust_jump=sign * (above.robust_level - below.robust_level),
        robust_covariance=robust_covariance,
        unit_bias=below.unit_bias + above.unit_bias,
        adjustment=(
            common_coefficients(
                below.partial_products + above.partial_products, targets=1 + int(sample.has_take_up)
            )
            if adjust
            else np.zeros((0, len(below.level)))
        ),
        count_below=below.count,
        count_above=above.count,
        effective=below.effective + above.effective,
        clusters=clusters,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class _SideRows:
    level: Vector
    robust_level: Vector
    plain_scores: Matrix
    robust_scores: Matrix
    unit_bias: float
    count: int
    effective: float
    partial_products: Matrix  # Σ k ṽ ṽ′ with ṽ residual from the order-p fit


def _rows_of_side(
    sample: Sample,
    name: SideName,
    side: Side,
    bandwidths: Bandwidths,
    *,
    kernel: str,
    order: int,
    variance: str,
) -> _SideRows:
    bandwidth, pilot = bandwidths.of(name)
    fit = fit_side(
        side, bandwidth=bandwidth, kernel=kernel, order=order, name=name, resolution=sample.resolution
    )
    bias_fit = fit_side(
        side, bandwidth=pilot, kernel=kernel, order=order + 1, name=name, resolution=sample.resolution
    )
    count, pilot_count = fit.weights.shape[1], bias_fit.weights.shape[1]
    rows = max(count, pilot_count)
    plain = np.zeros(rows)
    plain[:count] = fit.weights[0]
    left_over = float(fit.weights[0] @ side.distance[:count] ** (order + 1))
    robust = plain.copy()
    robust[:pilot_count] -= left_over * bias_fit.weights[order + 1]
    centre = side.values[:rows].mean(axis=0)
    values = side.values[:rows] - centre
    if variance == "neighbour":
        residual = robust_residual = neighbour_residuals(
            side.distance, side.values, resolution=sample.resolution
        )[:rows]
    else:
        residual = _fitted_residuals(side, values, fit, variance)
        robust_residual = _fitted_residuals(side, values, bias_fit, variance)
    fitted = fit.basis @ (fit.weights @ values[:count])
    left = values[:count] - fitted
    return _SideRows(
        level=plain @ values + centre,
        robust_level=robust @ values + centre,
        plain_scores=plain[:, None] * residual,
        robust_scores=robust[:, None] * robust_residual,
        unit_bias=worst_bias(side.distance[:count], fit.weights[0], order=order),
        count=count,
        effective=float(fit.kernel.sum() ** 2 / (fit.kernel @ fit.kernel)),
        partial_products=left.T @ (fit.kernel[:, None] * left),
    )


def _fitted_residuals(side: Side, values: Matrix, fit: SideFit, kind: str) -> Matrix:
    """Residuals from one side's fit over the leading rows; past the fit's own window its curve is continued."""
    rows, inside = len(values), fit.weights.shape[1]
    parameters = fit.basis.shape[1]
    coefficients = fit.weights @ values[:inside]
    basis = fit.basis
    leverage = fit.leverage
    if rows > inside:
        basis = np.vander(side.distance[:rows], parameters, increasing=True)
        leverage = np.concatenate((leverage, np.zeros(rows - inside)))
    return fit_residuals(
        values, basis[:rows] @ coefficients, leverage[:rows], kind=kind, rows=inside, parameters=parameters
    )


def _joint_spread(
    sample: Sample, below: _SideRows, above: _SideRows, which: str
) -> tuple[Matrix, int | None]:
    low = below.plain_scores if which == "plain" else below.robust_scores
    high = above.plain_scores if which == "plain" else above.robust_scores
    if sample.below.cluster is None or sample.above.cluster is None:
        return independent_spread(low) + independent_spread(high), None
    # Row by row, this is the sandwich; `fit_rows` puts the jackknife in its place where the study wants that.
    scores = np.concatenate((-low, high))
    cluster = np.concatenate((sample.below.cluster[: len(low)], sample.above.cluster[: len(high)]))
    counted = np.concatenate((sample.below.weights(len(low)), sample.above.weights(len(high)))) > 0.0
    spread = clustered_spread(scores[counted], cluster[counted])
    return spread.covariance, spread.clusters


def _jackknife(
    sample: Sample, parts: Mapping[SideName, _SideRows], bandwidths: Bandwidths, *, kernel: str, order: int
) -> tuple[Matrix, Matrix]:
    """(G − 1)/G · Σ_g (jump without g − jump)², plain and bias-corrected, by fitting again without each cluster."""
    changes: dict[int, Matrix] = {}
    for name, side in sample.sides:
        rows, sign = parts[name], -1.0 if name == "below" else 1.0
        assert side.cluster is not None
        inside = side.cluster[: len(rows.plain_scores)]
        centred = side.values[: len(inside)] - side.values[: len(inside)].mean(axis=0)
        fit = partial(_levels, side, centred, bandwidths.of(name), kernel, order)
        whole, whole_left = fit(np.ones(len(inside)))
        for g in np.unique(inside[side.weights(len(inside)) > 0.0]):
            levels, left = fit((inside != g).astype(np.float64))
            change = whole - levels
            scores = np.stack((rows.plain_scores[inside == g], rows.robust_scores[inside == g])).sum(axis=1)
            stands = left / whole_left > SINGULAR
            change[0] = change[0] if stands[0] else scores[0]
            change[1] = change[1] if stands.all() else scores[1]
            changes[int(g)] = changes.get(int(g), 0.0) + sign * change
    every = np.stack(list(changes.values()))
    share = (len(every) - 1) / len(every)
    return share * every[:, 0].T @ every[:, 0], share * every[:, 1].T @ every[:, 1]


def _levels(
    side: Side, values: Matrix, widths: tuple[float, float], kernel: str, order: int, keep: Vector
) -> tuple[Matrix, Vector]:
    """((plain, bias-corrected) levels with rows weighted by `keep`, shape (2, v); determinants of both fits' A)."""
    (bandwidth, pilot), size = widths, order + 1
    found = []
    for width, parameters in ((bandwidth, size), (pilot, size + 1)):
        count = count_inside(side.distance, width, kernel)
        distance = side.distance[:count]
        k = kernel_values(distance, width, kernel) * side.weights(count) * keep[:count]
        basis = np.vander(distance / width, parameters, increasing=True)
        q, r = np.linalg.qr(basis * np.sqrt(k)[:, None])
        determinant = float(np.prod(np.diagonal(r))) ** 2
        # Where the rows left can't carry a fit its change is not asked for.
        weights = np.linalg.solve(r, q.T) * np.sqrt(k) if determinant > 0.0 else np.zeros(basis.T.shape)
        found.append((count, weights, determinant))
    (count, weights, near), (pilot_count, pilot_weights, far) = found
    left_over = float(weights[0] @ (side.distance[:count] / pilot) ** size)
    level = weights[0] @ values[:count]
    shift = left_over * (pilot_weights[size] @ values[:pilot_count])
    return np.stack((level, level - shift)), np.array([near, far])
