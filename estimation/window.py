r"""How near is as good as by lot: the window in which measured covariates do not tell the sides apart.

References
----------
Cattaneo, M., Frandsen, B. & Titiunik, R. (2015). Randomization inference in the regression discontinuity design.
    Journal of Causal Inference 3, 1–24. https://doi.org/10.1515/jci-2013-0010
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from estimation.arrays import Mask, Matrix, Vector
from estimation.errors import CannotEstimate
from estimation.permutation import permutation_p

MOST_STEPS: Final = 200
# Draws for each covariate and window: they only decide whether p is near 0.15.
_DRAWS: Final = 1_000
# From this many rows the normal law of the assignments serves: it is within a draw's own error there.
_NORMAL_FROM: Final = 60


@dataclass(frozen=True, slots=True, kw_only=True)
class WindowStep:
    """One window that was looked at: half width, rows, and the covariate that told the sides apart best."""

    half: float
    below: int
    above: int
    smallest_p: float | None
    covariate: str | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Window:
    """The window chosen, in score minus cutoff, and the steps that led to it.

    Attributes
    ----------
    chosen_by
        "covariates", or "count" where there are none to judge by.
    """

    low: float
    high: float
    below: int
    above: int
    smallest_p: float | None
    chosen_by: str
    steps: tuple[WindowStep, ...]


def choose_window(
    *,
    position: Vector,
    above: Mask,
    covariates: Matrix | None = None,
    names: Sequence[str] = (),
    minimum: int = 10,
    threshold: float = 0.15,
    seed: int = 0,
) -> Window:
    """The largest symmetric window in which, as in every smaller one, no covariate differs with p below `threshold`.

    Windows grow by whole mass points and by at least a twentieth of their rows, from the first with `minimum` rows on
    each side, at most `MOST_STEPS` of them. Without covariates the first one is taken.

    Parameters
    ----------
    position, above
        Shape (n,).
    covariates
        Shape (n, k), NaN where missing: such rows sit out that covariate's comparison.

    Raises
    ------
    CannotEstimate
        When no window holds `minimum` rows a side, or the first one already fails.
    """
    order = np.argsort(np.abs(position), kind="stable")
    distance, upper = np.abs(position)[order], above[order]
    columns = None if covariates is None else covariates[order]
    ends = _window_ends(distance, upper, minimum)
    if columns is None or columns.shape[1] == 0:
        only = _step(distance, upper, None, names, ends[0], seed)
        return _window((only,), only, "count")
    steps: list[WindowStep] = []
    best: WindowStep | None = None
    for end in ends[:MOST_STEPS]:
        step = _step(distance, upper, columns, names, end, seed)
        steps.append(step)
        if step.smallest_p is not None and step.smallest_p < threshold:
            break
        best = step
    if best is None:
        first = steps[0]
        raise CannotEstimate(
            f"No window is as good as by lot: in the smallest, within {first.half:.4g} of the line with {first.below} "
            f"rows below and {first.above} above, {first.covariate} already differs between the sides "
            f"(p = {first.smallest_p:.3f}).",
            "Rely on the local polynomial answers, or give a window of your own.",
        )
    return _window(tuple(steps), best, "covariates")


def _window(steps: tuple[WindowStep, ...], chosen: WindowStep, by: str) -> Window:
    return Window(
        low=-chosen.half,
        high=chosen.half,
        below=chosen.below,
        above=chosen.above,
        smallest_p=chosen.smallest_p,
        chosen_by=by,
        steps=steps,
    )


def _window_ends(distance: Vector, upper: Mask, minimum: int) -> list[int]:
    """Numbers of rows at which windows end: whole mass points, growing by at least a twentieth."""
    last_of_point = np.append(np.flatnonzero(np.diff(distance) > 0.0), len(distance) - 1)
    above_rows = np.cumsum(upper)[last_of_point]
    below_rows = last_of_point + 1 - above_rows
    large_enough = np.flatnonzero((above_rows >= minimum) & (below_rows >= minimum))
    if not len(large_enough):
        raise CannotEstimate(
            f"No window holds {minimum} rows on each side of the line.",
            "Local randomisation needs more rows near the line.",
        )
    ends = [int(last_of_point[large_enough[0]]) + 1]
    while len(ends) < MOST_STEPS:
        following = np.searchsorted(last_of_point + 1, int(np.ceil(1.05 * ends[-1])), side="left")
        if following >= len(last_of_point):
            break
        ends.append(int(last_of_point[following]) + 1)
    return ends


def _step(
    distance: Vector, upper: Mask, columns: Matrix | None, names: Sequence[str], end: int, seed: int
) -> WindowStep:
    side = upper[:end]
    smallest, which = None, None
    for j in range(0 if columns is None else columns.shape[1]):
        assert columns is not None
        known = ~np.isnan(columns[:end, j])
        values, treated = columns[:end, j][known], side[known]
        if min(treated.sum(), (~treated).sum()) < 2:
            continue
        p = _balance_p(values, treated, seed)
        if smallest is None or p < smallest:
            smallest, which = p, (names[j] if j < len(names) else f"covariate {j + 1}")
    return WindowStep(
        half=float(distance[end - 1]),
        below=int((~side).sum()),
        above=int(side.sum()),
        smallest_p=smallest,
        covariate=which,
    )


def _balance_p(values: Vector, treated: Mask, seed: int) -> float:
    rows, count = len(values), int(treated.sum())
    if rows < _NORMAL_FROM or len(np.unique(values[:64])) < 3:
        return permutation_p(values, treated, draws=_DRAWS, seed=seed)[0]
    from scipy.special import ndtr  # already loaded by estimation.permutation

    spread = np.sqrt(values.var(ddof=1) * rows / (count * (rows - count)))
    gap = abs(float(values[treated].mean() - values[~treated].mean()))
    return float(2.0 * ndtr(-gap / spread)) if spread > 0.0 else 1.0
