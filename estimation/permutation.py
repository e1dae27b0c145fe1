r"""Assignments that might have been: how a sum over the treated rows would vary had they been drawn by lot.

Of N rows m are treated, and every choice of m rows is as likely as any other. The choices are all listed where
they are few, and drawn with a seed where they are not; of very many rows the sum is normal (finite-population
central limit theorem; Hájek 1960).

References
----------
Hájek, J. (1960). Limiting distributions in simple random sampling from a finite population. Publications of
    the Mathematical Institute of the Hungarian Academy of Sciences 5, 361–374.
Phipson, B. & Smyth, G. (2010). Permutation p-values should never be zero. Statistical Applications in Genetics
    and Molecular Biology 9, 39. https://doi.org/10.2202/1544-6115.1585  (counting the real assignment among the draws)
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import combinations
from math import comb
from typing import Final

import numpy as np
from scipy.special import gammaln, ndtr

from estimation.arrays import Mask, Matrix, Vector

# Assignments listed one by one up to this number.
LISTED_UP_TO: Final = 20_000
# Rows beyond which the normal law replaces draws: there the two agree to well under a draw's own error.
DRAWN_UP_TO: Final = 2_000
_CHUNK: Final = 400_000  # random keys held at once


@dataclass(frozen=True, slots=True, kw_only=True)
class Assignments:
    """Sums over the treated rows of each assignment.

    Attributes
    ----------
    sums
        Shape (draws, v): Σ over the rows it treats of each of the v columns.
    listed
        Whether these are all assignments, the real one among them.
    """

    sums: Matrix
    listed: bool


def assignments(columns: Matrix, treated: int, *, draws: int, seed: int) -> Assignments:
    """Sums of each column over the treated rows, over all assignments or over seeded draws.

    Parameters
    ----------
    columns
        Shape (N, v).
    treated
        Rows treated in each assignment, 0 < treated < N.
    """
    rows = len(columns)
    if comb(rows, treated) <= LISTED_UP_TO:
        chosen = np.array(list(combinations(range(rows), treated)))
        return Assignments(sums=columns[chosen].sum(axis=1), listed=True)
    # Draw the smaller group and take it from the total where that group is the untreated one.
    small = min(treated, rows - treated)
    sums = np.concatenate([columns[members].sum(axis=1) for members in _members(rows, small, draws, seed)])
    return Assignments(sums=sums if small == treated else columns.sum(axis=0) - sums, listed=False)


def _members(rows: int, size: int, draws: int, seed: int) -> Iterator[np.ndarray]:
    """Random subsets of `size` rows, shape (some draws, size), in batches of bounded memory."""
    rng = np.random.default_rng(seed)
    batch = max(1, min(draws, _CHUNK // rows))
    for start in range(0, draws, batch):
        keys = rng.random((min(batch, draws - start), rows), dtype=np.float32)
        yield np.argpartition(keys, size - 1, axis=1)[:, :size]


def by_normal_law(rows: int, treated: int) -> bool:
    """Whether the assignments are too many to list and the rows too many to be worth drawing them."""
    return rows > DRAWN_UP_TO and comb(rows, treated) > LISTED_UP_TO


def difference_in_means(sums: Vector, total: float, treated: int, rows: int) -> Vector:
    """Mean over the treated rows less mean over the rest, from sums over the treated rows."""
    return np.asarray(sums / treated - (total - sums) / (rows - treated))


def permutation_p(
    values: Vector, treated: Mask, *, draws: int, seed: int, found: Assignments | None = None
) -> tuple[float, str]:
    """Two-sided p-value of a difference in means under assignment by lot, and how it was computed.

    Parameters
    ----------
    found
        Assignments of the centred values (their first column), where the caller has them.

    Returns
    -------
    (p, method) with method "exact", "drawn" or "normal". A binary column is exact by the hypergeometric law.
    """
    rows, count = len(values), int(treated.sum())
    observed = float(values[treated].mean() - values[~treated].mean())
    distinct = np.unique(values)
    if len(distinct) == 1:
        return 1.0, "exact"
    # Differences that are equal but for rounding count as equal.
    edge = abs(observed) - 1e-9 * float(values.max() - values.min())
    if len(distinct) == 2:
        return _hypergeometric_p(
            values == distinct[1], count, edge / float(distinct[1] - distinct[0])
        ), "exact"
    if by_normal_law(rows, count):
        spread = np.sqrt(values.var(ddof=1) * rows / (count * (rows - count)))
        return float(2.0 * ndtr(-abs(observed) / spread)), "normal"
    if found is None:
        found = assignments((values - values.mean())[:, None], count, draws=draws, seed=seed)
    extreme = np.abs(difference_in_means(found.sums[:, 0], 0.0, count, rows)) >= edge
    if found.listed:
        return float(extreme.mean()), "exact"
    return float((1 + extreme.sum()) / (1 + len(extreme))), "drawn"


def _hypergeometric_p(ones: Mask, treated: int, edge: float) -> float:
    """P(|difference in shares| ≥ edge) when the ones among the treated are hypergeometric."""
    rows, total = len(ones), int(ones.sum())
    k = np.arange(max(0, total - (rows - treated)), min(total, treated) + 1, dtype=np.float64)

    def log_choose(n: float, chosen: Vector) -> Vector:
        return np.asarray(gammaln(n + 1) - gammaln(chosen + 1) - gammaln(n - chosen + 1))

    chance = np.exp(
        log_choose(total, k)
        + log_choose(rows - total, treated - k)
        - log_choose(rows, np.array(float(treated)))
    )
    difference = np.abs(k / treated - (total - k) / (rows - treated))
    return float(min(chance[difference >= edge].sum(), 1.0))
