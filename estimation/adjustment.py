r"""Covariates measured before assignment, with one coefficient vector for both sides.

γ = (Σ k z̃ z̃′)⁻¹ Σ k z̃ ỹ, where ˜ is the residual from side-specific order-p fits of the same kernel; the
estimate uses y − z′γ. It buys precision; where a covariate itself jumps at the line it would move the
estimate, and the adjustment is not defensible.

References
----------
Calonico, S., Cattaneo, M., Farrell, M. & Titiunik, R. (2019). Regression discontinuity designs using
    covariates. Review of Economics and Statistics 101, 442–451. https://doi.org/10.1162/rest_a_00760
"""

from __future__ import annotations

import numpy as np

from estimation.arrays import Matrix
from estimation.line_fit import LineFit


def common_coefficients(products: Matrix, *, targets: int) -> Matrix:
    """γ for each of the first `targets` variables, shape (…, k, targets).

    Parameters
    ----------
    products
        Σ k ṽ ṽ′ over both sides, shape (…, v, v), targets first and then the k covariates.

    Returns
    -------
    NaN where the covariates do not vary, or repeat each other, inside the window.
    """
    inside = products[..., targets:, targets:]
    diagonal = np.diagonal(inside, axis1=-2, axis2=-1)
    scale = np.sqrt(np.where(diagonal > 0.0, diagonal, np.nan))
    correlation = inside / (scale[..., :, None] * scale[..., None, :])
    usable = np.isfinite(correlation).all(axis=(-2, -1))
    identity = np.eye(inside.shape[-1])
    correlation = np.where(usable[..., None, None], correlation, identity)
    usable &= np.linalg.cond(correlation) < 1e12
    correlation = np.where(usable[..., None, None], correlation, identity)
    against = products[..., targets:, :targets] / scale[..., None]
    gamma = np.linalg.solve(correlation, against) / scale[..., None]
    return np.where(usable[..., None, None], gamma, np.nan)


def adjusted(fit: LineFit, targets: int) -> LineFit:
    """The fit of y − z′γ (and of take-up likewise) in place of y; the covariates drop out of the variables."""
    gamma = fit.adjustment
    change = np.concatenate((np.eye(targets), -gamma.T), axis=1)
    return LineFit(
        # Levels stay those of the outcome itself: y − z′γ has no level that a reader would recognise.
        levels_below=fit.levels_below[:targets],
        levels_above=fit.levels_above[:targets],
        jump=change @ fit.jump,
        covariance=change @ fit.covariance @ change.T,
        robust_jump=change @ fit.robust_jump,
        robust_covariance=change @ fit.robust_covariance @ change.T,
        unit_bias=fit.unit_bias,
        adjustment=gamma,
        count_below=fit.count_below,
        count_above=fit.count_above,
        effective=fit.effective,
        clusters=fit.clusters,
    )
