r"""How much of a pooled effect is each site's.

The pooled effect over sites normalised at their own cutoffs is Σ w_c τ_c with w_c = f_c(0)P(c)/Σ: the share of site c
among the units at the line.

References
----------
Cattaneo, M., Keele, L., Titiunik, R. & Vazquez-Bare, G. (2016). Interpreting regression discontinuity designs with
    multiple cutoffs. Journal of Politics 78, 1229–1248. https://doi.org/10.1086/686802
"""

from __future__ import annotations

import numpy as np

from estimation.arrays import Codes, Vector
from estimation.local_polynomial import fit_side
from estimation.sample import Side


def shares_at_line(
    side: Side, site: Codes, sites: int, *, bandwidth: float, kernel: str, order: int, resolution: float = 0.0
) -> Vector:
    """Share of the units at the line that each site holds, seen from one side, shape (sites,), adding to one.

    The local fit of "is of this site" at the line, Σ_{i of the site} l_i with the pooled estimate's own weights l. It
    estimates w_c = f_c(0)P(c)/Σ, and it is the weight with which the site's outcomes enter the pooled level. A site
    with few rows near the line may come out a little below zero.

    Parameters
    ----------
    side
        One side of the pooled sample.
    site
        Site of each of its rows, shape (n,).
    """
    fit = fit_side(
        side, bandwidth=bandwidth, kernel=kernel, order=order, name="beside", resolution=resolution
    )
    inside = site[: fit.weights.shape[1]]
    return np.bincount(inside, weights=fit.weights[0], minlength=sites).astype(np.float64)
