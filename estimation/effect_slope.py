r"""How the effect changes as the cutoff moves a little: the derivative of the effect at the line.

The effect at c is τ(c) = μ₁(c) − μ₀(c), so τ′(c) is the difference of the two sides' slopes there; for a fuzzy study,
with jumps j and differences of slopes j′ of outcome and take-up and r = j_y/j_t, τ′ = (j_y′ − r j_t′)/j_t. It is what a
small move of the cutoff does to the effect where the move itself changes nothing else. Fits are one order up, as a
slope asks for, at the effect's own bandwidths.

References
----------
Dong, Y. & Lewbel, A. (2015). Identifying the effect of changing the policy threshold in regression discontinuity
    models. Review of Economics and Statistics 97, 1081–1092. https://doi.org/10.1162/REST_a_00510
"""

from __future__ import annotations

import numpy as np

from estimation.arrays import Matrix
from estimation.inference import Interval, interval
from estimation.line import Line
from estimation.line_fit import Bandwidths
from estimation.local_polynomial import fit_side
from estimation.variance import (
    clustered_spread,
    fit_residuals,
    independent_spread,
    neighbour_residuals,
)


def effect_slope(line: Line, bandwidths: Bandwidths) -> Interval:
    """τ′ at the line with its interval, in outcome per unit of score (for a fuzzy study per unit of take-up too).

    Raises
    ------
    CannotEstimate
        When a side can't carry the fit one order up.
    """
    sample, choices = line.sample, line.choices
    values, scores, clusters = [], [], []
    targets = 1 + int(line.fuzzy)
    for name, side in sample.sides:
        fit = fit_side(
            side,
            bandwidth=bandwidths.of(name)[0],
            kernel=choices.kernel,
            order=choices.order + 1,
            name=name,
            resolution=sample.resolution,
        )
        rows = fit.weights.shape[1]
        inside = side.values[:rows, :targets]
        if choices.variance == "neighbour" and side.cluster is None:
            residual = neighbour_residuals(
                side.distance, side.values[:, :targets], resolution=sample.resolution
            )[:rows]
        else:
            residual = fit_residuals(
                inside,
                fit.basis @ (fit.weights @ inside),
                fit.leverage,
                kind=choices.variance,
                rows=rows,
                parameters=choices.order + 2,
            )
        sign = sample.treated_sign * (1.0 if name == "above" else -1.0)
        # Distances grow downward below the line: a slope in them is minus one in the score.
        slope_sign = sign * (1.0 if name == "above" else -1.0)
        weights = np.stack((sign * fit.weights[0], slope_sign * fit.weights[1]))
        values.append(weights @ inside)
        scores.append(weights[:, :, None] * residual)
        if side.cluster is not None:
            clusters.append(side.cluster[:rows])
    jump, slope = values[0] + values[1]
    jump_scores, slope_scores = np.concatenate(scores, axis=1)
    estimate, linear = float(slope[0]), slope_scores[:, 0]
    if line.fuzzy:
        ratio = jump[0] / jump[1]
        estimate = float((slope[0] - ratio * slope[1]) / jump[1])
        # d τ′ = [dj_y′ − r dj_t′ − j_t′ dr − τ′ dj_t]/j_t with dr = (dj_y − r dj_t)/j_t.
        change = (jump_scores[:, 0] - ratio * jump_scores[:, 1]) / jump[1]
        linear = (
            slope_scores[:, 0] - ratio * slope_scores[:, 1] - slope[1] * change - estimate * jump_scores[:, 1]
        ) / jump[1]
    return _interval(estimate, np.asarray(linear)[:, None], clusters, choices.level)


def _interval(estimate: float, linear: Matrix, clusters: list[np.ndarray], level: float) -> Interval:
    if not clusters:
        return interval(estimate, float(np.sqrt(independent_spread(linear)[0, 0])), level=level)
    spread = clustered_spread(linear, np.concatenate(clusters))
    error = float(np.sqrt(spread.covariance[0, 0]))
    return interval(estimate, error, level=level, degrees=float(max((spread.clusters or 2) - 1, 1)))
